"""The conductor: exact cells exactly, the rest simulated until every verdict is settled or the cap is reached."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from withstand.engine.block import BASELINE, CellKey
from withstand.engine.executors import open_executor
from withstand.engine.job import tasks_for
from withstand.engine.ledger import Ledger
from withstand.engine.runner import Runner
from withstand.engine.tally import Tally
from withstand.lab.exactly import complete, exact_answers
from withstand.lab.frames import CellAnswers
from withstand.lab.grid import Cell, Grid
from withstand.lab.progress import Progress, Silent
from withstand.lab.simulate import simulated_answers, tallies_of


@dataclass(frozen=True)
class Effort:
    """How and where to compute.

    Parameters
    ----------
    ledger_path : Path or None
        Where tallies are kept between runs; None keeps them in memory.
    workers : int
        Worker processes.
    cluster : str or None
        Address of a Dask scheduler, instead of worker processes.
    simulate : bool
        False uses only exact answers and what the ledger already holds.
    verify : bool
        Simulate the exact cells as well, so that the two can be compared.
    """

    ledger_path: Path | None = None
    workers: int = 1
    cluster: str | None = None
    simulate: bool = True
    verify: bool = False
    progress: Progress = field(default_factory=Silent)


@dataclass(frozen=True, eq=False)
class Evidence:
    """Everything known about the cells of a grid.

    Parameters
    ----------
    exact, simulated : mapping of Cell to CellAnswers
        Answers by route; a cell may have both, one in part, or neither.
    tallies : mapping of Cell to Tally
        What the simulated answers rest on.
    """

    grid: Grid
    cells: tuple[Cell, ...]
    exact: Mapping[Cell, CellAnswers]
    simulated: Mapping[Cell, CellAnswers]
    tallies: Mapping[Cell, Tally]

    def answers(self, cell: Cell) -> CellAnswers:
        """The answers of a cell, exact where they exist, in the order of the tables."""
        exact, simulated = self.exact.get(cell, {}), self.simulated.get(cell, {})
        names = list(simulated) + [name for name in exact if name not in simulated]
        return {name: exact.get(name) or simulated[name] for name in names}
