"""What a study with n rows does: exact where it can be, averaged over tables or simulated where not, until it is clear."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from concurrent.futures import Executor
from contextlib import closing
from dataclasses import dataclass, field, replace

from withstand import tails
from withstand.engine.ledger import Ledger
from withstand.judgement.size_points import LOOKS, Reading, Requirement
from withstand.judgement.verdict import spending
from withstand.lab.frames import CellAnswers
from withstand.lab.gather import Bench, Evidence, gather
from withstand.lab.gather import Effort as Means
from withstand.lab.grid import Cell
from withstand.lab.plan import Plan
from withstand.lab.progress import Progress, Silent
from withstand.lab.size_plan import Condition, Effort
from withstand.lab.size_tables import TABLES, TableAverage, TableGrid
from withstand.procedures.base import Procedure
from withstand.study.study import Study


@dataclass(frozen=True, eq=False)
class Look:
    """Looks at one procedure and one focal quantity in several worlds.

    Parameters
    ----------
    procedure : Procedure
        Whose n is sought.
    conditions : sequence of Condition
        The worlds, all different.
    requirements : sequence of Requirement
        Keys are "condition number|measure".
    effort : Effort
        How hard to look.
    executor : Executor
        Where tasks run.
    progress : Progress
        Who is told.
    asked : frozenset of int, optional
        Numbers of the worlds to look at; all of them if left out.
    """

    procedure: Procedure
    conditions: Sequence[Condition]
    requirements: Sequence[Requirement]
    effort: Effort
    executor: Executor
    progress: Progress = field(default_factory=Silent)
    asked: frozenset[int] | None = None

    def grid(self, study: Study, seed: int) -> TableGrid:
        """The worlds laid out on a study that has one focal quantity."""
        points = [point for condition in self._conditions.values() if (point := condition.point) is not None]
        axes = {axis.identity: axis for axis, _ in points}
        # The tolerance is in the requirements; the plan's own is not looked at.
        plan = Plan(
            tuple(axes.values()),
            (self.procedure,),
            seed=seed,
            repetitions=self.effort.repetitions,
            most=max(self.effort.most, self.effort.repetitions),
            method="auto" if self.effort.method == "auto" else "simulated",
        )
        return TableGrid(study, plan, tuple((axes[axis.identity], severity) for axis, severity in points))

    def only(self, worlds: Collection[int]) -> Look:
        """The same at some of the worlds, by number; they keep their numbers."""
        return replace(self, asked=frozenset(worlds))

    @property
    def _conditions(self) -> dict[int, Condition]:
        return {i: condition for i, condition in enumerate(self.conditions) if self.asked is None or i in self.asked}

    @property
    def _requirements(self) -> list[Requirement]:
        return [requirement for requirement in self.requirements if requirement.condition in self._conditions]

    def answers(self, study: Study, seed: int, to_the_cap: bool = False) -> dict[int, CellAnswers]:
        """Answers by number of the condition, with as many replicates as it takes to tell, or as many as the cap allows."""
        grid = self.grid(study, seed)
        found: Mapping[str, CellAnswers] = {}
        if not study.rows.fixed and self.effort.method == "auto":
            found = self._averaged(grid, to_the_cap)
        if not self._answered(found):
            found = self._simulated(grid, found, to_the_cap)
        return {i: found[condition.world.key] for i, condition in self._conditions.items()}

    def readings(self, study: Study, seed: int, to_the_cap: bool = False) -> tuple[dict[str, Reading], dict[int, CellAnswers]]:
        """The requirements' measures by key, and everything that was found."""
        answers = self.answers(study, seed, to_the_cap)
        return {r.key: reading(answers[r.condition], r.measure) for r in self._requirements}, answers

    def _averaged(self, grid: TableGrid, to_the_cap: bool) -> Mapping[str, CellAnswers]:
        average = TableAverage(grid, [condition.world.key for condition in self._conditions.values()])
        found: Mapping[str, CellAnswers] = {}
        for look, tables in enumerate(TABLES, start=1):
            found = average.extend(tables)
            if not self._answered(found):
                break
            clear = [self._clear(requirement, found, look) for requirement in self._requirements]
            if not to_the_cap and (all(clear) or -1 in clear):
                break
        return found

    def _simulated(self, grid: TableGrid, known: Mapping[str, CellAnswers], to_the_cap: bool) -> Mapping[str, CellAnswers]:
        failed = False

        def settled(evidence: Evidence, some: Sequence[Cell]) -> bool:
            nonlocal failed
            if to_the_cap or failed:
                # One world in which something is clearly not met is enough.
                return failed
            now = {grid.place(cell): evidence.answers(cell) | known.get(grid.place(cell), {}) for cell in some}
            asked = [r for r in self._requirements if self._key(r) in now]
            repetitions = max(tally.replicates for cell, tally in evidence.tallies.items() if cell in some)
            look = max(grid.looks.reached(repetitions), 1)
            clear = [self._clear(requirement, now, look) for requirement in asked]
            failed = -1 in clear
            return failed or all(clear)

        means = Means(workers=self.effort.workers, progress=self.progress)
        with closing(Ledger(None)) as ledger:
            evidence = gather(grid, Bench(means, ledger, self.executor), settled)
        return {grid.place(cell): evidence.answers(cell) | known.get(grid.place(cell), {}) for cell in evidence.cells}

    def _answered(self, found: Mapping[str, CellAnswers]) -> bool:
        return all(_measured(r.measure) in found.get(self._key(r), {}) for r in self._requirements) and all(
            condition.world.key in found for condition in self._conditions.values()
        )

    def _key(self, requirement: Requirement) -> str:
        return self.conditions[requirement.condition].world.key

    def _clear(self, requirement: Requirement, found: Mapping[str, CellAnswers], look: int) -> int:
        """1 where it is clearly met, -1 where it clearly is not, else 0; the looks share the accepted chance of error."""
        seen = reading(found[self._key(requirement)], requirement.measure)
        chance = spending(self.effort.delta, look) / (LOOKS * len(self.requirements))
        margin, reach = requirement.margin(seen.value), float(tails.normal_isf(chance / 2.0)) * seen.se
        return 1 if margin >= reach else -1 if margin < -reach else 0


def reading(answers: CellAnswers, name: str) -> Reading:
    """One measure with its error; a share of 0 or 1 among replicates is not taken for certain."""
    answer = answers[_measured(name)]
    value, se = answer.estimate.value, answer.estimate.mc_se
    if se == 0.0 and answer.method != "exact":
        se = 1.0 / max(answer.repetitions, 1)
    scale = 0.5 if name == "half_width" else 1.0
    return Reading(scale * value, scale * se)


def _measured(name: str) -> str:
    return "width" if name == "half_width" else name
