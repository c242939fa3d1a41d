"""The correlation of the errors, read off a dependence in a shape that large designs can afford."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.base import Dependence
from withstand.departures.chain import AR1
from withstand.departures.exchangeable import Exchangeable
from withstand.study.design import Floats, Ints


@dataclass(frozen=True, eq=False)
class Chain:
    """First-order autoregressions, brought into an order in which every series is one run of rows.

    Parameters
    ----------
    order : ndarray of shape (n,)
        Row at each place of that order.
    links : ndarray of shape (n,)
        Correlation of the row at each place with the one before it there; 0 at the start of a series.
    """

    order: Ints
    links: Floats

    @property
    def contiguous(self) -> bool:
        """Whether that order is the order of the rows."""
        return bool(np.all(np.diff(self.order) == 1))

    def between(self, i: Ints, j: Ints) -> Floats:
        """Correlations of pairs of rows."""
        place = np.empty_like(self.order)
        place[self.order] = np.arange(self.order.size)
        starts = self.links == 0.0
        series = np.cumsum(starts)
        size = np.cumsum(np.log(np.abs(np.where(starts, 1.0, self.links))))
        turns = np.cumsum(self.links < 0.0)
        late, early = np.maximum(place[i], place[j]), np.minimum(place[i], place[j])
        sign = 1.0 - 2.0 * ((turns[late] - turns[early]) % 2)
        return np.where(series[late] == series[early], sign * np.exp(size[late] - size[early]), 0.0)


@dataclass(frozen=True, eq=False)
class Shared:
    """Equal correlation icc within groups `codes` (n,), none between them."""

    icc: float
    codes: Ints

    def between(self, i: Ints, j: Ints) -> Floats:
        """Correlations of pairs of different rows."""
        return np.where(self.codes[i] == self.codes[j], self.icc, 0.0)


Correlation = Chain | Shared


def correlation_of(dependence: Dependence) -> Correlation | None:
    """Read a dependence; None if it is of a kind not known here."""
    match dependence:
        case Exchangeable():
            return Shared(dependence.icc, dependence.codes)
        case AR1():
            return _chain(dependence.links, dependence.previous)
        case _:
            return None


def _chain(links: Floats, previous: Ints) -> Chain:
    head = np.where(previous < 0, np.arange(previous.size), previous)
    # Each pass doubles how far back a row looks, so the starts of all series are found in log2(n) passes.
    while not np.array_equal(further := head[head], head):
        head = further
    order = np.argsort(head, kind="stable").astype(np.int64)
    return Chain(order, np.where(previous < 0, 0.0, links)[order])
