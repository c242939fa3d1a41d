"""The spread layer: the error SD is a power of a positive variable."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.along import FITTED, column_along, value_at
from withstand.departures.base import SpreadDeparture, register
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats
from withstand.study.focus import Point


@register
@dataclass(frozen=True)
class PowerSpread(SpreadDeparture):
    """The error SD is a power of a positive variable.

    Parameters
    ----------
    severity : float or sequence of float
        Exponent k of SD proportional to z^k: 0 constant, 0.5 as for counts, 1 constant coefficient of variation.
    along : str
        A positive numeric column, or "fitted" for the reference fitted mean.
    """

    along: str = FITTED

    kind = "power-spread"
    title = "error SD a power of a variable"
    unit = "power of the variable the SD follows"
    neutral = 0.0
    default_ladder = (0.5, 1.0, 2.0)
    construction = "s = z^k, mean square 1; z positive"
    source = "power-of-the-mean variance; Box & Hill (1974)"

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity <= 10.0:
            raise self.refuse(severity, "a number from 0 to 10")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"power {severity:g}"

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        z = column_along(design, self.along, self.kind)
        if z.min() <= 0.0:
            return (
                f"not applicable, because '{self.along}' goes down to {z.min():g} and a power of it needs positive values; "
                "use fan, or name a positive column"
            )
        if np.ptp(z) == 0.0:
            return f"not applicable, because '{self.along}' is the same in every row; name a column that varies"
        return None

    def profile(self, design: Design, severity: float) -> Floats:
        """See SpreadDeparture."""
        return np.power(self._ratio(design, column_along(design, self.along, self.kind)), severity)

    def profile_at(self, design: Design, point: Point, severity: float) -> float:
        """See SpreadDeparture. The power law is continued beyond the range of the rows."""
        return float(np.power(self._ratio(design, np.array([value_at(point, self.along, self.kind)])), severity)[0])

    def _ratio(self, design: Design, z: Floats) -> Floats:
        """The ratio of z to its largest value on the rows, which keeps high powers finite."""
        if not z.min() > 0.0:
            raise ScenarioError(
                f"'power-spread' along '{self.along}' meets the value {z.min():g}, whose powers are not positive",
                where="departure.along",
                remedy="Use fan, or a column and points with positive values.",
            )
        return np.asarray(z / column_along(design, self.along, self.kind).max())
