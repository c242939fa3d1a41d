"""What to try on a study: departures with their companions, procedures, tolerance and effort."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

from withstand.departures.base import Departure
from withstand.departures.world import World
from withstand.errors import ScenarioError
from withstand.judgement.tolerance import Tolerance
from withstand.procedures.base import Procedure

Method = Literal["auto", "simulated"]


@dataclass(frozen=True)
class Axis:
    """A departure tried along its ladder, with companions that act all the while.

    Parameters
    ----------
    departure : Departure
        The one whose severity varies.
    companions : tuple of (Departure, float)
        Further departures, each at one severity.
    """

    departure: Departure
    companions: tuple[tuple[Departure, float], ...] = ()

    def world(self, severity: float) -> World:
        """The world at one severity."""
        return World(((self.departure, severity), *self.companions))

    @property
    def stack(self) -> str:
        """Names the companions; empty without any."""
        return " + ".join(f"{companion.name} {companion.label(severity)}" for companion, severity in self.companions)

    @cached_property
    def identity(self) -> str:
        """A text that names the axis with all options but the severity."""
        return " + ".join([self.departure.identity, *(f"{d.identity}={s:.12g}" for d, s in self.companions)])


@dataclass(frozen=True)
class Plan:
    """What to try.

    Parameters
    ----------
    axes : tuple of Axis
        Departures to try.
    procedures : tuple of Procedure
        Procedures to judge; the first is the user's own.
    tolerance : Tolerance
        What the user can live with.
    seed : int
        Seed of the run.
    repetitions : int
        Replicates a simulated cell gets at least.
    most : int
        Replicates a simulated cell gets at most in the search for a verdict.
    wrong_verdict : float
        Accepted chance that a verdict is wrong.
    method : {"auto", "simulated"}
        Whether cells that have exact answers get them.

    Raises
    ------
    ScenarioError
        If there is no procedure, or the numbers are out of range.
    """

    axes: tuple[Axis, ...]
    procedures: tuple[Procedure, ...]
    tolerance: Tolerance = field(default_factory=Tolerance)
    seed: int = 1
    repetitions: int = 10_000
    most: int = 160_000
    wrong_verdict: float = 0.01
    method: Method = "auto"

    def __post_init__(self) -> None:
        if not self.procedures:
            raise ScenarioError("no procedure to judge", where="procedures.use", remedy='Name at least one, such as "ols".')
        if self.repetitions < 100:
            raise ScenarioError(
                f"repetitions is {self.repetitions}", where="simulation.repetitions", remedy="Give at least 100."
            )
        if self.most < self.repetitions:
            raise ScenarioError(
                f"most is {self.most}, below repetitions ({self.repetitions})",
                where="simulation.most",
                remedy="Give at least the number of repetitions.",
            )
        if not 0.0 < self.wrong_verdict < 0.5:
            raise ScenarioError(
                f"wrong_verdict is {self.wrong_verdict:g}",
                where="simulation.wrong_verdict",
                remedy="Give a small chance, such as 0.01.",
            )
        if self.seed < 0:
            raise ScenarioError(f"seed is {self.seed}", where="simulation.seed", remedy="Give a whole number from 0 up.")
        _refuse_twins("departure", [axis.identity for axis in self.axes])
        _refuse_twins("procedures.use", [procedure.identity for procedure in self.procedures])

    @property
    def digest(self) -> str:
        """Hash of the plan; it goes into the report."""
        parts = [f"{axis.identity}:{axis.departure.ladder}" for axis in self.axes]
        parts += [procedure.key for procedure in self.procedures]
        parts += [repr(self.tolerance), repr((self.seed, self.repetitions, self.most, self.wrong_verdict, self.method))]
        return hashlib.sha256("|".join(parts).encode()).hexdigest()


def _refuse_twins(where: str, names: Sequence[str]) -> None:
    twins = sorted({name for name in names if names.count(name) > 1})
    if twins:
        raise ScenarioError(f"'{twins[0]}' is named twice", where=where, remedy="Keep one of them.")
