"""The exact answers as a run reports them, against the engine's simulation of the same cells."""

import numpy as np
import pytest

from withstand.departures import Curvature, Fan, Outliers, Serial, Skew
from withstand.engine.block import BASELINE, Kernel
from withstand.exact import closed, path
from withstand.lab.exactly import complete, exact_answers
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis, Plan
from withstand.measures.compute import measure
from withstand.measures.names import applicable_measures
from withstand.procedures import make_procedure
from withstand.study.focus import Focus, FocusKind, Point
from withstand.study.rows import FixedRows
from withstand.study.study import Study

from .cases import random_design

REPLICATES = 20_000
ERROR_SD = 2.5


@pytest.fixture
def grid():
    design = random_design(np.random.default_rng(4), 20, 3)
    design = type(design)(
        design.X, design.names, columns={"x1": design.X[:, 1], "x2": design.X[:, 2]}, order=design.order, groups=design.groups
    )
    row = np.array([[1.0, 0.5, 0.2]])
    point = Point({"x1": 0.5, "x2": 0.2})
    foci = (
        Focus.coefficient("x1", design.names, 1.5),
        Focus("mean", FocusKind.MEAN, row, np.zeros(1), None, point),
        Focus("new", FocusKind.NEW, row, np.zeros(1), None, point),
        Focus("slopes", FocusKind.JOINT, np.eye(3)[1:], np.zeros(2), np.array([1.0, 1.0])),
    )
    study = Study("run", "", design, foci, np.zeros(3), ERROR_SD, FixedRows(design), digest="run")
    departures = (
        Fan((4.0,), along="x1"),
        Serial((0.5,), step=1.0),
        Curvature((0.5,), along="x1"),
        Skew((2.0,)),
        Outliers(),
    )
    procedures = tuple(make_procedure(name) for name in ("ols", "hc3", "cr1", "huber"))
    return Grid(study, Plan(tuple(Axis(d) for d in departures), procedures, seed=9))


def test_exact_answers_are_what_the_engine_simulates(grid):
    cells = tuple(grid.cells)
    answers = exact_answers(grid, cells)
    kernel = Kernel(grid.job)
    active = {spot.world: range(len(grid.plan.procedures)) for spot in grid.spots}
    tallies = kernel.run(range(REPLICATES // grid.job.width), active)
    compared = 0
    for cell, found in answers.items():
        tally = tallies[cell.spot.world, cell.procedure_index][cell.focus_index]
        simulated = measure(tally, applicable_measures(cell.procedure, cell.focus), ERROR_SD)
        for name, answer in found.items():
            assert answer.method == "exact"
            assert answer.estimate.mc_se == 0.0
            value = answer.estimate.value
            se = simulated[name].mc_se
            if name in ("coverage", "size", "power", "miss_below", "miss_above"):
                se = np.sqrt(max(value * (1 - value), 1e-300) / REPLICATES)
            assert abs(simulated[name].value - value) <= 4.5 * se + 1e-12, (cell.procedure.name, cell.focus.name, name)
            compared += 1
            if cell.spot.world != BASELINE:
                base = answers[
                    next(
                        c for c in cells if c.spot.world == BASELINE and c.procedure is cell.procedure and c.focus is cell.focus
                    )
                ]
                assert answer.estimate.shift == pytest.approx(value - base[name].estimate.value)
    assert compared > 300


def test_which_cells_are_complete(grid):
    cells = tuple(grid.cells)
    answers = exact_answers(grid, cells)
    for cell in cells:
        kind = "none" if cell.spot.axis is None else cell.spot.axis.departure.kind
        joint_sandwich = not cell.focus.scalar and cell.procedure.name != "ols"
        if (
            cell.procedure.name == "huber"
            or kind == "outliers"
            or (joint_sandwich)
            or (kind == "skew" and not cell.focus.scalar)
        ):
            assert cell not in answers
        elif kind == "skew":
            # Moments hold whatever the law of the errors; probabilities do not.
            assert {"bias", "se_ratio", "empirical_sd"} <= set(answers[cell])
            assert "coverage" not in answers[cell]
            assert not complete(cell, answers[cell])
        else:
            assert complete(cell, answers[cell])


def test_a_cell_whose_accuracy_is_out_of_reach_is_left_to_simulation(grid, monkeypatch):
    monkeypatch.setattr(path, "_LEVELS", 1)
    monkeypatch.setattr(path, "_STEP", 4.0)
    monkeypatch.setattr(closed, "closed_form", lambda problem: None)
    cells = tuple(grid.cells)
    answers = exact_answers(grid, cells)
    assert answers
    for cell, found in answers.items():
        assert "coverage" not in found
        assert not complete(cell, found)
