"""The mean layer: the true mean bends where the model is straight."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre

from withstand.departures.along import column_along, value_at
from withstand.departures.base import MeanDeparture, register
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, Point

_TARGETS = ("line", "average-slope")

_HIGHEST_POWER = 6
"""A model that follows every power up to this one is taken to follow any curve worth the name."""

_SPANNED = 1e-8
"""A power counts as spanned by the model when this share of its norm, or less, is left over."""


@dataclass(frozen=True)
class _Bend:
    """The polynomial g in Legendre terms of t = (v - centre) / half, t in [-1, 1] on the rows."""

    power: int
    terms: Floats
    centre: float
    half: float

    def __call__(self, v: Floats | float) -> Floats:
        return np.asarray(legendre.legval((np.asarray(v) - self.centre) / self.half, self.terms), dtype=np.float64)

    def slope(self, v: Floats) -> Floats:
        """The derivative of g in v, in error SDs per unit of v."""
        t = (v - self.centre) / self.half
        return np.asarray(legendre.legval(t, legendre.legder(self.terms)) / self.half, dtype=np.float64)


@register
@dataclass(frozen=True)
class Curvature(MeanDeparture):
    """The true mean is curved in a predictor.

    Parameters
    ----------
    severity : float or sequence of float
        Peak distance of the true mean from its best straight line over the rows, in error SDs, 0 or more.
    along : str
        The predictor, a numeric column.
    target : {'line', 'average-slope'}
        What the coefficient of the predictor is held to estimate: the slope of the best straight line over the rows
        (unweighted), or the mean over the rows of the derivative of the true mean.

    Notes
    -----
    g is the residual of v^2 on (1, v) over the rows, scaled to maximum absolute value 1. Where the model spans v^2 already
    (a squared term, say), g is the residual of the next power on all lower ones, so that it stays orthogonal to 1 and v; see
    `power`. At a point outside the rows the same polynomial is continued, and may exceed the severity.
    """

    along: str = ""
    target: str = "line"

    kind = "curvature"
    title = "curved mean"
    unit = "distance from the straight line in error SDs"
    neutral = 0.0
    default_ladder = (0.25, 0.5, 1.0, 2.0)
    construction = "g = severity * residual of v^2 on (1, v), largest absolute value 1; the next power where the model has v^2"
    source = "residual of a polynomial term; common practice"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.target not in _TARGETS:
            raise ScenarioError(
                f"unknown target '{self.target}' for 'curvature'",
                where="departure.target",
                remedy=f"Known: {', '.join(_TARGETS)}.",
            )

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity <= 1000.0:
            raise self.refuse(severity, "a number from 0 to 1000")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"peak {severity:g} SD"

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        v = column_along(design, self.along, self.kind)
        distinct = np.unique(v).size
        if distinct < 3:
            return (
                f"not applicable, because '{self.along}' takes {distinct} values and a line passes through any means there; "
                "name a column with three or more"
            )
        power = self.power(design)
        if power is None:
            return (
                f"not applicable, because the model follows every curve in '{self.along}' (all its powers up to "
                f"{min(distinct - 1, _HIGHEST_POWER)}); name another column"
            )
        if self.target == "average-slope" and (self.along not in design.names or power > 2):
            return (
                f"not applicable, because no single coefficient of the model is the average slope in '{self.along}'; "
                'use target = "line"'
            )
        return None

    def power(self, design: Design) -> int | None:
        """The power of the predictor that bends: the lowest from 2 on that the model does not span; None if it spans all."""
        bend = self._bend(design)
        return None if bend is None else bend.power

    def note(self, design: Design) -> str:
        """See Departure."""
        power = self.power(design)
        if power is None or power == 2:
            return ""
        return f"the model already follows powers of '{self.along}' up to {power - 1}; the curvature is in its power {power}"

    def shift(self, design: Design, severity: float) -> Floats:
        """See MeanDeparture."""
        return severity * self._known_bend(design)(column_along(design, self.along, self.kind))

    def shift_at(self, design: Design, point: Point, severity: float) -> float:
        """See MeanDeparture."""
        return severity * float(self._known_bend(design)(value_at(point, self.along, self.kind)))

    def target_shift(self, design: Design, focus: Focus, severity: float) -> Floats:
        """See MeanDeparture."""
        if focus.point is not None or self.target == "line":
            return super().target_shift(design, focus, severity)
        moved = np.zeros(design.p)
        if self.along in design.names:
            slope = self._known_bend(design).slope(column_along(design, self.along, self.kind))
            moved[design.names.index(self.along)] = severity * float(np.mean(slope))
        return np.asarray(focus.L @ moved)

    def _known_bend(self, design: Design) -> _Bend:
        bend = self._bend(design)
        if bend is None:
            raise ScenarioError(
                f"'curvature' along '{self.along}': the model follows every curve there",
                where="departure.along",
                remedy="Name a numeric column with three or more values that the model does not fit by level.",
            )
        return bend

    def _bend(self, design: Design) -> _Bend | None:
        v = column_along(design, self.along, self.kind)
        centre, half = (float(v.max()) + float(v.min())) / 2.0, float(np.ptp(v)) / 2.0
        if half == 0.0:
            return None
        t = (v - centre) / half
        for power in range(2, min(np.unique(v).size - 1, _HIGHEST_POWER) + 1):
            table = legendre.legvander(t, power)
            terms = np.append(-np.linalg.lstsq(table[:, :power], table[:, power], rcond=None)[0], 1.0)
            g = table @ terms
            beyond = g - design.Q @ (design.Q.T @ g)
            if np.linalg.norm(beyond) > _SPANNED * np.linalg.norm(g):
                return _Bend(power, terms / np.abs(g).max(), centre, half)
        return None
