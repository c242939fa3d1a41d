"""Gathering evidence: exact cells exactly, the rest simulated until nothing is open or the cap is reached."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from withstand.engine.executors import open_executor
from withstand.engine.job import TASK_REPLICATES, tasks_for
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
    progress : Progress
        Who is told how far it is.
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
        names = list(exact) + [name for name in simulated if name not in exact]
        return {name: exact.get(name) or simulated[name] for name in names}


Unsettled = Callable[[Evidence], Sequence[Cell]]
"""Which cells need more replicates, judged at the current look."""


def nothing_more(evidence: Evidence) -> Sequence[Cell]:
    """A rule that is content with the first look."""
    return ()


@dataclass(frozen=True, eq=False)
class Bench:
    """An open ledger and executor, on which grids of the same study are worked."""

    effort: Effort
    ledger: Ledger
    executor: Executor

    def runner(self, grid: Grid) -> Runner:
        """The driver for one grid."""
        return Runner(grid.job, self.ledger, self.executor, self.effort.workers)


@contextmanager
def open_bench(grid: Grid, effort: Effort) -> Iterator[Bench]:
    """Open ledger and executor for a study.

    Raises
    ------
    LedgerError
        If the ledger belongs to another study, seed or version of the data.
    """
    with closing(Ledger(effort.ledger_path)) as ledger, open_executor(effort.workers, effort.cluster) as executor:
        ledger.claim(grid.job.digest)
        yield Bench(effort, ledger, executor)


def gather(grid: Grid, bench: Bench, unsettled: Unsettled = nothing_more) -> Evidence:
    """Bring every cell of a grid to an answer.

    Parameters
    ----------
    grid : Grid
        The plan on its study.
    bench : Bench
        Where to compute.
    unsettled : callable
        Asked after each look which cells are still open; those get twice the replicates, up to the plan's cap.

    Returns
    -------
    Evidence
        Deterministic: it depends on study, plan and seed, not on workers or on earlier interruptions.
    """
    plan, effort = grid.plan, bench.effort
    cells = tuple(grid.cells)
    exact = exact_answers(grid, cells) if plan.method == "auto" else {}
    known = {(cell.procedure_index, cell.focus_index): exact[cell] for cell in exact if cell.spot.axis is None}
    simulate = [cell for cell in cells if effort.verify or cell not in exact or not complete(cell, exact[cell])]
    runner = bench.runner(grid)
    tasks, cap = tasks_for(plan.repetitions), plan.most // TASK_REPLICATES
    still_open: Sequence[Cell] = simulate
    while True:
        if effort.simulate and still_open:
            keys = sorted({(cell.spot.world, cell.procedure_index) for cell in still_open})
            effort.progress.phase(f"{len(keys)} cells to {tasks * TASK_REPLICATES} replicates", runner.outstanding(keys, tasks))
            runner.advance(keys, tasks, effort.progress.step)
        tallies = tallies_of(runner, simulate)
        simulated = simulated_answers(tallies, known, grid.study.error_sd)
        evidence = Evidence(grid, cells, exact, simulated, tallies)
        if not effort.simulate or tasks >= cap:
            return evidence
        still_open = unsettled(evidence)
        if not still_open:
            return evidence
        tasks = min(2 * tasks, cap)
