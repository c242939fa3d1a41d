"""What a study with n rows does: exact where it can be, averaged over drawn tables or simulated where not, until it is clear."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy import stats
from scipy import stats

from withstand.engine.job import Job, block_width
from withstand.engine.ledger import Ledger
from withstand.engine.noise import design_generator
from withstand.judgement.sample_size import Reading, Requirement
from withstand.judgement.verdict import spending
from withstand.lab.exactly import exact_answers
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.gather import Bench, Evidence, gather
from withstand.lab.gather import Effort as Means
from withstand.lab.grid import Cell, Grid
from withstand.lab.plan import Plan
from withstand.lab.progress import Progress, Silent
from withstand.lab.size_plan import Condition, Effort
from withstand.measures.compute import Estimate
from withstand.procedures.base import Procedure
from withstand.study.study import FixedRows, Study

TABLES = (24, 48, 96, 192, 384)
"""Tables drawn at each look where an answer is exact given the table."""

_TABLE_WIDTH = 200
"""Replicates of a drawn table at most: a few on each of many tables tell more than many on a few."""


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


@dataclass(frozen=True, eq=False)
class Look:
    """Looks at one procedure and one focal quantity in several worlds.

    Parameters
    ----------
    procedure : Procedure
        Whose n is sought.
    conditions : sequence of Condition
        The worlds.
    requirements : sequence of Requirement
        Keys are "condition number|measure".
    effort : Effort
        How hard to look.
    executor : Executor
        Where tasks run.
    progress : Progress
        Who is told.
    """

    procedure: Procedure
    conditions: Sequence[Condition]
    requirements: Sequence[Requirement]
    effort: Effort
    executor: Executor
    progress: Progress = Silent()

    def grid(self, study: Study, seed: int) -> Grid:
        """The worlds laid out on a study that has one focal quantity."""
        axes = tuple(axis for condition in self.conditions if (axis := condition.axis) is not None)
        # The tolerance is in the requirements; the plan's own is not looked at.
        plan = Plan(
            axes,
            (self.procedure,),
            seed=seed,
            repetitions=self.effort.repetitions,
            most=max(self.effort.most, self.effort.repetitions),
            method="auto" if self.effort.method == "auto" else "simulated",
        )
        return TableGrid(study, plan)

    def answers(self, study: Study, seed: int, to_the_cap: bool = False) -> dict[int, CellAnswers]:
        """Answers by number of the condition, with as many replicates as it takes to tell, or as many as the cap allows."""
        grid = self.grid(study, seed)
        cells = self._cells()
        found: dict[int, CellAnswers] = {}
        if not study.rows.fixed and self.effort.method == "auto":
            found = self._averaged(grid, cells, to_the_cap)
        if all(self._answered(i, found.get(i, {})) for i in cells):
            return found
        means = Means(workers=self.effort.workers, progress=self.progress)
        ledger = Ledger(None)
        try:
            evidence = gather(
                grid,
                Bench(means, ledger, self.executor),
                lambda now, some: not to_the_cap and self._settled(now, some, cells, found),
            )
        finally:
            ledger.close()
        return {i: evidence.answers(evidence.cells[place]) | found.get(i, {}) for i, place in cells.items()}

    def readings(self, study: Study, seed: int, to_the_cap: bool = False) -> tuple[dict[str, Reading], dict[int, CellAnswers]]:
        """The requirements' measures by key, and everything that was found."""
        answers = self.answers(study, seed, to_the_cap)
        read = {}
        for requirement in self.requirements:
            condition, _, name = requirement.key.partition("|")
            read[requirement.key] = reading(answers[int(condition)], name)
        return read, answers

    def _cells(self) -> dict[int, int]:
        """The place of each condition's cell among the cells of a grid, which begin with the baseline."""
        places = itertools.count(1)
        return {i: 0 if c.world.baseline else next(places) for i, c in enumerate(self.conditions)}

    def _answered(self, condition: int, answers: CellAnswers) -> bool:
        return all(_measured(name) in answers for i, name in self._asked() if i == condition)

    def _asked(self) -> list[tuple[int, str]]:
        parts = [requirement.key.partition("|") for requirement in self.requirements]
        return [(int(condition), name) for condition, _, name in parts]

    def _settled(
        self, evidence: Evidence, some: Sequence[Cell], cells: Mapping[int, int], known: Mapping[int, CellAnswers]
    ) -> bool:
        """Whether the margins of these cells can be told from zero; the looks share the accepted chance of error."""
        for requirement, (condition, name) in zip(self.requirements, self._asked(), strict=True):
            cell = evidence.cells[cells[condition]]
            if cell not in some:
                continue
            answers = evidence.answers(cell) | known.get(condition, {})
            repetitions = max(answer.repetitions for answer in answers.values())
            look = 1 + max(0, round(np.log2(max(repetitions, 1) / self.effort.repetitions)))
            if not self._clear(requirement, reading(answers, name), look):
                return False
        return True

    def _clear(self, requirement: Requirement, seen: Reading, look: int) -> bool:
        chance = spending(self.effort.delta, look) / len(self.requirements)
        return abs(requirement.margin(seen.value)) > float(stats.norm.isf(chance / 2.0)) * seen.se

    def _averaged(self, grid: Grid, cells: Mapping[int, int], to_the_cap: bool) -> dict[int, CellAnswers]:
        """Exact answers given the table, averaged over drawn tables: their spread is the only error left."""
        study = grid.study
        values: dict[int, dict[str, list[float]]] = {i: {} for i in cells}
        found: dict[int, CellAnswers] = {}
        done = 0
        for look, count in enumerate(TABLES, start=1):
            for table in range(done, count):
                design = study.rows.draw(design_generator(grid.plan.seed, table))
                here = TableGrid(replace(study, design=design, rows=FixedRows(design)), grid.plan)
                placed = tuple(here.cells)  # none where the procedure does not apply to this table
                answers = exact_answers(here, placed)
                for i in cells:
                    given = answers.get(placed[cells[i]], {}) if placed else _REFUSED
                    for name, answer in given.items():
                        values[i].setdefault(name, []).append(answer.estimate.value)
            done = count
            found = {i: {name: _mean(seen) for name, seen in kept.items() if len(seen) == done} for i, kept in values.items()}
            if not all(self._answered(i, found[i]) for i in cells):
                break
            clear = [
                self._clear(requirement, reading(found[int(requirement.key.partition("|")[0])], name), look)
                for requirement, (_, name) in zip(self.requirements, self._asked(), strict=True)
            ]
            if all(clear) and not to_the_cap:
                break
        return found


