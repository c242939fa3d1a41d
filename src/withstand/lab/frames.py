"""From answers to the tidy table of measures."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import pandas as pd

from withstand.lab.grid import Cell, Grid
from withstand.lab.outcome import MEASURE_COLUMNS
from withstand.measures.compute import Estimate


@dataclass(frozen=True)
class Answer:
    """One measure of one cell.

    Parameters
    ----------
    estimate : Estimate
        Value and error.
    method : str
        "exact" or "simulated".
    repetitions : int
        Replicates behind it; 0 for exact values.
    failures : int
        Replicates in which the procedure gave no answer.
    """

    estimate: Estimate
    method: str
    repetitions: int
    failures: int


CellAnswers = dict[str, Answer]
"""Answers of one cell by measure."""


def place(grid: Grid, cell: Cell) -> dict[str, object]:
    """The columns that say where a cell stands."""
    axis = cell.spot.axis
    return {
        "n": grid.study.n,
        "departure": "none" if axis is None else axis.departure.kind,
        "along": "" if axis is None else grid.along(axis),
        "severity": cell.spot.severity,
        "severity_label": "nothing wrong" if axis is None else axis.departure.label(cell.spot.severity),
        "stack": "" if axis is None else axis.stack,
        "procedure": cell.procedure.identity,
        "focus": cell.focus.name,
    }


def measures_frame(grid: Grid, answered: Iterable[tuple[Cell, CellAnswers]]) -> pd.DataFrame:
    """The tidy table of measures, one row a measure of a cell."""
    rows = []
    for cell, answers in answered:
        where = place(grid, cell)
        for name, answer in answers.items():
            estimate = answer.estimate
            rows.append(
                where
                | {
                    "measure": name,
                    "value": estimate.value,
                    "mc_se": estimate.mc_se,
                    "low": estimate.low,
                    "high": estimate.high,
                    "shift": estimate.shift,
                    "shift_se": estimate.shift_se,
                    "method": answer.method,
                    "repetitions": answer.repetitions,
                    "failures": answer.failures,
                }
            )
    return pd.DataFrame(rows, columns=list(MEASURE_COLUMNS))
