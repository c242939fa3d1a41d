import json

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

from withstand.departures import Fan, Serial
from withstand.departures.world import World
from withstand.errors import ScenarioError
from withstand.lab.budget import DETECTED, what_rows_buy
from withstand.lab.observed import instead_of_observed_power
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.size_ranges import size_over_ranges
from withstand.lab.sizing import size_study
from withstand.procedures.base import make_procedure
from withstand.study.columns import Drawn, InSequence, Levels
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study
from withstand.study.study import Study

OLS = (make_procedure("ols"),)
POWER = {"targets": Targets(holds=False, power=0.9)}


def two_arms(sd=3.0, effect=1.5, **changes):
    plan = StudyPlan(20, {"arm": Levels(("a", "b"))}, error_sd=sd, **changes)
    return planned_study(plan, "y ~ arm", focus="arm", effect={"arm": effect})


def data(effect=None):
    rng = np.random.default_rng(1)
    frame = pd.DataFrame({"x": rng.normal(size=20), "week": np.arange(20.0)})
    frame["y"] = 0.4 * frame["x"] + rng.normal(size=20)
    return Study.from_frame(frame, "y ~ x", focus="x", order="week", effect=effect)


def test_every_corner_is_the_answer_to_its_own_question():
    found = size_over_ranges(two_arms(), OLS, (), {"error_sd": [2.0, 4.0], "effect": [1.0, 2.0]}, **POWER)
    expected = [size_study(two_arms(sd, effect), OLS, **POWER).n for sd in (2.0, 4.0) for effect in (1.0, 2.0)]
    assert found.frame["n"].tolist() == expected
    assert list(found.frame["error_sd"]) == [2.0, 2.0, 4.0, 4.0]
    least, most = min(expected), max(expected)
    told = f"ols: {least} rows (error_sd 2, effect 2) to {most} rows (error_sd 4, effect 1)."
    assert found.sentences == (told,)
    assert json.loads(json.dumps(found.as_record(), allow_nan=False))[0]["n"] == expected[0]


def test_severity_is_an_input_like_any_other():
    worlds = (World(((Fan(along="x"), 2.0),)),)
    study = data({"x": 0.6})
    found = size_over_ranges(study, (make_procedure("hc3"),), worlds, {"fan": [1.5, 5.0]}, rule="extend", **POWER)
    single = [
        size_study(study, (make_procedure("hc3"),), (World(((Fan(along="x"), ratio),)),), rule="extend", **POWER).n
        for ratio in (1.5, 5.0)
    ]
    assert found.frame["n"].tolist() == single


def test_a_corner_without_an_answer_is_counted():
    columns = {"week": InSequence()}
    study = planned_study(StudyPlan(20, columns, error_sd=1.0), "y ~ week", order="week", focus="week")
    found = size_over_ranges(study, OLS, (World(((Serial(), 0.1),)),), {"serial": [0.0, 0.5]})
    assert found.frame["n"].isna().tolist() == [False, True]
    assert "at 1 of 2 corners there is no number of rows" in found.sentences[0]


def test_attrition_is_an_input_of_a_plan():
    found = size_over_ranges(two_arms(), OLS, (), {"attrition": [0.0, 0.2]}, effort=Effort(method="auto"), **POWER)
    full, lossy = found.frame["n"]
    # A fifth more rows are collected for as many analysed; which are lost is chance, so balance is a little worse.
    assert 0.8 * lossy == pytest.approx(full, rel=0.06)


