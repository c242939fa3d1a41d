"""Sums over neighbouring rows from which generalised least squares under AR(1) follows for every rho, without the rows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.chain import Series
from withstand.procedures.normal import Products
from withstand.study.design import Design, Floats, Ints

_SAME = 1e-9
"""Gaps that differ by less than this share of the smallest count as one."""


def as_slice(rows: Ints) -> Ints | slice:
    """Consecutive rows as a slice, which needs no copy."""
    return slice(int(rows[0]), int(rows[-1]) + 1) if rows.size and np.all(np.diff(rows) == 1) else rows


@dataclass(frozen=True, eq=False)
class PairSums:
    """Three sums of products over the pairs of neighbours of each gap, and one over the first rows of the series.

    Parameters
    ----------
    starts : ndarray of shape (m, B)
        Sums of v_t w_t over rows without a row before, one line a product v w.
    own, cross, before : ndarray of shape (D, m, B)
        For each of the D gaps, sums of v_t w_t, of v_t w_s + v_s w_t and of v_s w_s, s the row before t.

    Notes
    -----
    B is 1 for products that involve no response.
    """

    starts: Floats
    own: Floats
    cross: Floats
    before: Floats

    def at(self, powers: Floats) -> Floats:
        """Sums of products of the rows made independent.

        Parameters
        ----------
        powers : ndarray of shape (D, B)
            c = rho^gap.

        Returns
        -------
        ndarray of shape (m, B)
            starts + sum over gaps of (own - c cross + c^2 before) / (1 - c^2).
        """
        share = 1.0 / ((1.0 - powers) * (1.0 + powers))
        lagged = powers * share
        if len(powers) == 1:
            total = (self.own[0] - powers * self.cross[0]) * share
            total += self.before[0] * (powers * lagged)
            total += self.starts
            return np.asarray(total)
        if self.starts.shape[1] == 1:
            total = self.own[..., 0].T @ share - self.cross[..., 0].T @ lagged + self.before[..., 0].T @ (powers * lagged)
            return np.asarray(self.starts + total)
        total = np.einsum("gmb,gb->mb", self.own, share) - np.einsum("gmb,gb->mb", self.cross, lagged)
        total += np.einsum("gmb,gb->mb", self.before, powers * lagged)
        return np.asarray(self.starts + total)

    def columns(self, kept: Ints) -> PairSums:
        """The sums of some of the replicates."""
        return PairSums(self.starts[:, kept], self.own[..., kept], self.cross[..., kept], self.before[..., kept])


@dataclass(frozen=True, eq=False)
class Neighbours:
    """The series of a design, sorted by gap.

    Parameters
    ----------
    gaps : ndarray of shape (D,)
        Distinct gaps, in units of the smallest.
    firsts : ndarray or slice
        Rows without a row before.
    pairs : list of (rows, rows before)
        One entry a gap.
    """

    gaps: Floats
    firsts: Ints | slice
    pairs: list[tuple[Ints | slice, Ints | slice]]

    @classmethod
    def of(cls, design: Design, within: bool) -> Neighbours:
        """The neighbours along the order column, in each group apart if `within`."""
        if design.order is None:
            raise TypeError("serial procedures need an order; not_applicable says so first")
        series = Series.of(design.order, design.groups if within else None)
        steps = np.round(series.gaps / series.inner.min() / _SAME) * _SAME
        rows = np.flatnonzero(series.previous >= 0)
        gaps = np.unique(steps[rows])
        parts = [rows[steps[rows] == gap] for gap in gaps]
        pairs = [(as_slice(part), as_slice(series.previous[part])) for part in parts]
        return cls(gaps, as_slice(np.flatnonzero(series.previous < 0)), pairs)

    def of_products(self, products: Products) -> PairSums:
        """Sums of q q', upper triangles: m = p(p + 1)/2, B = 1."""
        Q = products.Q
        i, j = products.pairs
        own = np.stack([(Q[t].T @ Q[t])[i, j] for t, _ in self.pairs])
        cross = np.stack([(Q[t].T @ Q[s] + Q[s].T @ Q[t])[i, j] for t, s in self.pairs])
        before = np.stack([(Q[s].T @ Q[s])[i, j] for _, s in self.pairs])
        start = (Q[self.firsts].T @ Q[self.firsts])[i, j]
        return PairSums(start[:, None], own[..., None], cross[..., None], before[..., None])

    def of_scores(self, Q: Floats, e: Floats) -> PairSums:
        """Sums of q e, with e (n, B): m = p."""
        own = np.stack([Q[t].T @ e[t] for t, _ in self.pairs])
        cross = np.stack([Q[t].T @ e[s] + Q[s].T @ e[t] for t, s in self.pairs])
        before = np.stack([Q[s].T @ e[s] for _, s in self.pairs])
        return PairSums(Q[self.firsts].T @ e[self.firsts], own, cross, before)

    def of_squares(self, e: Floats) -> PairSums:
        """Sums of e e, with e (n, B): m = 1."""
        own = np.stack([_dot(e[t], e[t]) for t, _ in self.pairs])
        cross = np.stack([2.0 * _dot(e[t], e[s]) for t, s in self.pairs])
        before = np.stack([_dot(e[s], e[s]) for _, s in self.pairs])
        return PairSums(_dot(e[self.firsts], e[self.firsts]), own, cross, before)


def _dot(a: Floats, b: Floats) -> Floats:
    return np.asarray(np.einsum("tb,tb->b", a, b))[None, :]
