"""How many rows: doubling until everything asked for is met, bisection, smoothing, and a second look with fresh noise.

Every requirement has a margin that is positive where it is met. The margin is taken to grow with n from the last n at which it
clearly is not met; on that stretch it is smoothed to a monotone curve, whose crossing of zero is the answer, and whose band,
simultaneous over the n looked at, gives the interval of the answer. Exact margins are bisected to a single step instead.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import optimize, stats

from withstand.study.design import Floats

FINE = 1.06
"""Bisection of simulated margins ends when the ends of the bracket are within this ratio."""

_CONFIRMATIONS = 3
"""Second looks at most: each that moves the answer asks for another."""


@dataclass(frozen=True)
class Requirement:
    """A bound that a measure must keep.

    Parameters
    ----------
    key : str
        Names it within the search.
    measure : str
        As in the tables of measures, or `half_width`.
    low, high : float
        Accepted range; infinite where a side is free.
    words : str
        As a person would say it.
    """

    key: str
    measure: str
    low: float = -math.inf
    high: float = math.inf
    words: str = ""

    def margin(self, value: float) -> float:
        """How far a value is inside the range, in the unit of the measure; negative outside."""
        return min(value - self.low, self.high - value)

    @property
    def bound(self) -> float:
        """The bound, where there is one; the upper of two."""
        return self.high if math.isfinite(self.high) else self.low


@dataclass(frozen=True)
class Reading:
    """A measure at one n: its value and Monte Carlo standard error, 0 where it is exact."""

    value: float
    se: float = 0.0

    @property
    def exact(self) -> bool:
        """Whether it has no Monte Carlo error."""
        return self.se == 0.0


@dataclass(frozen=True)
class SizePoint:
    """What was found at one n.

    Parameters
    ----------
    n : int
        Rows.
    readings : mapping of str to Reading
        By key of the requirement.
    """

    n: int
    readings: Mapping[str, Reading]


@dataclass(frozen=True)
class Sizes:
    """The n that can be the answer: smallest, smallest + step, ... up to largest."""

    smallest: int
    largest: int
    step: int = 1

    def up(self, n: float) -> int:
        """The first of them at or above n; the last one where there is none."""
        steps = math.ceil((n - self.smallest) / self.step - 1e-9)
        return min(self.smallest + max(steps, 0) * self.step, self.last)

    @property
    def last(self) -> int:
        """The largest of them."""
        return self.smallest + (self.largest - self.smallest) // self.step * self.step


@dataclass(frozen=True)
class FoundSize:
    """The answer of a search.

    Parameters
    ----------
    n : int or None
        The smallest n from which everything is met; None where none up to the largest tried.
    low, high : int
        Interval of the answer; high is the largest n tried where the band does not tell.
    bounded : bool
        Whether `high` is an end of the interval, not of the search.
    points : tuple of SizePoint
        Everything looked at with the first noise, by n.
    confirmed : tuple of SizePoint
        Second looks with fresh noise.
    binding : str
        Key of the requirement that asks for the most rows.
    exact : bool
        Whether no Monte Carlo error is in it.
    """

    n: int | None
    low: int
    high: int
    bounded: bool
    points: tuple[SizePoint, ...]
    confirmed: tuple[SizePoint, ...]
    binding: str
    exact: bool


Judge = Callable[[int], SizePoint]


class SizeSearch:
    """The search for the smallest n.

    Parameters
    ----------
    requirements : sequence of Requirement
        All must be met; at least one.
    judge : callable
        Gives the readings of every requirement at an n.
    confirm : callable
        The same with noise that `judge` has not used.
    sizes : Sizes
        The n to choose from.
    delta : float
        The interval of the answer has level 1 - delta, simultaneously over the n looked at.
    """

    def __init__(
        self, requirements: Sequence[Requirement], judge: Judge, confirm: Judge, sizes: Sizes, delta: float = 0.01
    ) -> None:
        self._requirements = tuple(requirements)
        self._judge = judge
        self._confirm = confirm
        self._sizes = sizes
        self._delta = delta
        self._points: dict[int, SizePoint] = {}
        self._confirmed: list[SizePoint] = []

    def run(self) -> FoundSize:
        """Search."""
        failed, met = self._double()
        if met is None:
            return self._found()
        if self._all_exact:
            self._bisect_exactly(failed, met)
            return self._found()
        self._bisect(failed, met)
        self._refine()
        return self._found()

    @property
    def _all_exact(self) -> bool:
        return all(reading.exact for point in self._points.values() for reading in point.readings.values())

    def _at(self, n: int) -> int:
        """-1 where something clearly is not met, 1 where all clearly is, 0 between."""
        if n not in self._points:
            self._points[n] = self._judge(n)
        z = self._z(max(len(self._points), 8))
        clear = 1
        for requirement in self._requirements:
            reading = self._points[n].readings[requirement.key]
            margin = requirement.margin(reading.value)
            if margin + z * reading.se < 0.0:
                return -1
            if margin - z * reading.se < 0.0:
                clear = 0
        return clear

    def _z(self, looks: int) -> float:
        return float(stats.norm.isf(self._delta / (2.0 * looks * len(self._requirements))))

    def _double(self) -> tuple[int, int | None]:
        """The last n not clearly met and the first of two clearly met in a row, a chance hit at a small n being possible."""
        failed, n, previous = 0, self._sizes.smallest, None
        while True:
            if self._at(n) == 1:
                if previous is not None or n == self._sizes.last:
                    return failed, previous or n
                previous = n
            else:
                failed, previous = n, None
                if n == self._sizes.last:
                    return failed, None
            n = self._sizes.up(2 * n)

    def _bisect_exactly(self, failed: int, met: int) -> None:
        """To neighbours; where the next larger n fails after all (designs of unequal balance), from there on."""
        while True:
            while failed and met - failed > self._sizes.step:
                middle = self._sizes.up((failed + met) // 2)
                middle = middle if middle < met else met - self._sizes.step
                failed, met = (failed, middle) if self._at(middle) == 1 else (middle, met)
            after = min(met + self._sizes.step, self._sizes.last)
            if self._at(after) == 1:
                return
            failed, met = after, min((n for n in self._points if n > after and self._at(n) == 1), default=after)

    def _bisect(self, failed: int, met: int) -> None:
        while failed and met / failed > FINE and met - failed > self._sizes.step:
            middle = min(self._sizes.up(math.sqrt(failed * met)), met - self._sizes.step)
            stand = self._at(middle)
            if stand == 0:
                return
            failed, met = (failed, middle) if stand == 1 else (middle, met)

    def _refine(self) -> None:
        """Look where the curve crosses and at the ends of the interval, then again at the answer with fresh noise."""
        found = self._found()
        for n in (found.n, found.low, found.high):
            if n is not None:
                self._at(n)
        for _ in range(_CONFIRMATIONS):
            n = self._found().n
            if n is None or any(point.n == n for point in self._confirmed):
                return
            self._confirmed.append(self._confirm(n))

    def _found(self) -> FoundSize:
        answers = {r.key: self._crossings(r) for r in self._requirements}
        binding = max(answers, key=lambda key: [math.inf if end is None else end for end in answers[key]])
        n, low, high = (_largest([ends[i] for ends in answers.values()]) for i in range(3))
        sizes = self._sizes
        return FoundSize(
            n=None if n is None else sizes.up(n),
            low=sizes.last if low is None else sizes.up(low),
            high=sizes.last if high is None else sizes.up(high),
            bounded=high is not None,
            points=tuple(self._points[n] for n in sorted(self._points)),
            confirmed=tuple(self._confirmed),
            binding=binding,
            exact=self._all_exact,
        )

    def _crossings(self, requirement: Requirement) -> tuple[float | None, float | None, float | None]:
        """Where the smoothed margin, its upper band and its lower band cross zero; None where they do not."""
        points = sorted([*self._points.values(), *self._confirmed], key=lambda point: point.n)
        n = np.array([point.n for point in points], dtype=float)
        readings = [point.readings[requirement.key] for point in points]
        margins = np.array([requirement.margin(reading.value) for reading in readings])
        errors = np.array([reading.se for reading in readings])
        return crossings(n, margins, errors, self._z(len(points)))


def crossings(n: Floats, margins: Floats, errors: Floats, z: float) -> tuple[float | None, float | None, float | None]:
    """Where a curve that grows with n, known at some n with error, crosses zero.

    Parameters
    ----------
    n : ndarray of shape (m,)
        In increasing order; may repeat.
    margins, errors : ndarray of shape (m,)
        Values and standard errors; 0 for exact values.
    z : float
        Half width of the band in standard errors.

    Returns
    -------
    tuple of float or None
        Crossing of the monotone curve (weighted least squares, by pooling neighbours), of its upper band (the earliest n that is
        possible) and of its lower band (the latest). Between two n the curve is a straight line in 1/n.

    Notes
    -----
    Values before the last that clearly lies below zero are left out: the curve may start high by chance of a tiny design.
    """
    clearly_below = np.flatnonzero(margins + z * errors < 0.0)
    start = int(clearly_below[-1]) if clearly_below.size else 0
    n, margins, errors = n[start:], margins[start:], errors[start:]
    exact = errors == 0.0
    floor = float(errors[~exact].min()) * 1e-3 if (~exact).any() else 1.0
    weights = np.maximum(errors, floor) ** -2.0
    distinct = np.unique(n)
    pooled = np.array([np.average(margins[n == one], weights=weights[n == one]) for one in distinct])
    total = np.array([weights[n == one].sum() for one in distinct])
    spread = np.where([exact[n == one].any() for one in distinct], 0.0, total**-0.5)
    curve = optimize.isotonic_regression(pooled, weights=total).x
    upper = np.minimum.accumulate((pooled + z * spread)[::-1])[::-1]
    lower = np.maximum.accumulate(pooled - z * spread)
    # Pooling may push the curve past its own band where exact and simulated values meet.
    return _ordered(_crossing(distinct, curve), _crossing(distinct, upper), _crossing(distinct, lower))


def _ordered(middle: float | None, low: float | None, high: float | None) -> tuple[float | None, float | None, float | None]:
    """The three crossings with low <= middle <= high, None standing for beyond."""
    if middle is None:
        return None, low, None
    low = middle if low is None else min(low, middle)
    return middle, low, None if high is None else max(high, middle)


def _crossing(n: Floats, curve: Floats) -> float | None:
    met = np.flatnonzero(curve >= 0.0)
    if not met.size:
        return None
    i = int(met[0])
    if i == 0:
        return float(n[0])
    before, after = curve[i - 1], curve[i]
    share = -before / (after - before)
    return float(1.0 / (1.0 / n[i - 1] + share * (1.0 / n[i] - 1.0 / n[i - 1])))


def _largest(ends: Sequence[float | None]) -> float | None:
    if any(end is None for end in ends):
        return None
    return max(end for end in ends if end is not None)