_REFUSED: CellAnswers = {
    name: Answer(Estimate(value, 0.0, value, value, np.nan, np.nan), "exact", 0, 1)
    for name, value in {"coverage": 0.0, "size": 0.0, "power": 0.0, "failure_rate": 1.0}.items()
}
"""A table on which the procedure has no answer counts as not covering and not rejecting, as everywhere."""


def reading(answers: CellAnswers, name: str) -> Reading:
    """One measure with its error; a share of 0 or 1 among replicates is not taken for certain."""
    measured = _measured(name)
    answer = answers[measured]
    value, se = answer.estimate.value, answer.estimate.mc_se
    if se == 0.0 and answer.method != "exact":
        se = 1.0 / max(answer.repetitions, 1)
    scale = 0.5 if name == "half_width" else 1.0
    return Reading(scale * value, scale * se)


def _measured(name: str) -> str:
    return "width" if name == "half_width" else name


def _mean(seen: Sequence[float]) -> Answer:
    value = float(np.mean(seen))
    se = float(np.std(seen, ddof=1) / np.sqrt(len(seen)))
    if se <= 1e-9 * max(abs(value), 1e-3):
        # The same in every table, as the coverage of OLS under normal errors is.
        return Answer(Estimate(value, 0.0, value, value, np.nan, np.nan), "exact", 0, 0)
    reach = float(stats.t.isf(0.025, len(seen) - 1)) * se
    return Answer(Estimate(value, se, value - reach, value + reach, np.nan, np.nan), "averaged", len(seen), 0)
