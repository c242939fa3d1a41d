"""Gathering evidence: exact cells exactly, the rest simulated until nothing is open or the cap is reached."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

from withstand.engine.block import CellKey
from withstand.engine.executors import open_executor
from withstand.engine.job import TASK_REPLICATES, tasks_for
from withstand.engine.ledger import Ledger
from withstand.engine.runner import Runner
from withstand.engine.tally import Tally
from withstand.judgement.sequential import Standing, next_step
from withstand.judgement.verdict import Judgement
from withstand.lab.exactly import complete, exact_answers
from withstand.lab.frames import CellAnswers
from withstand.lab.grid import Cell, Grid
from withstand.lab.judging import verdict_of
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
    exact : mapping of Cell to CellAnswers
        Exact answers; a cell may have some, all or none.
    tallies : mapping of Cell to Tally
        What was simulated.
    """

    grid: Grid
    cells: tuple[Cell, ...]
    exact: Mapping[Cell, CellAnswers]
    tallies: Mapping[Cell, Tally]

    @cached_property
    def simulated(self) -> Mapping[Cell, CellAnswers]:
        """Simulated answers of the tallied cells; worked out when first asked for, since verdicts do not need them."""
        known = {(cell.procedure_index, cell.focus_index): self.exact[cell] for cell in self.exact if cell.spot.axis is None}
        return simulated_answers(self.tallies, known, self.grid.study.error_sd)

    def answers(self, cell: Cell) -> CellAnswers:
        """The answers of a cell, exact where they exist, in the order of the tables."""
        exact, simulated = self.exact.get(cell, {}), self.simulated.get(cell, {})
        names = list(exact) + [name for name in simulated if name not in exact]
        return {name: exact.get(name) or simulated[name] for name in names}

    def verdict(self, cell: Cell) -> Judgement | None:
        """The verdict of a cell; None without evidence."""
        return verdict_of(self.grid, cell, self.exact.get(cell), self.tallies.get(cell))


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


Settled = Callable[[Evidence, Sequence[Cell]], bool]
"""Whether cells that share a world and a procedure need no more replicates; asked at each look with the evidence so far."""


def verdicts_settled(evidence: Evidence, cells: Sequence[Cell]) -> bool:
    """Whether every verdict is settled."""
    verdicts = [evidence.verdict(cell) for cell in cells]
    return all(verdict is not None and verdict.settled for verdict in verdicts)


def gather(grid: Grid, bench: Bench, settled: Settled = verdicts_settled) -> Evidence:
    """Bring every cell of a grid to an answer.

    Parameters
    ----------
    grid : Grid
        The plan on its study.
    bench : Bench
        Where to compute.
    settled : callable
        When to stop; cells that are not settled get twice the replicates, up to the plan's cap.

    Returns
    -------
    Evidence
        Deterministic: it depends on study, plan and seed, not on workers or on earlier interruptions.
    """
    cells = tuple(grid.cells)
    exact = exact_answers(grid, cells) if grid.plan.method == "auto" else {}
    runner = bench.runner(grid)

    def so_far(some: Sequence[Cell]) -> Evidence:
        return Evidence(grid, cells, exact, tallies_of(runner, some))

    simulate = [cell for cell in cells if bench.effort.verify or cell not in exact or not complete(cell, exact[cell])]
    if bench.effort.simulate:
        _search(grid, runner, simulate, lambda some: settled(so_far(some), some), bench.effort.progress)
    return so_far(simulate)


def _search(
    grid: Grid, runner: Runner, cells: Sequence[Cell], settled: Callable[[Sequence[Cell]], bool], progress: Progress
) -> None:
    """Give cells replicates until they are settled or the cap is reached."""
    by_key: dict[CellKey, list[Cell]] = {}
    for cell in cells:
        by_key.setdefault((cell.spot.world, cell.procedure_index), []).append(cell)

    def standing(key: CellKey) -> Standing:
        replicates = runner.read(key).tasks * TASK_REPLICATES
        look = grid.looks.reached(replicates)
        # Between looks, as after an interruption, nothing is judged: the run goes on to the next look as it would have.
        at_look = look > 0 and grid.looks.target(look) == replicates
        return Standing(replicates, at_look and settled(by_key[key]))

    standings = {key: standing(key) for key in by_key}
    while (step := next_step(standings, grid.looks)) is not None:
        tasks = tasks_for(step.replicates)
        progress.phase(f"{len(step.cells)} cells to {step.replicates:,} replicates", runner.outstanding(step.cells, tasks))
        runner.advance(step.cells, tasks, progress.step)
        standings |= {key: standing(key) for key in step.cells}