def test_collinearity_costs_rows():
    columns = {"x": Drawn("normal", mean=0, sd=1), "z": Drawn("normal", mean=0, sd=1)}
    study = planned_study(StudyPlan(20, columns, error_sd=1.0), "y ~ x + z", focus="x", effect={"x": 1.0})
    found = size_over_ranges(study, OLS, (), {"x~z": [0.0, 0.8]}, **POWER)
    for r, row in zip((0.0, 0.8), found.frame.itertuples(), strict=True):
        # Given z, the sum of squares of x about its line on z is (1 - r^2) chi-square on n - 2 degrees of freedom.
        def power(n, left=1 - r**2):
            s = stats.chi2.ppf((np.arange(2000) + 0.5) / 2000, n - 2)
            return np.mean(stats.ncf.sf(stats.t.isf(0.025, n - 3) ** 2, 1, n - 3, left * s))

        assert row.low <= next(n for n in range(8, 999) if power(n) >= 0.9) <= row.high
    with pytest.raises(ScenarioError, match="neither 'arm' nor 'arm2'"):
        size_over_ranges(two_arms(), OLS, (), {"arm ~ arm2": [0.1]}, **POWER)


@pytest.mark.parametrize(
    ("ranges", "words"),
    [
        ({}, "no ranges"),
        ({"error_sd": []}, "'error_sd'"),
        ({"eror_sd": [1.0]}, "'eror_sd'"),
        ({"fan": [1.0]}, "'fan'"),
        ({"error_sd": [-1.0]}, "-1"),
        ({"error_sd": list(range(1, 10)), "effect": list(range(1, 10))}, "81 corners"),
    ],
)
def test_ranges_that_cannot_be_gone_over_are_refused(ranges, words):
    with pytest.raises(ScenarioError, match=words) as caught:
        size_over_ranges(two_arms(), OLS, (), ranges, **POWER)
    assert caught.value.remedy
    if "error_sd" not in ranges:
        return
    with pytest.raises(ScenarioError, match="is an input of a plan"):
        size_over_ranges(data(), OLS, (), {"attrition": [0.1]})


def test_what_a_given_number_of_rows_buys():
    frame = what_rows_buy(two_arms(), OLS, [20, 60])
    for row in frame.itertuples():
        asked = {"targets": Targets(holds=False, power=row.power - 1e-9)}
        assert size_study(two_arms(), OLS, **asked).n == row.n
        assert row.coverage == pytest.approx(0.95, abs=1e-8)
        assert row.method == "exact"
        # At the detectable effect the power is what it says.
        again = what_rows_buy(two_arms(), OLS, [row.n], effect=row.detectable_effect)
        assert again["power"][0] == pytest.approx(DETECTED, abs=1e-6)
    wide, narrow = frame["half_width"]
    assert narrow < wide
    with pytest.raises(ScenarioError, match="0 rows"):
        what_rows_buy(two_arms(), OLS, [0])


def test_detectable_effect_of_a_joint_term_is_a_factor():
    plan = StudyPlan(12, {"arm": Levels(("a", "b", "c"))}, error_sd=1.0)
    study = planned_study(plan, "y ~ arm", focus="arm", effect={"arm": [0.5, 1.0]})
    factor = what_rows_buy(study, OLS, [30])["detectable_effect"][0]
    moved = planned_study(plan, "y ~ arm", focus="arm", effect={"arm": [0.5 * factor, factor]})
    assert what_rows_buy(moved, OLS, [30])["power"][0] == pytest.approx(DETECTED, abs=1e-6)


def test_in_place_of_power_at_the_observed_effect():
    study = data()
    instead = instead_of_observed_power(study, OLS[0])
    fit = np.polyfit(study.design.columns["x"], study.response, 1)
    assert instead.estimate == pytest.approx(fit[0])
    reach = (instead.high - instead.low) / 2
    assert instead.low + reach == pytest.approx(instead.estimate)
    # The interval of statsmodels for the same fit.
    low, high = sm.OLS(study.response, study.design.X).fit().conf_int()[1]
    assert (instead.low, instead.high) == (pytest.approx(low), pytest.approx(high))
    bought = what_rows_buy(study, OLS, [study.n], rule="extend", effect=instead.detectable)
    assert bought["power"][0] == pytest.approx(DETECTED, abs=1e-6)
    assert "another guise" in instead.sentences[0]
    with pytest.raises(ScenarioError, match="a plan has no observed effect"):
        instead_of_observed_power(two_arms(), OLS[0])
