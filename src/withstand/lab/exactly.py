"""Answers without simulation, for every cell of the grid that has them."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from withstand.departures.world import Disturbance
from withstand.exact import can_be_exact, coverage, moments, power
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.grid import Cell, Grid
from withstand.measures.compute import Estimate
from withstand.measures.names import applicable_measures
from withstand.procedures.base import LinearProcedure
from withstand.study.study import Study


def exact_answers(grid: Grid, cells: Iterable[Cell]) -> dict[Cell, CellAnswers]:
    """Exact answers of the cells that have them, with shifts from the exact baseline.

    Parameters
    ----------
    grid : Grid
        The plan on its study.
    cells : iterable of Cell
        The baseline cell of a procedure and focal quantity comes before its other cells.

    Returns
    -------
    dict of Cell to CellAnswers
        Cells that must be simulated altogether are left out; a cell may have exact moments only.
    """
    if not grid.study.rows.fixed:
        return {}
    disturbances: dict[int, Disturbance] = {}
    baselines: dict[tuple[int, int], dict[str, float]] = {}
    answers = {}
    for cell in cells:
        world = cell.spot.world
        if world not in disturbances:
            disturbances[world] = grid.world(cell.spot).on(grid.study.design)
        values = _values(grid.study, cell, disturbances[world])
        if cell.spot.axis is None:
            baselines[cell.procedure_index, cell.focus_index] = values
        base = baselines.get((cell.procedure_index, cell.focus_index), {})
        if values:
            answers[cell] = {
                name: Answer(_exactly(value, value - base.get(name, np.nan)), "exact", 0, 0)
                for name in applicable_measures(cell.procedure, cell.focus)
                if (value := values.get(name)) is not None
            }
    return answers


def _exactly(value: float, shift: float) -> Estimate:
    return Estimate(value, 0.0, value, value, shift, 0.0)


def _values(study: Study, cell: Cell, disturbance: Disturbance) -> dict[str, float]:
    """Measures by name, in the unit of the focal quantity."""
    procedure, focus = cell.procedure, cell.focus
    if not isinstance(procedure, LinearProcedure):
        return {}
    unit = study.error_sd
    values: dict[str, float] = {}
    found = moments(procedure, study.design, focus, disturbance) if focus.scalar else None
    if found is not None:
        sd = float(np.sqrt(found.variance))
        claimed = float(np.sqrt(found.claimed_variance))
        values |= {
            "bias": unit * found.bias,
            "bias_in_sd": found.bias / sd,
            "empirical_sd": unit * sd,
            "claimed_sd": unit * claimed,
            "se_ratio": claimed / sd,
            "rmse": unit * float(np.hypot(sd, found.bias)),
            "failure_rate": 0.0,
        }
    if can_be_exact(procedure, focus, disturbance) is None:
        result = coverage(procedure, study.design, focus, disturbance, study.level)
        values |= {"coverage": result.coverage, "size": 1.0 - result.coverage, "failure_rate": 0.0}
        if result.miss_below is not None and result.miss_above is not None:
            values |= {"miss_below": result.miss_below, "miss_above": result.miss_above}
        if result.width is not None:
            values["width"] = unit * result.width
        if focus.effect is not None:
            stated = focus.effect[None, :] / unit
            values["power"] = float(power(procedure, study.design, focus, disturbance, study.level, stated)[0])
    return values


def complete(cell: Cell, answers: CellAnswers) -> bool:
    """Whether exact answers cover every measure of the cell, so that it need not be simulated."""
    return all(name in answers for name in applicable_measures(cell.procedure, cell.focus))
