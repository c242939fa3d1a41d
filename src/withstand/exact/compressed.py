"""Independent errors on many rows with a diagonal D: the rows are replaced by a few hundred nodes with matrix weights.

A row enters the pieces only by f(theta delta), delta = s^2 d, with f(z) = log(1 + z) or 1/(1 + z), times weights free of theta.
As functions of log delta these are analytic up to the point where 1 + theta delta vanishes, so within a short bin of log delta
they are polynomials to working precision, and the sum over the bin's rows is a sum over Chebyshev points (Trefethen 2013,
Approximation Theory and Approximation Practice, chapter 8).
"""

from __future__ import annotations

import numpy as np

from withstand.exact.tilt import Pieces, Values
from withstand.study.design import Floats, Ints

_WIDTH = 0.5
"""Width of a bin in log delta."""

_POINTS = 20
"""Chebyshev points in a bin."""

_ELLIPSE = 4.5
"""Smallest accepted ellipse parameter: the interpolation error is about 4.5^-20 = 9e-14 there, and far less where theta has no
negative real part."""

_ROWS = 4096
"""Rows handled at a time."""


def bins_of(delta: Floats) -> Ints:
    """Bin of each row (n,) by log delta; rows with delta = 0 are in bin -1."""
    positive = delta > 0.0
    bins = np.full(delta.size, -1, dtype=np.int64)
    top = np.log(delta[positive].max())
    bins[positive] = np.floor((top - np.log(delta[positive])) / _WIDTH).astype(np.int64)
    return bins


def worthwhile(delta: Floats) -> bool:
    """Whether the nodes would be few against the rows."""
    n = delta.size
    return n >= 50 * _POINTS and bool(np.any(delta > 0.0)) and 4 * _POINTS * len(np.unique(bins_of(delta))) <= n


class CompressedRows:
    """Sigma = S^2, D = diag(d); see RowSums, of which this is the form for many rows.

    Parameters
    ----------
    columns : ndarray of shape (n, r)
        Q and, where there is one, the residual mean.
    p : int
        Columns of Q.
    d : ndarray of shape (n,)
        Not negative.
    spread : ndarray of shape (n,)
        S, positive.
    """

    def __init__(self, columns: Floats, p: int, d: Floats, spread: Floats) -> None:
        self._r, self._p = columns.shape[1], p
        self._pairs = np.triu_indices(self._r)
        count = len(self._pairs[0])
        delta = spread**2 * d
        bins = bins_of(delta)
        order = np.argsort(bins, kind="stable")
        top = np.log(delta.max())
        # Chebyshev points t and the matrix that turns sums of T_k(t) into weights of the points.
        angles = np.pi * (np.arange(_POINTS) + 0.5) / _POINTS
        points = np.cos(angles)
        to_points = 2.0 / _POINTS * np.cos(np.outer(angles, np.arange(_POINTS)))
        to_points[:, 0] /= 2.0
        self._idle = np.zeros(3 * count)
        nodes, weights, centres = [], [], []
        starts = np.flatnonzero(np.diff(bins[order], prepend=-2))
        for begin, end in zip(starts, np.append(starts[1:], delta.size), strict=True):
            number = int(bins[order[begin]])
            middle = top - (number + 0.5) * _WIDTH
            sums = np.zeros((_POINTS, 3 * count + 1))
            for first in range(int(begin), int(end), _ROWS):
                rows = order[first : min(first + _ROWS, int(end))]
                products = columns[rows][:, self._pairs[0]] * columns[rows][:, self._pairs[1]]
                table = np.hstack(
                    [d[rows, None] * products, products, spread[rows, None] ** 2 * products, np.ones((rows.size, 1))]
                )
                if number < 0:
                    self._idle += table[:, :-1].sum(axis=0)
                else:
                    sums += _chebyshev((np.log(delta[rows]) - middle) / (0.5 * _WIDTH)).T @ table
            if number >= 0:
                nodes.append(np.exp(middle + 0.5 * _WIDTH * points))
                weights.append(to_points @ sums)
                centres.append(middle)
        self._nodes, self._weights, self._centres = np.concatenate(nodes), np.concatenate(weights), np.array(centres)

    def pieces(self, theta: Values) -> Pieces:
        """See Structure; theta too near the negative real axis for the bins counts as out of range."""
        r, p, t = self._r, self._p, theta.size
        inner = 1.0 + self._nodes[:, None] * theta
        log_determinant = self._weights[:, -1] @ np.log(inner)
        packed = self._weights[:, :-1].T @ (1.0 / inner) + self._idle[:, None]
        packed = packed.reshape(3, -1, t)
        packed[0] *= theta
        log_determinant = np.where(self._within(theta), log_determinant, np.nan)
        full = np.empty((3, r, r, t), dtype=packed.dtype)
        full[:, self._pairs[0], self._pairs[1]] = packed
        full[:, self._pairs[1], self._pairs[0]] = packed
        return Pieces(log_determinant, full[0], full[1, :, :p], full[2, :p, :p])

    def _within(self, theta: Values) -> Values:
        """Whether the singularity in log delta is outside the ellipse of every bin, (t,)."""
        z = (-np.log(-theta.astype(np.complex128)) - self._centres[:, None]) / (0.5 * _WIDTH)
        root = np.sqrt(z - 1.0) * np.sqrt(z + 1.0)
        return np.asarray(np.all(np.abs(z + root) >= _ELLIPSE, axis=0))


def _chebyshev(t: Floats) -> Floats:
    """T_0..T_(m-1) at t (n,), (n, m)."""
    return np.asarray(np.cos(np.arccos(np.clip(t, -1.0, 1.0))[:, None] * np.arange(_POINTS)))
