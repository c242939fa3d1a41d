"""Answers without simulation, for every cell of the grid that has them."""

from __future__ import annotations

import math
from collections.abc import Iterable

from withstand.departures.world import Disturbance
from withstand.errors import NumericalError
from withstand.exact import ExactResult, Moments, can_be_exact, coverage, moments
from withstand.lab import frames
from withstand.lab.frames import CellAnswers
from withstand.lab.grid import Cell, Grid
from withstand.measures.compute import Estimate
from withstand.measures.names import applicable_measures
from withstand.procedures.base import Answer, LinearProcedure
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
                name: frames.Answer(exactly(value, value - base.get(name, math.nan)), "exact", 0, 0)
                for name in applicable_measures(cell.procedure, cell.focus)
                if (value := values.get(name)) is not None
            }
    return answers


def exactly(value: float, shift: float) -> Estimate:
    """A value without error."""
    return Estimate(value, 0.0, value, value, shift, 0.0)


def _values(study: Study, cell: Cell, disturbance: Disturbance) -> dict[str, float]:
    """Measures by name, in the unit of the focal quantity; more than are applicable, perhaps."""
    procedure, focus = cell.procedure, cell.focus
    if not isinstance(procedure, LinearProcedure):
        return {}
    values = _from_moments(moments(procedure, study.design, focus, disturbance), study.error_sd)
    if can_be_exact(procedure, focus, disturbance) is None:
        tested = focus.effect is not None and Answer.TEST in procedure.answers(focus)
        effects = focus.effect[None, :] / study.error_sd if tested and focus.effect is not None else None
        try:
            result = coverage(procedure, study.design, focus, disturbance, study.level, effects=effects)
        except NumericalError:
            # The accuracy is out of reach, so the cell is simulated, and its column `method` says so.
            return values
        values |= _from_result(result, study.error_sd)
    return values


def _from_moments(found: Moments | None, unit: float) -> dict[str, float]:
    if found is None:
        return {}
    sd, claimed = math.sqrt(found.variance), math.sqrt(found.claimed_variance)
    return {
        "bias": unit * found.bias,
        "bias_in_sd": found.bias / sd,
        "empirical_sd": unit * sd,
        "claimed_sd": unit * claimed,
        "se_ratio": claimed / sd,
        "rmse": unit * math.hypot(sd, found.bias),
        "failure_rate": 0.0,
    }


def _from_result(result: ExactResult, unit: float) -> dict[str, float]:
    values = {"coverage": result.coverage, "size": result.size, "failure_rate": 0.0}
    if result.miss_below is not None and result.miss_above is not None:
        values |= {"miss_below": result.miss_below, "miss_above": result.miss_above}
    if result.width is not None:
        values["width"] = unit * result.width
    if result.power is not None:
        values["power"] = float(result.power[0])
    return values


def complete(cell: Cell, answers: CellAnswers) -> bool:
    """Whether exact answers cover every measure of the cell, so that it need not be simulated."""
    return all(name in answers for name in applicable_measures(cell.procedure, cell.focus))
