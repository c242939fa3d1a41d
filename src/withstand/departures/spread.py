"""The spread layer: the error SD changes over the range of a variable."""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass

import numpy as np

from withstand.departures.along import FITTED, column_along, value_at
from withstand.departures.base import SpreadDeparture, register
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats
from withstand.study.focus import Point

LARGEST_RATIO = 1000.0
"""Largest ratio of SDs accepted."""


@dataclass(frozen=True)
class RatioSpread(SpreadDeparture):
    """A spread profile whose severity is the ratio of the largest error SD to the smallest."""

    unit = "ratio of error SDs"
    neutral = 1.0
    default_ladder = (1.5, 2.0, 3.0, 5.0)

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 1.0 <= severity <= LARGEST_RATIO:
            raise self.refuse(severity, f"a number from 1 to {LARGEST_RATIO:g}")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"SD ratio {severity:g}"


@dataclass(frozen=True)
class RangeSpread(RatioSpread):
    """A profile ratio^f(t), where t in [0, 1] is the place within the range of a numeric variable over the rows."""

    along: str = FITTED

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        if np.ptp(column_along(design, self.along, self.kind)) == 0.0:
            return f"not applicable, because '{self.along}' is the same in every row; name a column that varies"
        return None

    def profile(self, design: Design, severity: float) -> Floats:
        """See SpreadDeparture."""
        return np.power(severity, self.exponent(self._place(design, column_along(design, self.along, self.kind))))

    def profile_at(self, design: Design, point: Point, severity: float) -> float:
        """See SpreadDeparture. Beyond the range of the rows the SD stays what it is at the nearer end."""
        place = self._place(design, np.array([value_at(point, self.along, self.kind)]))
        return float(np.power(severity, self.exponent(np.clip(place, 0.0, 1.0)))[0])

    @abstractmethod
    def exponent(self, t: Floats) -> Floats:
        """The exponent f(t), from 0 to 1."""

    def _place(self, design: Design, z: Floats) -> Floats:
        """(z - min) / (max - min) with the range of the rows."""
        rows = column_along(design, self.along, self.kind)
        low, width = float(rows.min()), float(np.ptp(rows))
        return np.asarray((z - low) / width) if width > 0.0 else np.zeros_like(z)


@register
@dataclass(frozen=True)
class Fan(RangeSpread):
    """The error SD grows along a variable.

    Parameters
    ----------
    severity : float or sequence of float
        Ratio of the error SD at the high end of the variable to that at the low end, 1 or more.
    along : str
        A numeric column, or "fitted" for the reference fitted mean.
    direction : {'up', 'down'}
        "down" turns it round: the ratio is that of the low end to the high end.

    Notes
    -----
    s = ratio^t, t = (z - min z) / (max z - min z), then scaled to mean square 1. At a point beyond the range of the rows t is
    held at the nearer end.
    """

    direction: str = "up"

    kind = "fan"
    title = "error SD growing along a variable"
    construction = "s = ratio^t, t = (z - min z) / (max z - min z), mean square 1; direction down: ratio^(1 - t)"
    source = "exponential variance function; Harvey (1976)"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.direction not in ("up", "down"):
            raise ScenarioError(
                f"unknown direction '{self.direction}' for 'fan'", where="departure.direction", remedy="Known: down, up."
            )

    @property
    def name(self) -> str:
        """See Departure."""
        return super().name if self.direction == "up" else f"{super().name} (downwards)"

    def exponent(self, t: Floats) -> Floats:
        """See RangeSpread."""
        return t if self.direction == "up" else 1.0 - t


@register
@dataclass(frozen=True)
class Bowtie(RangeSpread):
    """The error SD is larger at both ends of a variable than in the middle, or the reverse.

    Parameters
    ----------
    severity : float or sequence of float
        Ratio of the error SD at the two ends to that in the middle, 1 or more.
    along : str
        A numeric column, or "fitted" for the reference fitted mean.
    spindle : bool
        Turn it round: the ratio is that of the middle to the ends.

    Notes
    -----
    s = ratio^|2t - 1| with the t of `Fan`, then scaled to mean square 1; a spindle has ratio^(1 - |2t - 1|).
    """

    spindle: bool = False

    kind = "bowtie"
    title = "error SD larger at both ends of a variable"
    construction = "s = ratio^|2t - 1|, t as in fan, mean square 1; spindle: ratio^(1 - |2t - 1|)"
    source = "symmetric counterpart of fan; common practice"

    @property
    def name(self) -> str:
        """See Departure."""
        return f"{super().name} (spindle)" if self.spindle else super().name

    def exponent(self, t: Floats) -> Floats:
        """See RangeSpread."""
        ends = np.abs(2.0 * t - 1.0)
        return np.asarray(1.0 - ends if self.spindle else ends)
