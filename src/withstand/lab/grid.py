"""The cells of a plan: every world with every procedure and focal quantity, laid out for the engine."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from functools import cached_property

from withstand.departures.base import Departure
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
    points : tuple of (Axis, float), optional
        Axes with severities to visit, instead of the plan's ladders. They may lie beyond what a scenario may ask for, such as a
        ratio of SDs below 1: the departure turned round.
    """

    study: Study
    plan: Plan
    points: tuple[tuple[Axis, float], ...] | None = None

    @cached_property
    def impossible(self) -> dict[str, str]:
        """Why a departure makes no sense on this design, by the identity of its axis."""
        reasons = {}
        for axis in self.plan.axes:
            for departure in (axis.departure, *(companion for companion, _ in axis.companions)):
                reason = departure.not_applicable(self.study.design)
                if reason is not None:
                    reasons[axis.identity] = f"{departure.name}: {reason}"
        return reasons

    @cached_property
    def possible(self) -> tuple[Axis, ...]:
        """The axes that make sense on this design."""
        return tuple(axis for axis in self.plan.axes if axis.identity not in self.impossible)

    @cached_property
    def _along(self) -> dict[str, str]:
        """What tells axes of one kind apart, by identity of the axis: the column, and what else it takes."""
        found = {}
        for axis in self.plan.axes:
            kin = [
                other for other in self.plan.axes if (other.departure.kind, other.stack) == (axis.departure.kind, axis.stack)
            ]
            for tell in (lambda d: d.along, _variant, _options):
                found[axis.identity] = tell(axis.departure)
                if [tell(other.departure) for other in kin].count(found[axis.identity]) == 1:
                    break
        return found

    def along(self, axis: Axis) -> str:
        """The column an axis acts along, with its variant where the plan has several that differ in nothing else."""
        return self._along[axis.identity]

    @cached_property
    def spots(self) -> tuple[Spot, ...]:
        """The baseline, then every severity of every possible departure."""
        points = self.points
        if points is None:
            points = tuple((axis, severity) for axis in self.possible for severity in axis.departure.ladder)
        return (Spot(None, 0.0, BASELINE), *(Spot(axis, severity, i) for i, (axis, severity) in enumerate(points)))

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

    def at(self, points: Iterable[tuple[Axis, float]], procedures: Iterable[Procedure] | None = None) -> Grid:
        """The same study at other severities, with all or some of the procedures."""
        plan = self.plan if procedures is None else replace(self.plan, procedures=tuple(procedures))
        return Grid(self.study, plan, tuple(points))


def _variant(departure: Departure) -> str:
    """The column with what its name says besides: 'dry_hours (downwards)'."""
    rest = departure.name.removeprefix(departure.kind).removeprefix(f" along {departure.along}").strip(", ")
    return " ".join(part for part in (departure.along, rest) if part)


def _options(departure: Departure) -> str:
    """Every option that is not at its default."""
    return departure.identity.removeprefix(departure.kind).strip("()")
