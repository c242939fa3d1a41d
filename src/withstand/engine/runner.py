"""The driver: sends tasks to workers, merges their tallies in task order, and alone writes the ledger."""

from __future__ import annotations

import uuid
from collections import deque
from collections.abc import Callable, Collection, Iterator
from concurrent.futures import Executor, Future

from withstand.engine.block import BASELINE, CellKey
from withstand.engine.executors import Results, parcel, run_task
from withstand.engine.job import Job
from withstand.engine.ledger import Entry, Ledger, LedgerKey

Progress = Callable[[int], None]
"""Called with the number of tasks just finished."""


class Runner:
    """Brings cells of a job up to a number of tasks.

    Parameters
    ----------
    job : Job
        What to do.
    ledger : Ledger
        Where tallies are kept.
    executor : Executor
        Where tasks run.
    workers : int
        Tasks in flight are held to twice this number, so that little is lost when the run is killed.
    """

    def __init__(self, job: Job, ledger: Ledger, executor: Executor, workers: int = 1) -> None:
        self.job = job
        self.ledger = ledger
        self._executor = executor
        self._window = 1 if workers == 1 else 2 * workers
        self._token = uuid.uuid4().hex
        self._parcel = parcel(job, executor)

    def key(self, cell: CellKey) -> LedgerKey:
        """Where a cell stands in the ledger."""
        world, procedure = cell
        name = "none" if world == BASELINE else self.job.worlds[world].key
        return self.job.digest, name, self.job.procedures[procedure].key

    def read(self, cell: CellKey) -> Entry:
        """What the ledger holds of a cell."""
        return self.ledger.read(self.key(cell))

    def outstanding(self, cells: Collection[CellKey], tasks: int) -> int:
        """Tasks that must still run for every cell to have `tasks` of them."""
        return max(0, tasks - min((self.read(cell).tasks for cell in cells), default=tasks))

    def advance(self, cells: Collection[CellKey], tasks: int, progress: Progress | None = None) -> None:
        """Run until every cell has at least `tasks` tasks; cells that have them already cost nothing.

        Parameters
        ----------
        cells : collection of (int, int)
            Worlds and procedures by index.
        tasks : int
            Tasks wanted for each.
        progress : callable, optional
            Told of every finished task.
        """
        entries = {cell: self.read(cell) for cell in cells}
        for task, results in self._in_order(entries, tasks):
            fresh = {}
            for cell, tallies in results.items():
                before = entries[cell]
                merged = (
                    tallies
                    if not before.tallies
                    else [None if a is None or b is None else a + b for a, b in zip(before.tallies, tallies, strict=True)]
                )
                fresh[cell] = entries[cell] = Entry(task + 1, merged)
            self.ledger.write({self.key(cell): entry for cell, entry in fresh.items()})
            if progress is not None:
                progress(1)

    def _in_order(self, entries: dict[CellKey, Entry], tasks: int) -> Iterator[tuple[int, Results]]:
        done = {cell: entry.tasks for cell, entry in entries.items()}
        first = min(done.values(), default=tasks)
        waiting: deque[tuple[int, Future[Results]]] = deque()
        try:
            for task in range(first, tasks):
                active: dict[int, list[int]] = {}
                for world, procedure in sorted(cell for cell, count in done.items() if count <= task):
                    active.setdefault(world, []).append(procedure)
                waiting.append((task, self._executor.submit(run_task, self._parcel, self._token, task, active)))
                while len(waiting) >= self._window:
                    number, future = waiting.popleft()
                    yield number, future.result()
            while waiting:
                number, future = waiting.popleft()
                yield number, future.result()
        finally:
            for _, future in waiting:
                future.cancel()
