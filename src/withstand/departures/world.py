"""A world: a stack of departures at given severities, which turns shared noise into errors."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np

from withstand.departures.base import (
    Departure,
    Dependence,
    DependenceDeparture,
    LawDeparture,
    Layer,
    MeanDeparture,
    Noise,
    NoiseStream,
    OutlierDeparture,
    Outliers,
    SpreadDeparture,
)
from withstand.departures.law import Law
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, Point

T = TypeVar("T", bound=Departure)

_SINGLE = {Layer.LAW: "marginal law", Layer.DEPENDENCE: "dependence"}


@dataclass(frozen=True)
class World:
    """A stack of departures, each at one severity; the empty stack is the world in which nothing is wrong.

    Parameters
    ----------
    stack : tuple of (Departure, float)
        Departures with their severities. At most one gives the law and at most one the dependence.

    Raises
    ------
    ScenarioError
        If a departure comes twice, or two claim the law, or two the dependence.
    """

    stack: tuple[tuple[Departure, float], ...] = ()

    def __post_init__(self) -> None:
        known = [departure.identity for departure, _ in self.stack]
        if twice := [departure.name for departure, _ in self.stack if known.count(departure.identity) > 1]:
            raise ScenarioError(f"'{twice[0]}' acts twice in a stack", where="departure.with", remedy="Keep one of them.")
        for layer, what in _SINGLE.items():
            names = [departure.kind for departure, _ in self.stack if departure.layer is layer]
            if len(names) > 1:
                raise ScenarioError(
                    f"'{names[0]}' and '{names[1]}' both set the {what} of the errors",
                    where="departure.with",
                    remedy="Keep one of them in a stack.",
                )

    @property
    def key(self) -> str:
        """A text that names the world completely; 'none' for the baseline."""
        return " + ".join(f"{departure.identity}={severity:.12g}" for departure, severity in self.stack) or "none"

    @property
    def baseline(self) -> bool:
        """Whether nothing is wrong in this world by construction."""
        return not self.stack

    def on(self, design: Design) -> Disturbance:
        """Realise the world on a design."""
        shift = np.zeros(design.n)
        log_spread = np.zeros(design.n)
        law: Law | None = None
        dependence: Dependence | None = None
        outliers: list[Outliers] = []
        for departure, severity in self.stack:
            match departure:
                case MeanDeparture():
                    shift += departure.shift(design, severity)
                case SpreadDeparture():
                    log_spread += np.log(departure.profile(design, severity))
                case LawDeparture():
                    law = departure.law(severity)
                case DependenceDeparture():
                    dependence = departure.dependence(design, severity)
                case OutlierDeparture():
                    placed = departure.outliers(design, severity)
                    outliers += [] if placed is None else [placed]
        spread = np.exp(log_spread)
        scale = np.sqrt(np.mean(spread**2))
        return Disturbance(
            world=self,
            design=design,
            mean=shift if shift.any() else None,
            spread=None if np.ptp(log_spread) == 0.0 else spread / scale,
            spread_scale=float(scale),
            law=law,
            dependence=dependence,
            outliers=tuple(outliers),
        )


@dataclass(frozen=True, eq=False)
class Disturbance:
    """A world realised on one design. None stands for 'as the model assumes' and costs nothing.

    Parameters
    ----------
    mean : ndarray of shape (n,) or None
        g, in error SDs.
    spread : ndarray of shape (n,) or None
        s, mean square 1.
    spread_scale : float
        What the raw profiles were divided by, needed at points outside the rows.
    law : Law or None
        Law of the independent parts of u.
    dependence : Dependence or None
        Correlation of u.
    outliers : tuple of Outliers
        Shifts added last.
    """

    world: World
    design: Design
    mean: Floats | None
    spread: Floats | None
    spread_scale: float
    law: Law | None
    dependence: Dependence | None
    outliers: tuple[Outliers, ...]

    @property
    def gaussian(self) -> bool:
        """Whether the errors are jointly normal, so that exact answers exist."""
        return self.law is None and not self.outliers

    def draw(self, noise: Noise, out: Floats) -> Floats:
        """Errors g + s u + o, in error SDs.

        Parameters
        ----------
        noise : Noise
            The block's shared noise.
        out : ndarray of shape (n, B)
            Buffer; may be left unused.

        Returns
        -------
        ndarray of shape (n, B)
            `out`, or the shared scores themselves where nothing is wrong. Not to be written to.
        """
        scores = noise.normal(NoiseStream.ERRORS, self.design.n)
        errors = scores
        if self.dependence is not None:
            errors = self.dependence.apply(scores, self.law, noise, out)
        elif self.law is not None:
            errors = self.law(scores, out)
        if self.spread is not None:
            errors = np.multiply(errors, self.spread[:, None], out=out)
        if self.mean is not None:
            errors = np.add(errors, self.mean[:, None], out=out)
        if self.outliers and errors is scores:
            np.copyto(out, scores)
            errors = out
        for shifts in self.outliers:
            shifts.add(errors, noise)
        return errors

    def target_shift(self, focus: Focus) -> Floats:
        """True value of the focal quantity minus L beta, (k,), per error SD, without the error of a new response."""
        shift = np.zeros(focus.k)
        for departure, severity in self._of(MeanDeparture):
            shift += departure.target_shift(self.design, focus, severity)
        return shift

    def spread_at(self, point: Point) -> float:
        """S at a point, in the normalisation of the rows."""
        value = 1.0
        for departure, severity in self._of(SpreadDeparture):
            value *= departure.profile_at(self.design, point, severity)
        return value / self.spread_scale

    def new_errors(self, point: Point, noise: Noise) -> Floats:
        """Errors of a new, independent response at a point, (B,), in error SDs; outliers do not strike it."""
        scores = noise.normal(NoiseStream.NEW, 1)[0]
        errors = scores if self.law is None else self.law(scores)
        return errors * self.spread_at(point)

    def covariance(self, M: Floats) -> Floats:
        """Covariance of the errors (random outliers excluded), in squared error SDs, times M (n, m), never forming it."""
        spread = self.spread
        inner = M if spread is None else spread[:, None] * M
        inner = inner if self.dependence is None else self.dependence.correlate(inner)
        return inner if spread is None else spread[:, None] * inner

    def _of(self, kind: type[T]) -> Iterable[tuple[T, float]]:
        return [(departure, severity) for departure, severity in self.world.stack if isinstance(departure, kind)]
