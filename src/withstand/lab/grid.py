"""The cells of a plan: every world with every procedure and focal quantity, laid out for the engine."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property

from withstand.departures.world import World
from withstand.engine.block import BASELINE
from withstand.engine.job import TASK_REPLICATES, Job, tasks_for
from withstand.judgement.aspects import aspects_of
from withstand.judgement.findings import Aspect
from withstand.judgement.sequential import Looks
from withstand.lab.plan import Axis, Plan
from withstand.procedures.base import Procedure
from withstand.study.focus import Focus
from withstand.study.study import Study


@dataclass(frozen=True, eq=False)
class Spot:
    """A place on the grid of worlds.

    Parameters
    ----------
    axis : Axis or None
        None for the baseline.
    severity : float
        0 for the baseline.
    world : int
        Index of the world in the job.
    """

    axis: Axis | None
    severity: float
    world: int


@dataclass(frozen=True, eq=False)
class Cell:
    """A place in the grid with a procedure and a focal quantity."""

    spot: Spot
    procedure_index: int
    focus_index: int
    procedure: Procedure
    focus: Focus


@dataclass(frozen=True, eq=False)
class Grid:
    """A plan laid out on a study.

    Parameters
    ----------
    study : Study
        What the user has.
    plan : Plan
        What to try; departures that make no sense here are in `impossible`.
    """

    study: Study
    plan: Plan

    @cached_property
    def impossible(self) -> dict[str, str]:
        """Why a departure makes no sense on this design, by its name."""
        reasons = {}
        for axis in self.plan.axes:
            for departure in (axis.departure, *(companion for companion, _ in axis.companions)):
                reason = departure.not_applicable(self.study.design)
                if reason is not None:
                    reasons[axis.departure.name] = reason
        return reasons

    @cached_property
    def spots(self) -> tuple[Spot, ...]:
        """The baseline, then every severity of every possible departure."""
        spots = [Spot(None, 0.0, BASELINE)]
        for axis in self.plan.axes:
            if axis.departure.name not in self.impossible:
                for severity in axis.departure.ladder:
                    spots.append(Spot(axis, severity, len(spots) - 1))
        return tuple(spots)

    @cached_property
    def job(self) -> Job:
        """The engine's view of the grid."""
        worlds = tuple(spot.axis.world(spot.severity) for spot in self.spots if spot.axis is not None)
        return Job(self.study, worlds, self.plan.procedures, self.plan.seed)

    @cached_property
    def looks(self) -> Looks:
        """When verdicts are looked at; whole tasks, so that a look is a stored state."""
        first = tasks_for(self.plan.repetitions) * TASK_REPLICATES
        return Looks(first, max(first, tasks_for(self.plan.most) * TASK_REPLICATES))

    @cached_property
    def aspects(self) -> dict[str, Aspect]:
        """The measures the plan's tolerance speaks about."""
        return aspects_of(self.plan.tolerance, self.study.alpha)

    def world(self, spot: Spot) -> World:
        """The world at a spot."""
        return World() if spot.axis is None else spot.axis.world(spot.severity)

    @property
    def cells(self) -> Iterator[Cell]:
        """Every cell whose procedure applies to its focal quantity, baseline first."""
        for spot in self.spots:
            for i, procedure in enumerate(self.plan.procedures):
                for j, focus in enumerate(self.study.focus):
                    if (i, j) not in self.job.refusals:
                        yield Cell(spot, i, j, procedure, focus)

    def with_axis(self, axis: Axis, severity: float) -> Grid:
        """The same study and procedures with one departure at one severity, as the search for a tipping point needs it."""
        single = Axis(replace(axis.departure, severity=(severity,)), axis.companions)
        return Grid(self.study, replace(self.plan, axes=(single,)))
