"""How many rows: doubling until everything asked for is met, bisection, smoothing, and a second look with fresh noise.

Every requirement has a margin that is positive where it is met. The margin is taken to grow with n from the last n at which it
clearly is not met; on that stretch it is smoothed to a monotone curve, whose crossing of zero is the answer, and whose band,
simultaneous over the n looked at, gives the interval of the answer. Exact margins are bisected to a single step instead.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np

from withstand import tails
from withstand.judgement.crossing import crossings
from withstand.judgement.size_points import LOOKS, FoundSize, Requirement, SizePoint, Sizes

FINE = 1.06
"""Bisection of simulated margins ends when the ends of the bracket are within this ratio."""

_CONFIRMATIONS = 3
"""Second looks at most: each that moves the answer asks for another."""

_BEYOND = 4
"""The next larger n that are looked at as well where answers are exact: balance may come and go with n."""

Judge = Callable[[int], SizePoint]


class SizeSearch:
    """The search for the smallest n.

    Parameters
    ----------
    requirements : sequence of Requirement
        All must be met; at least one.
    judge : callable
        Gives the readings of every requirement at an n; where one clearly is not met, others may be left out.
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
        z = self._z(max(len(self._points), LOOKS))
        clear = 1
        for requirement in self._requirements:
            reading = self._points[n].readings.get(requirement.key)
            if reading is None:
                continue
            margin = requirement.margin(reading.value)
            if margin + z * reading.se < 0.0:
                return -1
            if margin - z * reading.se < 0.0:
                clear = 0
        return clear

    def _z(self, looks: int) -> float:
        return clear_from(self._delta, looks, len(self._requirements))

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
        """To neighbours; where one of the next larger n fails after all (designs of unequal balance), from there on."""
        step = self._sizes.step
        while True:
            while failed and met - failed > step:
                middle = min(self._sizes.up((failed + met) / 2.0), met - step)
                failed, met = (failed, middle) if self._at(middle) == 1 else (middle, met)
            beyond = [self._sizes.up(met + i * step) for i in range(1, _BEYOND + 1)]
            failing = [n for n in beyond if self._at(n) != 1]
            if not failing or failing[-1] == self._sizes.last:
                return
            failed = failing[-1]
            met = min((n for n in self._points if n > failed and self._at(n) == 1), default=self._sizes.up(failed + step))
            while self._at(met) != 1 and met != self._sizes.last:
                failed, met = met, self._sizes.up(2 * met)

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
        self._close_exact_bracket()
        for _ in range(_CONFIRMATIONS):
            found = self._found()
            n = found.n
            if n is None or found.exact or found.high == self._sizes.smallest:
                return
            if any(max(n, point.n) <= FINE * min(n, point.n) for point in self._confirmed):
                return
            self._confirmed.append(self._confirm(n))

    def _close_exact_bracket(self) -> None:
        """Where the requirement that decides is exact though others are simulated, its neighbours tell its n to the row."""
        while True:
            key = self._found().binding
            requirement = next(r for r in self._requirements if r.key == key)
            readings = {n: self._points[n].readings.get(key) for n in sorted(self._points)}
            # Where it was not read, others failed.
            failing = [n for n, seen in readings.items() if seen is None or requirement.margin(seen.value) < 0.0]
            if not failing or not all(seen is None or seen.exact for seen in readings.values()):
                return
            failed = failing[-1]
            met = min((n for n in readings if n > failed), default=None)
            if met is None or met - failed <= self._sizes.step:
                return
            self._at(min(self._sizes.up((failed + met) / 2.0), met - self._sizes.step))

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
            exact=all(point.readings[binding].exact for point in self._points.values() if binding in point.readings),
        )

    def _crossings(self, requirement: Requirement) -> tuple[float | None, float | None, float | None]:
        """Where the smoothed margin, its upper band and its lower band cross zero; None where they do not."""
        points = sorted([*self._points.values(), *self._confirmed], key=lambda point: point.n)
        looks = len(points)
        unread = [place for place, point in enumerate(points) if requirement.key not in point.readings]
        points = points[unread[-1] + 1 :] if unread else points
        first = points[0].readings[requirement.key] if points else None
        if unread and (first is None or requirement.margin(first.value) >= self._z(looks) * first.se):
            # Others failed where it was not read, and it is met beyond: it asks for no more rows than they do.
            return (float(self._sizes.smallest),) * 3
        n = np.array([point.n for point in points], dtype=float)
        readings = [point.readings[requirement.key] for point in points]
        margins = np.array([requirement.margin(reading.value) for reading in readings])
        errors = np.array([reading.se for reading in readings])
        return crossings(n, margins, errors, self._z(looks))


def clear_from(delta: float, looks: int, requirements: int) -> float:
    """Standard errors from which a margin is clear of zero, all looks and requirements sharing the accepted error."""
    return float(tails.normal_isf(delta / (2.0 * looks * requirements)))


def _largest(ends: Sequence[float | None]) -> float | None:
    if any(end is None for end in ends):
        return None
    return max(end for end in ends if end is not None)
