"""Verdicts of the cells of a grid, exact or simulated."""

from __future__ import annotations

import math
from collections.abc import Mapping

import pandas as pd

from withstand.departures.world import World
from withstand.engine.tally import Tally
from withstand.exact import can_be_exact, coverage, moments
from withstand.judgement.verdict import Judgement, judge, judge_exact
from withstand.lab.frames import CellAnswers, place
from withstand.lab.grid import Cell, Grid
from withstand.lab.outcome import VERDICT_COLUMNS
from withstand.procedures.base import LinearProcedure


def judge_cell(grid: Grid, cell: Cell, tally: Tally) -> Judgement:
    """The verdict of a simulated cell at the look its tally has come to."""
    look = max(grid.looks.reached(tally.replicates), 1)
    return judge(tally, grid.aspects, grid.plan.wrong_verdict, look, grid.study.error_sd)


def judge_answers(grid: Grid, cell: Cell, answers: CellAnswers) -> Judgement | None:
    """The verdict of a cell with exact answers; None where a measure that decides has none."""
    return _judge_values(grid, cell, {name: answer.estimate.value for name, answer in answers.items()})


def judge_exactly(grid: Grid, cell: Cell, world: World) -> Judgement | None:
    """The exact verdict in any world, of the procedure and focal quantity of a cell; None where there is none.

    Works out the measures that decide and no others.
    """
    study, procedure, focus = grid.study, cell.procedure, cell.focus
    disturbance = world.on(study.design)
    if not isinstance(procedure, LinearProcedure) or can_be_exact(procedure, focus, disturbance) is not None:
        return None
    result = coverage(procedure, study.design, focus, disturbance, study.level, width=False)
    values = {"coverage": result.coverage}
    if result.miss_below is not None and result.miss_above is not None:
        values |= {"miss_below": result.miss_below, "miss_above": result.miss_above}
    found = moments(procedure, study.design, focus, disturbance)
    if found is not None:
        values |= {"bias": study.error_sd * found.bias, "bias_in_sd": found.bias / math.sqrt(found.variance)}
    return _judge_values(grid, cell, values)


def _judge_values(grid: Grid, cell: Cell, values: dict[str, float]) -> Judgement | None:
    if "coverage" not in values:
        return None
    if isinstance(cell.procedure, LinearProcedure):
        values.pop("size", None)  # the interval turned round
    if any(name not in values for name in grid.aspects if name.startswith("miss") and cell.focus.scalar):
        return None
    return judge_exact(values, grid.aspects)


def verdict_of(grid: Grid, cell: Cell, exact: CellAnswers | None, tally: Tally | None) -> Judgement | None:
    """The verdict of a cell from what is known of it, exact answers first; None where nothing is."""
    judgement = None if exact is None else judge_answers(grid, cell, exact)
    if judgement is None and tally is not None:
        judgement = judge_cell(grid, cell, tally)
    return judgement


def verdicts_frame(grid: Grid, verdicts: Mapping[Cell, Judgement]) -> pd.DataFrame:
    """The tidy table of verdicts, one row a cell."""
    rows = []
    for cell, judgement in verdicts.items():
        deciding = judgement.deciding
        rows.append(
            place(grid, cell)
            | {
                "verdict": str(judgement.verdict),
                "deciding_measure": deciding.measure,
                "value": deciding.value,
                "low": deciding.low,
                "high": deciding.high,
                "method": "exact" if judgement.exact else "simulated",
                "repetitions": judgement.replicates,
            }
        )
    return pd.DataFrame(rows, columns=list(VERDICT_COLUMNS))
