"""Independent or group-correlated errors with a diagonal D: sums over rows, and over groups of sums over rows."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from withstand.exact.tilt import Pieces, Values
from withstand.study.design import Floats, Ints

_ELEMENTS = 1 << 16
"""Complex numbers in a work array; keeps them in the second-level cache."""


class RowSums:
    """Sigma = S((1 - icc) I + icc 11' within groups)S, D = diag(d).

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
    icc : float
        Correlation within groups, in [0, 1).
    codes : ndarray of shape (n,) or None
        Groups 0..G-1; None for independent errors.

    Notes
    -----
    With delta = theta s^2 d and omega = 1/(1 + (1 - icc) delta), det(I + theta Sigma D) is the product of all 1/omega and, over
    groups, of 1 + icc sum(delta omega). The inverse within a group is diagonal plus rank one; its parts are written so that
    none cancels for large theta (Sherman & Morrison 1950).
    """

    def __init__(self, columns: Floats, p: int, d: Floats, spread: Floats, icc: float = 0.0, codes: Ints | None = None) -> None:
        self._p = p
        self._icc = icc
        order = np.arange(d.size) if codes is None else np.argsort(codes, kind="stable")
        self._columns = columns[order]
        self._d = d[order]
        self._spread = spread[order]
        self._starts = None if codes is None else np.flatnonzero(np.diff(codes[order], prepend=-1))
        self._pairs = np.triu_indices(columns.shape[1])
        self._products: Floats | None = None

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        r, p, t = self._columns.shape[1], self._p, theta.size
        log_determinant = np.zeros(t, dtype=theta.dtype)
        packed = np.zeros((len(self._pairs[0]), 3, t), dtype=theta.dtype)
        between = np.zeros((r + p, r + p, t), dtype=theta.dtype)
        for rows, starts in self._chunks(t):
            d, s, columns = self._d[rows], self._spread[rows], self._columns[rows]
            inner = 1.0 + ((1.0 - self._icc) * s**2 * d)[:, None] * theta
            log_determinant += np.log(inner).sum(axis=0)
            weights = np.empty((d.size, 3, t), dtype=theta.dtype)
            omega = np.divide(1.0, inner, out=weights[:, 1])
            np.multiply(d[:, None] * theta, omega, out=weights[:, 0])
            np.multiply(((1.0 - self._icc) * s**2)[:, None], omega, out=weights[:, 2])
            flat = self._table(rows).T @ weights.reshape(d.size, -1).view(np.float64)
            packed += flat.view(theta.dtype).reshape(packed.shape)
            if starts is not None:
                shared = 1.0 + self._icc * np.add.reduceat((s**2)[:, None] * weights[:, 0], starts, axis=0)
                log_determinant += np.log(shared).sum(axis=0)
                left = self._group_sums(columns, s[:, None] * weights[:, 0], starts)
                right = self._group_sums(columns[:, :p], s[:, None] * omega, starts)
                sums = np.concatenate([left, right], axis=1)
                between += ((sums * (self._icc / shared.T)[:, None, :]) @ sums.transpose(0, 2, 1)).transpose(1, 2, 0)
        full = np.empty((r, r, 3, t), dtype=theta.dtype)
        full[self._pairs] = packed
        full[self._pairs[::-1]] = packed
        A, B, C = full[:, :, 0], full[:, :p, 1], full[:p, :p, 2]
        if self._starts is not None:
            A, B, C = A - between[:r, :r], B - between[:r, r:], C + between[r:, r:]
        return Pieces(log_determinant, A, B, C)

    def _table(self, rows: slice) -> Floats:
        """Products of two columns (rows, pairs); kept where all rows are handled at once."""
        if self._products is not None:
            return self._products[rows]
        columns = self._columns[rows]
        table = columns[:, self._pairs[0]] * columns[:, self._pairs[1]]
        if len(columns) == self._d.size:
            self._products = table
        return table

    def _group_sums(self, columns: Floats, weights: Values, starts: Ints) -> Values:
        """Sums of weight times column over groups, (t, m, G)."""
        parts = [np.add.reduceat(column[:, None] * weights, starts, axis=0) for column in columns.T]
        return np.stack(parts).transpose(2, 0, 1)

    def _chunks(self, t: int) -> Iterator[tuple[slice, Ints | None]]:
        """Runs of rows, cut between groups, with the starts of the groups in them."""
        n = self._d.size
        size = max(16, _ELEMENTS // (3 * t))
        if self._starts is None:
            for begin in range(0, n, size):
                yield slice(begin, min(begin + size, n)), None
            return
        bounds = np.append(self._starts, n)
        first = 0
        while first < len(self._starts):
            last = max(first + 1, int(np.searchsorted(bounds, bounds[first] + size, side="right")) - 1)
            yield slice(int(bounds[first]), int(bounds[last])), self._starts[first:last] - bounds[first]
            first = last
