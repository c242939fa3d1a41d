"""Plausible severity: the severities under which the user's own residuals would not be surprising.

The simulated test of a scale-free residual statistic T is inverted: a severity is kept when the observed T lies within the
central part of its law there. No normal approximation is used. The point is where the observed T is the median, which makes it
median-unbiased.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import repeat

import numpy as np
from scipy.interpolate import PchipInterpolator

from withstand.departures.base import Departure
from withstand.diagnostics.base import observed as observed_sample
from withstand.diagnostics.for_departure import Chosen, statistic_for
from withstand.judgement.residual_laws import Companions, Request, simulate
from withstand.judgement.severities import Span, span_of
from withstand.study.design import Design, Floats

LEVEL = 0.90
"""Default level of the interval."""

_MESH = 401
"""Points at which the interpolated quantiles are compared with the observed value."""


@dataclass(frozen=True)
class Plausible:
    """Severities the residuals are compatible with.

    Parameters
    ----------
    low, high : float
        Ends of the interval, in the departure's unit; nan where it is empty. A ratio below 1, a power or rho below 0 is the
        departure turned round.
    point : float
        Median-unbiased estimate; neutral where the residuals show less than nothing.
    observed : float
        The statistic of the user's residuals, with its sign.
    statistic : str
        Which statistic.
    level : float
        Of the interval.
    empty : bool
        Whether no severity tried is compatible: the residuals are more regular than chance, or worse than the worst tried.
    open_below, open_above : bool
        Whether the interval runs on: the residuals cannot tell `low` (`high`) from anything beyond it.
    turned : bool
        For departures without a sign of their own (curvature, skew): whether the residuals show them mirrored, as a hollow or a
        skew to the left. The severity is that of the mirror image.
    replicates : int
        Simulated values at each severity.
    """

    low: float
    high: float
    point: float
    observed: float
    statistic: str
    level: float
    empty: bool
    open_below: bool
    open_above: bool
    turned: bool
    replicates: int

    def holds(self, severity: float) -> bool:
        """Whether a severity is among those kept."""
        above = self.low <= severity or (self.open_below and severity < self.low)
        below = severity <= self.high or (self.open_above and severity > self.high)
        return not self.empty and above and below

    def worst_case(self, ladder: Sequence[float], neutral: float) -> tuple[float, ...]:
        """The severities at which harm has to be looked at: the ends, and where an end is open the ladder beyond it.

        Where the interval is empty, the severity that comes nearest: neutral where the residuals are more regular than chance,
        the last one told apart, and the ladder beyond, where they are worse than any.
        """
        low, high = (self.point, self.point) if self.empty else (self.low, self.high)
        above = self.open_above or (self.empty and self.point > neutral)
        below = self.open_below or (self.empty and self.point < neutral)
        beyond = [s for s in ladder if (above and s > high) or (below and s < low)]
        return tuple(sorted({low, high, *beyond}))


@dataclass(frozen=True, eq=False)
class SeverityLaw:
    """Quantiles of a residual statistic as functions of severity, on one design.

    Parameters
    ----------
    departure : Departure
        The departure.
    chosen : Chosen
        Its statistic.
    span : Span
        Severities simulated.
    values : ndarray of shape (S, B)
        Simulated statistics, sorted along the replicates.
    """

    departure: Departure
    chosen: Chosen
    span: Span
    values: Floats

    def inversion(self, level: float = LEVEL) -> Inversion:
        """The quantiles at one level, interpolated over severity."""
        x = self.span.scale(self.span.severities)
        mesh = np.linspace(x[0], x[-1], _MESH)
        tail = (1.0 - level) / 2.0
        quantiles = np.quantile(self.values, [tail, 0.5, 1.0 - tail], axis=1)
        curves = np.array([PchipInterpolator(x, quantile)(mesh) for quantile in quantiles])
        # Where the statistic has reached its extreme it tells nothing of what lies beyond: a score along log z falls again once
        # the spread is carried by the last few rows. What is kept there is reported as open.
        middle = int(np.argmin(np.abs(mesh - self.span.scale(np.array(self.span.neutral)))))
        first = int(np.argmin(curves[1, : middle + 1])) if self.span.two_sided else 0
        part = slice(first, middle + int(np.argmax(curves[1, middle:])) + 1)
        return Inversion(self, level, mesh[part], *curves[:, part])

    def plausible(self, statistic: float, level: float = LEVEL) -> Plausible:
        """Invert the test for an observed value of the statistic."""
        return self.inversion(level).plausible(statistic)


@dataclass(frozen=True, eq=False)
class Inversion:
    """Turns observed values of a statistic into intervals of severities.

    Parameters
    ----------
    law : SeverityLaw
        What was simulated.
    level : float
        Of the intervals.
    mesh : ndarray of shape (m,)
        Points on the scale of the severities.
    lower, median, upper : ndarray of shape (m,)
        Quantiles of the statistic there.
    """

    law: SeverityLaw
    level: float
    mesh: Floats
    lower: Floats
    median: Floats
    upper: Floats

    def plausible(self, statistic: float) -> Plausible:
        """The severities kept for an observed value of the statistic; the hull of them, where a gap lies between."""
        span, mirrored = self.law.span, self.law.chosen.mirrored
        value = abs(statistic) if mirrored else statistic
        kept = np.flatnonzero((self.lower <= value) & (value <= self.upper))
        return Plausible(
            low=self._end(value, int(kept[0]), -1) if kept.size else np.nan,
            high=self._end(value, int(kept[-1]), +1) if kept.size else np.nan,
            point=self._point(value),
            observed=statistic,
            statistic=self.law.chosen.title,
            level=self.level,
            empty=kept.size == 0,
            open_below=bool(kept.size and kept[0] == 0 and span.two_sided),
            open_above=bool(kept.size and kept[-1] == len(self.mesh) - 1),
            turned=mirrored and statistic < 0.0,
            replicates=self.law.values.shape[1],
        )

    def _end(self, value: float, last: int, step: int) -> float:
        """Where one of the two quantiles meets the observed value, beyond the last mesh point kept."""
        beyond = last + step
        if not 0 <= beyond < len(self.mesh):
            return self._severity(self.mesh[last])
        curve = next(c for c in (self.lower, self.upper) if (c[last] - value) * (c[beyond] - value) <= 0.0)
        return self._cross(curve, value, last, beyond)

    def _point(self, value: float) -> float:
        turns = np.flatnonzero((self.median[:-1] - value) * (self.median[1:] - value) <= 0.0)
        if turns.size:
            return self._cross(self.median, value, int(turns[0]), int(turns[0]) + 1)
        return self._severity(self.mesh[0 if value < self.median[0] else -1])

    def _severity(self, x: float) -> float:
        # Scaled to and fro, an end of the span comes back with another last digit.
        ends = self.law.span.severities[[0, -1]]
        return float(np.clip(self.law.span.unscale(np.array(x)), *ends))

    def _cross(self, curve: Floats, value: float, a: int, b: int) -> float:
        rise = curve[b] - curve[a]
        share = (value - curve[a]) / rise if rise != 0.0 else 0.0
        return self._severity(self.mesh[a] + share * (self.mesh[b] - self.mesh[a]))


def severity_laws(
    design: Design,
    departures: Sequence[Departure],
    *,
    seed: int,
    companions: Sequence[Companions] | None = None,
    replicates: int | None = None,
) -> list[SeverityLaw | None]:
    """Simulate the law of each departure's residual statistic over its severities.

    Parameters
    ----------
    design : Design
        The rows.
    departures : sequence of Departure
        Applicable ones; their own ladders are not used.
    seed : int
        Seed of the study's run.
    companions : sequence of tuple of (Departure, float), optional
        What acts besides each departure; nothing if left out.
    replicates : int, optional
        Simulated values at each severity; fewer for many rows if left out.

    Returns
    -------
    list of SeverityLaw or None
        In the order of the departures; None where no residual statistic answers to the departure.
    """
    chosen = [statistic_for(departure, design) for departure in departures]
    spans = [span_of(departure, design) for departure in departures]
    requests = [
        Request(departure, statistic, span.severities, besides)
        for departure, statistic, span, besides in zip(departures, chosen, spans, companions or repeat(()), strict=False)
        if statistic is not None
    ]
    values = iter(simulate(design, requests, seed=seed, replicates=replicates))
    return [
        None if statistic is None else SeverityLaw(departure, statistic, span, np.sort(next(values), axis=1))
        for departure, statistic, span in zip(departures, chosen, spans, strict=True)
    ]


def plausible_severities(
    design: Design,
    response: Floats,
    departures: Sequence[Departure],
    *,
    seed: int,
    replicates: int | None = None,
    level: float = LEVEL,
) -> list[Plausible | None]:
    """The severities of each departure that the residuals of a response are compatible with.

    Parameters
    ----------
    design : Design
        The rows.
    response : ndarray of shape (n,)
        Observed response, in the order of the design's rows.
    departures : sequence of Departure
        Applicable ones, each judged alone.
    seed, replicates
        As in `severity_laws`.
    level : float
        Of the intervals.

    Returns
    -------
    list of Plausible or None
        In the order of the departures; None where no residual statistic answers to the departure.
    """
    sample = observed_sample(design, response)
    laws = severity_laws(design, departures, seed=seed, replicates=replicates)
    return [None if law is None else law.plausible(float(law.chosen.statistic(sample)[0]), level) for law in laws]
