"""Departures and procedures as they are given in Python."""

import numpy as np
import pandas as pd
import pytest

from withstand.departures import Fan, HeavyTails, Serial, Skew, WorstFan
from withstand.errors import ScenarioError
from withstand.procedures import make_procedure
from withstand.scenario.choices import chosen_axes, chosen_procedures
from withstand.study.study import Study


@pytest.fixture(scope="module")
def study():
    generator = np.random.default_rng(5)
    table = pd.DataFrame({name: generator.normal(size=20) for name in ("y", "x", "z")})
    return Study.from_frame(table, "y ~ x + z", focus=["x", "z"])


def test_departures_kinds_and_stacks(study):
    axes = chosen_axes([Fan([2, 4], along="x"), "skew", (Fan([2, 3]), Skew(1))], study)
    assert [axis.departure.kind for axis in axes] == ["fan", "skew", "fan"]
    assert axes[1].departure.ladder == Skew.default_ladder
    assert [(companion.kind, severity) for companion, severity in axes[2].companions] == [("skew", 1.0)]


def test_worst_fan_is_bound_to_the_focus(study):
    first, other = chosen_axes([WorstFan(), WorstFan(against="z")], study)
    assert (first.departure.against, other.departure.against) == ("x", "z")
    with pytest.raises(ScenarioError, match=r"'worst-fan' acts against 'q'.*Known: x, z"):
        chosen_axes([WorstFan(against="q")], study)


@pytest.mark.parametrize(
    ("given", "message"),
    [
        (Fan(2), "departures is Fan"),
        ("fan", r"departures is 'fan', not a list\. Put it in brackets"),
        ([3.0], r"departures: 3\.0 is no departure"),
        (["skwe"], "unknown departure 'skwe'.*Did you mean 'skew'"),
        ([[]], "a stack is empty"),
        ([Serial(0.2)], "'serial' makes no sense here: the study names no order"),
        ([(Fan(2), Skew([1, 2]))], "'skew' acts all the while here, and has not one severity"),
        ([(Skew(1), HeavyTails(0.2))], "'skew' and 'heavy-tails' both set"),
        ([Fan(2, along="q")], "no numeric column 'q'"),
    ],
)
def test_what_makes_no_sense_is_refused(study, given, message):
    with pytest.raises(ScenarioError, match=message):
        chosen_axes(given, study)


def test_procedures_by_name_or_themselves(study):
    made = make_procedure("hc3")
    assert [one.identity for one in chosen_procedures(["ols", made], study)] == ["ols", "hc3"]
    assert chosen_procedures([made], study)[0] is made


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ("ols", "procedures is 'ols', not a list"),
        (["osl"], "unknown procedure 'osl'.*Did you mean 'ols'"),
        (["cr1"], "'cr1' has no answer for this study: .*groups"),
    ],
)
def test_procedures_that_cannot_answer_are_refused(study, given, message):
    with pytest.raises(ScenarioError, match=message):
        chosen_procedures(given, study)
