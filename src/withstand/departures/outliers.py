"""The outlier layer: single rows shifted by several error SDs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.base import Noise, NoiseStream, OutlierDeparture, register
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats, Ints

_PLACEMENTS = ("random", "leverage")
_SIGNS = ("one-sided", "alternating", "random")


@dataclass(frozen=True, eq=False)
class Shifts:
    """Shifts of equal size in a number of rows.

    Parameters
    ----------
    n : int
        Rows of the design.
    count : int
        Rows struck.
    size : float
        The shift, in error SDs.
    sign : str
        "one-sided", "alternating" or "random".
    rows : ndarray of shape (count,), optional
        The rows struck, where they are fixed.
    """

    n: int
    count: int
    size: float
    sign: str
    rows: Ints | None

    def add(self, errors: Floats, noise: Noise) -> None:
        """See Outliers. The rows and signs depend on the noise alone, not on the size."""
        generator = noise.generator(NoiseStream.OUTLIERS)
        if self.rows is None:
            struck = distinct_rows(generator, self.n, self.count, noise.width)
        else:
            struck = np.repeat(self.rows[:, None], noise.width, axis=1)
        errors[struck, np.arange(noise.width)] += self.size * self._signs(generator, noise.width)

    def _signs(self, generator: np.random.Generator, width: int) -> Floats:
        """(count, B) or (count, 1), in the order of the rows struck."""
        if self.sign == "random":
            return np.asarray(1.0 - 2.0 * generator.integers(0, 2, size=(self.count, width)), dtype=np.float64)
        turn = np.arange(self.count) % 2 if self.sign == "alternating" else np.zeros(self.count)
        return np.asarray(1.0 - 2.0 * turn)[:, None]


@register
@dataclass(frozen=True)
class Outliers(OutlierDeparture):
    """Single rows are shifted away from the mean.

    Parameters
    ----------
    severity : float or sequence of float
        The shift in error SDs, 0 or more.
    count : int, optional
        Number of rows struck; 1 where neither count nor share is given.
    share : float, optional
        Share of rows struck, above 0 and at most 0.5, rounded to a whole number of rows, at least one.
    placement : {'random', 'leverage'}
        Rows drawn anew in each replicate, or the rows of highest leverage.
    sign : {'one-sided', 'alternating', 'random'}
        All upwards; up and down in turn, in row order; or up and down with equal chance.
    """

    count: int | None = None
    share: float | None = None
    placement: str = "random"
    sign: str = "one-sided"

    kind = "outliers"
    title = "outlying rows"
    unit = "shift in error SDs"
    neutral = 0.0
    default_ladder = (3.0, 5.0, 8.0, 12.0)
    construction = "a fixed shift added to a count or share of rows, placed at random or at the highest leverage"
    source = "mean-shift outlier model; Cook & Weisberg (1982)"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.count is not None and self.share is not None:
            raise ScenarioError(
                "'outliers' has both a count and a share", where="departure.count", remedy="Give one of count and share."
            )
        if self.count is not None and (self.count < 1 or int(self.count) != self.count):
            raise ScenarioError(
                f"count {self.count} is out of range for 'outliers'",
                where="departure.count",
                remedy="Give a whole number of rows, 1 or more.",
            )
        if self.share is not None and not 0.0 < self.share <= 0.5:
            raise ScenarioError(
                f"share {self.share:g} is out of range for 'outliers'",
                where="departure.share",
                remedy="Give a number above 0, at most 0.5, as in share = 0.05.",
            )
        for option, value, known in (("placement", self.placement, _PLACEMENTS), ("sign", self.sign, _SIGNS)):
            if value not in known:
                raise ScenarioError(
                    f"unknown {option} '{value}' for 'outliers'",
                    where=f"departure.{option}",
                    remedy=f"Known: {', '.join(known)}.",
                )

    @property
    def name(self) -> str:
        """See Departure."""
        where = "" if self.placement == "random" else " at high leverage"
        how = "" if self.sign == "one-sided" else f", {self.sign} sign"
        return f"{self.kind}{where} ({self._extent}{how})"

    @property
    def _extent(self) -> str:
        if self.share is not None:
            return f"{100.0 * self.share:g} % of rows"
        return f"{self.count or 1} row{'s' if (self.count or 1) > 1 else ''}"

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity <= 1e6:
            raise self.refuse(severity, "a number from 0 to 1000000")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"{self._extent} by {severity:g} SD"

    def struck(self, design: Design) -> int:
        """Number of rows struck on a design."""
        return max(1, round(self.share * design.n)) if self.share is not None else (self.count or 1)

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        if 2 * self.struck(design) > design.n:
            return (
                f"not applicable, because {self.struck(design)} of {design.n} rows are more than half, and outliers are the "
                "few; give a smaller count"
            )
        return None

    def outliers(self, design: Design, severity: float) -> Shifts | None:
        """See OutlierDeparture."""
        if severity == self.neutral:
            return None
        count = self.struck(design)
        if count > design.n:
            raise ScenarioError(
                f"'outliers' strikes {count} rows of {design.n}", where="departure.count", remedy="Give a smaller count."
            )
        rows = None
        if self.placement == "leverage":
            rows = np.sort(np.argsort(-design.leverage, kind="stable")[:count])
        return Shifts(design.n, count, severity, self.sign, rows)


def distinct_rows(generator: np.random.Generator, n: int, count: int, width: int) -> Ints:
    """Draw sets of distinct rows, every set equally likely.

    Parameters
    ----------
    generator : Generator
        Is advanced.
    n, count, width : int
        Rows to draw from, rows in a set, sets.

    Returns
    -------
    ndarray of shape (count, width)
        Row numbers, increasing down each column.

    Notes
    -----
    Floyd's algorithm (Bentley & Floyd 1987) for all sets at once: for j = n - count, ..., n - 1 draw t from 0..j and take it,
    or j if t has been taken. It costs count draws a set, however large n is. Where there are fewer sets than rows in one, NumPy
    draws them set by set (at n = 100,000 with 10 sets of 5,000, 15 times as fast).
    """
    if width < count:
        one_by_one = [np.sort(generator.choice(n, count, replace=False, shuffle=False)) for _ in range(width)]
        return np.stack(one_by_one, axis=1).astype(np.int64)
    taken = np.zeros((n, width), dtype=bool)
    sets = np.arange(width)
    drawn = np.empty((count, width), dtype=np.int64)
    for turn, last in enumerate(range(n - count, n)):
        t = generator.integers(0, last + 1, size=width)
        t[taken[t, sets]] = last
        taken[t, sets] = True
        drawn[turn] = t
    drawn.sort(axis=0)
    return drawn
