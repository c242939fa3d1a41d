"""First-order autoregression along series of rows, as a recursion: no n x n matrix is formed."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.linalg import lapack

from withstand.departures.base import Noise
from withstand.departures.law import Law
from withstand.study.design import Floats, Ints

_WIDE = 240
"""From this many columns on, a loop over rows beats a banded solve of each column (2.5 against 8 ns an element at 1000)."""


@dataclass(frozen=True, eq=False)
class Series:
    """Which row precedes which.

    Parameters
    ----------
    previous : ndarray of shape (n,)
        Index of the row before, in the same series; -1 at the start of a series. Always smaller than the row's own index.
    gaps : ndarray of shape (n,)
        Distance from the row before, in the unit of the order column; 0 at starts.
    """

    previous: Ints
    gaps: Floats

    @classmethod
    def of(cls, position: Floats, groups: Ints | None) -> Series:
        """The series of rows in analysis order: one, or one a group."""
        n = position.size
        rows = np.arange(n) if groups is None else np.argsort(groups, kind="stable")
        previous = np.full(n, -1, dtype=np.int64)
        follows = np.ones(n - 1, dtype=bool) if groups is None else np.diff(groups[rows]) == 0
        previous[rows[1:][follows]] = rows[:-1][follows]
        gaps = np.where(previous >= 0, position - position[previous], 0.0)
        return cls(previous, gaps)

    @property
    def inner(self) -> Floats:
        """The gaps of all rows that have a row before."""
        return self.gaps[self.previous >= 0]


@dataclass(frozen=True, eq=False)
class AR1:
    """u_i = c_i u_prev(i) + sqrt(1 - c_i^2) e_i, with variance 1 throughout.

    Parameters
    ----------
    links : ndarray of shape (n,)
        c_i, the correlation with the row before in the same series; 0 at the start of a series.
    previous : ndarray of shape (n,)
        Index of that row, smaller than the row's own; -1 at the start of a series.
    """

    links: Floats
    previous: Ints

    def apply(self, scores: Floats, law: Law | None, noise: Noise, out: Floats) -> Floats:
        """See Dependence; the law is that of the innovations e, so the errors are nearer to normal than it is."""
        scale = np.sqrt((1.0 - self.links) * (1.0 + self.links))[:, None]
        if law is None:
            np.multiply(scores, scale, out=out)
        else:
            law(scores, out)
            out *= scale
        if out.shape[1] >= _WIDE:
            self._recur(out)
        else:
            self._solve(out, out, transposed=False)
        return out

    def correlate(self, M: Floats) -> Floats:
        """See Dependence.

        With K the unit lower triangular matrix of the recursion, row i of K^-1 M sums over i and the rows before it, weighted
        by the product of the links between, and K^-T M over i and the rows after: together R M, with M counted twice.
        """
        result = self._solve(M, np.empty(M.shape), transposed=False)
        result += self._solve(M, np.empty(M.shape), transposed=True)
        result -= M
        return result

    def _recur(self, out: Floats) -> None:
        """Add c_i out_prev(i) to out_i, in place, all columns at once."""
        part = np.empty(out.shape[1])
        for i, (link, before) in enumerate(zip(self.links.tolist(), self.previous.tolist(), strict=True)):
            if link != 0.0:
                np.multiply(out[before], link, out=part)
                row = out[i]
                np.add(row, part, out=row)

    def _solve(self, M: Floats, out: Floats, *, transposed: bool) -> Floats:
        """Solve for K^-1 M or K^-T M, column by column; `out` may be M."""
        rows, band = self._band
        right = np.array(M if rows is None else M[rows], dtype=np.float64, order="F")
        solved, _ = lapack.dtbtrs(band, right, uplo="L", trans="T" if transposed else "N", diag="U", overwrite_b=1)
        out[slice(None) if rows is None else rows] = solved
        return out

    @cached_property
    def _band(self) -> tuple[Ints | None, Floats]:
        """Rows with each series in one piece (None where they are already), and K in that order in band storage."""
        head = np.arange(self.previous.size)
        # Rows come after the one before them, so one forward pass finds where each series starts.
        for i in np.flatnonzero(self.previous >= 0).tolist():
            head[i] = head[self.previous[i]]
        rows = np.argsort(head, kind="stable")
        band = np.ones((2, rows.size), order="F")
        band[1, :-1] = -self.links[rows[1:]]
        return None if np.all(np.diff(rows) == 1) else rows, band
