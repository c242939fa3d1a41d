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

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        r, p, t = self._columns.shape[1], self._p, theta.size
        log_determinant = np.zeros(t, dtype=theta.dtype)
        packed = np.zeros((len(self._pairs[0]), 3, t), dtype=theta.dtype)
        A, B, C = (np.zeros(shape, dtype=theta.dtype) for shape in ((r, r, t), (r, p, t), (p, p, t)))
        for rows, starts in self._chunks(t):
            d, s, columns = self._d[rows], self._spread[rows], self._columns[rows]
            delta = (s**2 * d)[:, None] * theta
            inner = 1.0 + (1.0 - self._icc) * delta
            log_determinant += np.log(inner).sum(axis=0)
            weights = np.empty((d.size, 3, t), dtype=theta.dtype)
            omega = np.divide(1.0, inner, out=weights[:, 1])
            np.multiply(d[:, None] * theta, omega, out=weights[:, 0])
            np.multiply(((1.0 - self._icc) * s**2)[:, None], omega, out=weights[:, 2])
            table = columns[:, self._pairs[0]] * columns[:, self._pairs[1]]
            flat = table.T @ weights.reshape(d.size, -1).view(np.float64)
            packed += flat.view(theta.dtype).reshape(packed.shape)
            if starts is not None:
                shared = 1.0 + self._icc * np.add.reduceat(delta * omega, starts, axis=0)
                log_determinant += np.log(shared).sum(axis=0)
                left = self._group_sums(columns, s[:, None] * weights[:, 0], starts)
                right = self._group_sums(columns[:, :p], s[:, None] * omega, starts)
                scaled = self._icc / shared.T
                A -= _outer(left, left, scaled)
                B -= _outer(left, right, scaled)
                C += _outer(right, right, scaled)
        for position, full in enumerate((A, B, C)):
            for (i, j), value in zip(np.transpose(self._pairs), packed[:, position], strict=True):
                if i < full.shape[0] and j < full.shape[1]:
                    full[i, j] += value
                if i != j and j < full.shape[0] and i < full.shape[1]:
                    full[j, i] += value
        return Pieces(log_determinant, A, B, C)

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


def _outer(left: Values, right: Values, weights: Values) -> Values:
    """Sum over groups of weight * left * right', (l, r, t) from (t, l, G), (t, r, G), (t, G)."""
    return np.moveaxis((left * weights[:, None, :]) @ right.transpose(0, 2, 1), 0, 2)
