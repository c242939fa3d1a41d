"""Verdicts of the cells of a grid, exact or simulated."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from withstand.engine.tally import Tally
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
    values = {name: answer.estimate.value for name, answer in answers.items()}
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
