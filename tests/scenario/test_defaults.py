"""What is tried where nobody says: it suits the columns, and nothing is left out in silence."""

import numpy as np
import pandas as pd
import pytest

from withstand.errors import ScenarioError
from withstand.scenario.defaults import MOST_DEPARTURES, default_axes, default_procedures
from withstand.study.study import Study


def frame(n=24, columns=("x", "z")):
    generator = np.random.default_rng(11)
    table = pd.DataFrame({name: generator.normal(size=n) for name in ("y", *columns)})
    table["g"] = np.repeat(["a", "b", "c"], [n // 2, n // 4, n - n // 2 - n // 4])
    table["unit"] = np.tile(["u1", "u2", "u3", "u4"], n // 4)
    table["t"] = np.arange(n)
    table["w"] = generator.uniform(0.5, 2.0, size=n)
    return table


def kinds(study):
    return [axis.departure.kind for axis in default_axes(study)[0]]


def test_plain_study_has_neither_serial_nor_clusters():
    found = kinds(Study.from_frame(frame(), "y ~ x"))
    assert "serial" not in found
    assert "clusters" not in found
    assert {"skew", "heavy-tails", "outliers", "worst-fan", "fan", "curvature", "power-spread", "bowtie"} <= set(found)


def test_roles_bring_their_departures_first():
    study = Study.from_frame(frame(), "y ~ x + C(g)", order="t", groups="unit")
    found = kinds(study)
    assert found[:2] == ["clusters", "serial"]
    assert "level-spread" in found
    level = next(axis.departure for axis in default_axes(study)[0] if axis.departure.kind == "level-spread")
    assert set(level.noisy) == {"b"}  # the rarest level, the first of equals


def test_columns_outside_the_model_are_not_departed_along():
    axes, _ = default_axes(Study.from_frame(frame(), "y ~ x", order="t", weights="w"))
    assert {axis.departure.along for axis in axes} <= {"", "x", "fitted"}


def test_focal_predictor_comes_first():
    axes, _ = default_axes(Study.from_frame(frame(columns=("a", "b", "x")), "y ~ a + b + x", focus=["x"]))
    assert next(axis.departure.along for axis in axes if axis.departure.kind == "fan") == "x"


def test_what_is_left_out_is_said():
    names = tuple(f"v{i}" for i in range(8))
    axes, notices = default_axes(Study.from_frame(frame(columns=names), f"y ~ {' + '.join(names)}", order="t", groups="unit"))
    assert len(axes) == MOST_DEPARTURES
    assert "left out" in notices[-1]
    assert "curvature along v7" in notices[-1]


def test_every_default_axis_applies_and_makes_a_world():
    study = Study.from_frame(frame(), "y ~ x + z + C(g)", order="t", groups="unit", weights="w")
    for axis in default_axes(study)[0]:
        assert axis.departure.not_applicable(study.design) is None
        for severity in axis.departure.ladder:
            axis.world(severity)


def test_procedures_answer_the_roles():
    def names(**roles):
        return [one.name for one in default_procedures(Study.from_frame(frame(), "y ~ x", **roles))]

    assert names()[0] == "ols"
    assert {"hc3", "hc2-bm"} <= set(names())
    assert not {"hac", "cr1", "known-weights"} & set(names())
    assert {"hac", "prais-winsten"} <= set(names(order="t"))
    assert {"cr1", "cr2"} <= set(names(groups="unit"))
    assert "known-weights" in names(weights="w")


def test_joint_focus_alone_has_no_worst_fan():
    study = Study.from_frame(frame(), "y ~ C(g)", focus=["g"])
    assert "worst-fan" not in kinds(study)
    from withstand.departures import WorstFan
    from withstand.scenario.choices import fitting

    with pytest.raises(ScenarioError, match="joint terms only"):
        fitting(WorstFan(), study)
