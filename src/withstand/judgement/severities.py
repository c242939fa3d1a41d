"""Over which severities a departure is looked for, and on which scale a step means about the same everywhere."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from withstand.departures.along import column_along
from withstand.departures.base import Departure
from withstand.departures.dependence import Clusters, Serial
from withstand.departures.level_spread import LevelSpread
from withstand.departures.mean import Curvature
from withstand.departures.outliers import Outliers
from withstand.departures.power_spread import PowerSpread
from withstand.departures.shape import Contaminated, HeavyTails, Skew
from withstand.departures.spread import Bowtie, Fan
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats

Map = Callable[[Floats], Floats]

_POINTS_A_SIDE = 12
"""Severities simulated on one side of neutral."""

_RATIO = 30.0
"""Ratio of SDs looked up to, and its reciprocal."""


@dataclass(frozen=True, eq=False)
class Span:
    """The severities a departure is looked for over.

    Parameters
    ----------
    severities : ndarray of shape (S,)
        Increasing, neutral among them.
    scale : callable
        Maps severities to the scale on which they are equally spaced.
    unscale : callable
        Its inverse.
    neutral : float
        Where the assumption holds exactly.
    """

    severities: Floats
    scale: Map
    unscale: Map
    neutral: float

    @property
    def two_sided(self) -> bool:
        """Whether the departure has a direction, so that neutral lies within the span."""
        return bool(self.severities[0] < self.neutral)


def span_of(departure: Departure, design: Design) -> Span:
    """Choose the severities.

    Parameters
    ----------
    departure : Departure
        Applicable to the design.
    design : Design
        The rows.

    Notes
    -----
    Directions: a fan, a bowtie or noisy levels with a ratio below 1 is the same departure turned round (a fan down, a spindle,
    quiet levels); a power below 0 is a spread that falls; rho below 0 is alternation, where the order column allows it. All
    others start at neutral.
    """
    match departure:
        case Fan() | Bowtie() | LevelSpread():
            return _span(departure, -np.log(_RATIO), np.log(_RATIO), np.log, np.exp)
        case PowerSpread():
            z = column_along(design, departure.along, departure.kind)
            # Powers that make the ratio of SDs 1000 are as far as anyone would look.
            most = min(10.0, float(np.log(1000.0) / np.log(z.max() / z.min())))
            return _span(departure, -most, most, _same, _same)
        case Serial():
            lowest = -np.arctanh(0.95) if _alternates(departure, design) else 0.0
            return _span(departure, lowest, np.arctanh(0.98), np.arctanh, np.tanh)
        case Clusters():
            size = design.n / max(design.group_count, 1)
            return _span(
                departure, 0.0, float(_log_odds(np.array(0.99), size)), lambda s: _log_odds(s, size), lambda x: _icc(x, size)
            )
        case Contaminated():
            return _span(departure, 0.0, np.log(50.0), np.log, np.exp)
        case HeavyTails():
            return _span(departure, 0.0, 0.49, _same, _same)
        case Skew():
            return _span(departure, 0.0, np.arcsinh(8.0), np.arcsinh, np.sinh)
        case Curvature():
            return _span(departure, 0.0, np.arcsinh(2.0 * 10.0), lambda s: np.arcsinh(2.0 * s), lambda x: np.sinh(x) / 2.0)
        case Outliers():
            return _span(departure, 0.0, np.arcsinh(50.0 / 4.0), lambda s: np.arcsinh(s / 4.0), lambda x: 4.0 * np.sinh(x))
    # Other departures, worst-fan among them: from neutral to the most severe of their own ladder.
    end = max(departure.ladder)
    return _span(departure, departure.neutral, end if end > departure.neutral else departure.default_ladder[-1], _same, _same)


def _span(departure: Departure, low: float, high: float, scale: Map, unscale: Map) -> Span:
    middle = float(scale(np.array(departure.neutral)))
    above = np.linspace(middle, high, _POINTS_A_SIDE + 1)
    below = np.linspace(low, middle, _POINTS_A_SIDE + 1)[:-1] if low < middle else np.empty(0)
    severities = unscale(np.concatenate([below, above]))
    severities[len(below)] = departure.neutral
    # The ends are round numbers until they have been scaled to and fro.
    for end in (0, -1):
        severities[end] = float(f"{severities[end]:.12g}")
    return Span(severities, scale, unscale, departure.neutral)


def _same(x: Floats) -> Floats:
    return x


def _log_odds(icc: Floats, size: float) -> Floats:
    """Log of the factor by which a shared error inflates the mean square between groups of this size, over that within."""
    return np.log1p(size * icc / (1.0 - icc))


def _icc(x: Floats, size: float) -> Floats:
    odds = np.expm1(x) / size
    return np.asarray(odds / (1.0 + odds))


def _alternates(departure: Serial, design: Design) -> bool:
    """Whether a negative rho can be built on the rows."""
    try:
        departure.dependence(design, -0.5)
    except ScenarioError:
        return False
    return True
