"""What is asked of the number of rows: targets, the worlds in which they must be met, and how hard to look."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace

from withstand.departures.world import World
from withstand.departures.worst_fan import WorstFan
from withstand.errors import ScenarioError, nearest
from withstand.judgement.aspects import aspects_of
from withstand.judgement.size_points import Requirement
from withstand.judgement.tolerance import Tolerance
from withstand.lab.plan import Axis
from withstand.procedures.base import Answer, LinearProcedure, Procedure
from withstand.study.focus import Focus
from withstand.study.planned import MOST_ROWS
from withstand.study.study import Study

NO_EFFECT = "State the smallest effect that matters, in the study (effect = { ... }) or with --effect."
"""The remedy where power is asked for without an effect."""


@dataclass(frozen=True)
class Targets:
    """What must be met at the number of rows sought, all at once.

    Parameters
    ----------
    holds : bool
        Coverage or size, and bias, within tolerance.
    power : float, optional
        Power at the stated effect, at least.
    half_width : float, optional
        Mean half width of the interval, at most, in the unit of the focal quantity.

    Raises
    ------
    ScenarioError
        If nothing is asked, or the impossible.
    """

    holds: bool = True
    power: float | None = None
    half_width: float | None = None

    def __post_init__(self) -> None:
        if self.power is not None and not 0.0 < self.power < 1.0:
            meant = self.power / 100.0 if 10.0 <= self.power < 100.0 else 0.9  # per cent, it seems
            raise ScenarioError(
                f"the target power is {self.power:g}",
                where="--power",
                remedy=f"Give a number between 0 and 1, as in {meant:g}.",
            )
        if self.half_width is not None and not 0.0 < self.half_width < math.inf:
            raise ScenarioError(
                f"the target half width is {self.half_width:g}",
                where="--half-width",
                remedy="Give a positive number in the unit of the focal quantity.",
            )
        if not self.holds and self.power is None and self.half_width is None:
            raise ScenarioError("nothing is asked of the number of rows", where="size", remedy="Give a power or a half width.")

    @property
    def scale_free(self) -> bool:
        """Whether the answer is the same for every error SD."""
        return self.power is None and self.half_width is None


@dataclass(frozen=True)
class Effort:
    """How hard to look.

    Parameters
    ----------
    seed : int
        Seed of the first look; the second look has noise of its own.
    repetitions, most : int
        Replicates of a simulated cell at one n, at first and at most.
    largest : int
        The largest number of rows tried.
    delta : float
        The interval for n has level 1 - delta.
    workers : int
        Worker processes.
    method : {"auto", "simulated"}
        Whether cells that have exact answers get them.
    """

    seed: int = 1
    repetitions: int = 10_000
    most: int = 160_000
    largest: int = 20_000
    delta: float = 0.01
    workers: int = 1
    method: str = "auto"

    def __post_init__(self) -> None:
        if not 4 <= self.largest <= MOST_ROWS:
            raise ScenarioError(
                f"the largest number of rows is {self.largest}", where="--largest", remedy=f"Give 4 to {MOST_ROWS:,}."
            )
        if self.method not in ("auto", "simulated"):
            raise ScenarioError(f"unknown method '{self.method}'", where="method", remedy="Known: auto, simulated.")


@dataclass(frozen=True)
class Condition:
    """A world in which the targets must be met.

    Parameters
    ----------
    world : World
        The empty one is that in which nothing is wrong.
    """

    world: World = field(default_factory=World)

    @property
    def name(self) -> str:
        """As it is shown to people."""
        if self.world.baseline:
            return "nothing wrong"
        return " + ".join(f"{departure.name}, {departure.label(severity)}" for departure, severity in self.world.stack)

    @property
    def point(self) -> tuple[Axis, float] | None:
        """The world as an axis and the severity on it; None where nothing is wrong."""
        if self.world.baseline:
            return None
        (first, severity), *companions = self.world.stack
        return Axis(first, tuple(companions)), severity

    def bound_to(self, focus: Focus) -> Condition:
        """The same with the worst fan bound to the focal quantity."""
        stack = tuple(
            (departure.for_focus(focus) if isinstance(departure, WorstFan) and departure.row is None else departure, severity)
            for departure, severity in self.world.stack
        )
        return Condition(World(stack))


def chosen_focus(study: Study, name: str | None = None, effect: float | None = None) -> Focus:
    """One focal quantity of a study, by name; the first if left out.

    Parameters
    ----------
    effect : float, optional
        Replaces the stated effect, in the unit of the focal quantity.

    Raises
    ------
    ScenarioError
        If there is no such focus, or the effect does not suit it.
    """
    names = [focus.name for focus in study.focus]
    if name is not None and name not in names:
        raise ScenarioError(f"unknown focus '{name}'", where="focus", remedy=nearest(name, names))
    focus = study.focus[0 if name is None else names.index(name)]
    if effect is None:
        return focus
    if not focus.scalar:
        raise ScenarioError(
            f"one number is no effect of '{focus.name}', which has {focus.k} parts",
            where="--effect",
            remedy="State its effect in the scenario, one number for each coefficient.",
        )
    if effect == 0.0 or not math.isfinite(effect):
        raise ScenarioError(
            f"the effect {effect:g} cannot be told from none", where="--effect", remedy="Give the smallest effect that matters."
        )
    return replace(focus, effect=focus.L[:, 0] * 0.0 + effect)


def requirements_of(
    targets: Targets, tolerance: Tolerance, study: Study, procedure: Procedure, focus: Focus, conditions: Sequence[Condition]
) -> tuple[Requirement, ...]:
    """Targets as bounds on measures, one for each world.

    Raises
    ------
    ScenarioError
        If a target asks what the procedure does not answer, or power without an effect.
    """
    found: list[Requirement] = []
    for i, condition in enumerate(conditions):
        told = f" under {condition.name}" if not condition.world.baseline else " when nothing is wrong"
        found += [
            replace(r, key=f"{i}|{r.measure}", words=r.words + told, bound=r.words, condition=i)
            for r in _of(targets, tolerance, study, procedure, focus)
        ]
    return tuple(found)


def _of(targets: Targets, tolerance: Tolerance, study: Study, procedure: Procedure, focus: Focus) -> Iterable[Requirement]:
    answers = procedure.answers(focus)
    if targets.holds:
        aspects = aspects_of(tolerance, study.alpha)
        interval, test = Answer.INTERVAL in answers, Answer.TEST in answers
        speaks = {
            "coverage": interval,
            # The test of a linear procedure is its interval turned round: judged once.
            "size": test and not (interval and isinstance(procedure, LinearProcedure)),
            "miss_below": interval and focus.scalar,
            "miss_above": interval and focus.scalar,
            "bias": Answer.ESTIMATE in answers and focus.scalar,
            "bias_in_sd": Answer.ESTIMATE in answers and focus.scalar,
        }
        for aspect in aspects.values():
            if speaks[aspect.measure]:
                yield Requirement(
                    "", aspect.measure, aspect.low, aspect.high, _in_words(aspect.measure, aspect.low, aspect.high)
                )
    if targets.power is not None:
        if Answer.TEST not in answers:
            raise ScenarioError(
                f"'{procedure.identity}' has no test of '{focus.name}', so there is no power",
                where="--power",
                remedy="Leave it out.",
            )
        if focus.effect is None:
            raise ScenarioError(
                f"power for '{focus.name}' is asked for without an effect", where="study.effect", remedy=NO_EFFECT
            )
        yield Requirement("", "power", low=targets.power, words=f"power at least {targets.power:g}")
    if targets.half_width is not None:
        if Answer.INTERVAL not in answers or not focus.scalar:
            raise ScenarioError(
                f"'{procedure.identity}' gives no interval for '{focus.name}'", where="--half-width", remedy="Leave it out."
            )
        yield Requirement("", "half_width", high=targets.half_width, words=f"half width at most {targets.half_width:g}")


def _in_words(measure: str, low: float, high: float) -> str:
    said = {"miss_below": "share missing below", "miss_above": "share missing above", "bias_in_sd": "bias in SDs"}.get(
        measure, measure
    )
    if math.isfinite(low) and math.isfinite(high):
        return f"{said} between {low:g} and {high:g}"
    return f"{said} at least {low:g}" if math.isfinite(low) else f"{said} at most {high:g}"
