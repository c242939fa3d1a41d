"""Where to work next: cells whose verdict is open get twice the replicates, until all are settled or at the cap.

The plan depends on replicate counts and verdicts alone. A cell closes at the first look at which all its focal quantities are
settled at once, so that an interrupted run, which knows only the tallies it stored, goes on exactly as if it had never stopped.
"""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from dataclasses import dataclass
from typing import Generic, TypeVar

K = TypeVar("K", bound=Hashable)


@dataclass(frozen=True)
class Looks:
    """The numbers of replicates at which verdicts are looked at: first, twice that, ... up to most.

    Parameters
    ----------
    first : int
        Replicates at the first look.
    most : int
        Replicates at the last look, at least `first`.
    """

    first: int
    most: int

    @property
    def count(self) -> int:
        """Number of looks."""
        look = 1
        while self.target(look) < self.most:
            look += 1
        return look

    def target(self, look: int) -> int:
        """Replicates at look 1, 2, ...; the last look takes what is left up to `most`."""
        return int(min(self.first * 2 ** (look - 1), self.most))

    def reached(self, replicates: int) -> int:
        """The last look a cell with so many replicates has come to; 0 before the first."""
        look = 0
        while look < self.count and self.target(look + 1) <= replicates:
            look += 1
        return look


@dataclass(frozen=True)
class Standing:
    """Where a cell stands.

    Parameters
    ----------
    replicates : int
        Replicates so far.
    settled : bool
        Whether all its focal quantities are settled at the look it has reached.
    """

    replicates: int
    settled: bool


@dataclass(frozen=True)
class Step(Generic[K]):
    """What to do next: bring these cells to so many replicates, then judge them."""

    cells: tuple[K, ...]
    replicates: int


def next_step(standings: Mapping[K, Standing], looks: Looks) -> Step[K] | None:
    """The next piece of work; None when every cell is settled or at the cap.

    Parameters
    ----------
    standings : mapping of cell to Standing
        Cells that are simulated.
    looks : Looks
        When to look.

    Notes
    -----
    Cells at the earliest look go first, all together, since worlds of one block share their noise.
    """
    waiting: dict[int, list[K]] = {}
    for cell, standing in standings.items():
        look = looks.reached(standing.replicates)
        if look == 0 or (look < looks.count and not standing.settled):
            waiting.setdefault(look + 1, []).append(cell)
    if not waiting:
        return None
    look = min(waiting)
    return Step(tuple(waiting[look]), looks.target(look))
