"""What is asked at a number of rows, and what was read there."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

LOOKS = 16
"""Numbers of rows that a search is expected to look at: each is told apart from its bound with that share of the error."""


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
        As a person would say it, with the world.
    bound : str
        The same without the world.
    condition : int
        Number of the world in which it must be met.
    """

    key: str
    measure: str
    low: float = -math.inf
    high: float = math.inf
    words: str = ""
    bound: str = ""
    condition: int = 0

    def margin(self, value: float) -> float:
        """How far a value is inside the range, in the unit of the measure; negative outside."""
        return min(value - self.low, self.high - value)


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
        Whether no Monte Carlo error is in the requirement that decides.
    """

    n: int | None
    low: int
    high: int
    bounded: bool
    points: tuple[SizePoint, ...]
    confirmed: tuple[SizePoint, ...]
    binding: str
    exact: bool
