"""Studies whose every block has a table of its own: narrow blocks, and exact answers averaged over drawn tables."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from withstand import tails
from withstand.engine.job import Job, block_width
from withstand.engine.noise import design_generator
from withstand.lab.exactly import exact_answers
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.grid import Cell, Grid
from withstand.measures.compute import COUNTED, Estimate
from withstand.study.design import Design
from withstand.study.planning import PlannedRows
from withstand.study.rows import FixedRows

TABLES = (24, 48, 96)
"""Tables drawn at each look where an answer is exact given the table."""

_TABLE_WIDTH = 200
"""Replicates of a drawn table at most: a few on each of many tables tell more than many on a few."""

_SAME = 1e-9
"""Values from different tables that differ by no more than this, relative to their size, are the same value."""


@dataclass(frozen=True, eq=False)
class TableJob(Job):
    """A job whose blocks are narrow where every block has its own table."""

    @property
    def width(self) -> int:
        """See Job."""
        width = block_width(self.study.n)
        return width if self.study.rows.fixed else min(width, _TABLE_WIDTH)


@dataclass(frozen=True, eq=False)
class TableGrid(Grid):
    """A grid with narrow blocks where every block has its own table."""

    @cached_property
    def job(self) -> Job:
        """See Grid."""
        plain = super().job
        return TableJob(plain.study, plain.worlds, plain.procedures, plain.seed)

    def place(self, cell: Cell) -> str:
        """The key of the world of a cell."""
        return self.world(cell.spot).key


class TableAverage:
    """Exact answers given the table, gathered over drawn tables: their spread from table to table is the only error left.

    Parameters
    ----------
    grid : TableGrid
        One procedure and one focal quantity in some worlds, on a study with drawn tables.
    keys : sequence of str
        Keys of the worlds that are asked about.
    """

    def __init__(self, grid: TableGrid, keys: Sequence[str]) -> None:
        self._grid = grid
        self._values: dict[str, dict[str, list[float]]] = {key: {} for key in keys}
        self._done = 0

    def extend(self, tables: int) -> Mapping[str, CellAnswers]:
        """Answers from so many tables, by key of the world; a measure without an exact answer in some table is left out."""
        generators = [design_generator(self._grid.plan.seed, table) for table in range(self._done, tables)]
        rows = self._grid.study.rows
        drawn = rows.draw_all(generators) if isinstance(rows, PlannedRows) else map(rows.draw, generators)
        for design in drawn:
            given = self._on(design)
            for key, values in self._values.items():
                for name, answer in given[key].items():
                    values.setdefault(name, []).append(answer.estimate.value)
        self._done = tables
        return {
            key: {name: _mean(seen) for name, seen in values.items() if len(seen) == tables or _among_answers(name, seen)}
            for key, values in self._values.items()
        }

    def _on(self, design: Design) -> dict[str, CellAnswers]:
        grid = self._grid
        here = replace(grid, study=replace(grid.study, design=design, rows=FixedRows(design)))
        if here.impossible:
            return dict.fromkeys(self._values, _REFUSED)
        cells = [cell for cell in here.cells if here.place(cell) in self._values]
        if not cells:
            # The procedure does not apply to this table.
            return dict.fromkeys(self._values, _REFUSED)
        answers = exact_answers(here, cells)
        return {here.place(cell): answers.get(cell, {}) for cell in cells}


_REFUSED: CellAnswers = {
    name: Answer(Estimate(value, 0.0, value, value, np.nan, np.nan), "exact", 0, 1)
    for name, value in {"coverage": 0.0, "size": 0.0, "power": 0.0, "failure_rate": 1.0}.items()
}
"""A table on which the procedure has no answer counts as not covering and not rejecting, as everywhere."""


def _among_answers(name: str, seen: Sequence[float]) -> bool:
    """Whether a mean over the tables with an answer is what the measure is."""
    return name not in COUNTED and len(seen) > 1


def _mean(seen: Sequence[float]) -> Answer:
    value = float(np.mean(seen))
    se = float(np.std(seen, ddof=1) / np.sqrt(len(seen)))
    if se <= _SAME * max(abs(value), 1e-3):
        # The same in every table, as the coverage of OLS under normal errors is.
        return Answer(Estimate(value, 0.0, value, value, np.nan, np.nan), "exact", 0, 0)
    reach = float(tails.t_isf(0.025, len(seen) - 1)) * se
    return Answer(Estimate(value, se, value - reach, value + reach, np.nan, np.nan), "averaged", len(seen), 0)
