"""Lag-window variances with independent or autoregressive errors: one sweep down a band, all theta abreast."""

from __future__ import annotations

import numpy as np

from withstand.exact.chain import chain_precision, tridiagonal
from withstand.exact.tilt import Pieces, Values
from withstand.study.design import Floats

_FLUSH = 256
"""Eliminated rows kept before their products are added up by matrix multiplication."""


class BandSweep:
    """Sigma = S R S with R the identity or the correlation of a chain in row order, D banded.

    Parameters
    ----------
    columns : ndarray of shape (n, r)
        Q and, where there is one, the residual mean.
    p : int
        Columns of Q.
    lags : ndarray of shape (L + 1, n)
        D, see BandMiddle; L >= 1.
    spread : ndarray of shape (n,)
        S, positive.
    links : ndarray of shape (n,)
        Correlation of every row with the one before; zeros for independent errors.

    Notes
    -----
    R^-1 + theta S D S is eliminated from the top without row exchanges. Only a window of L rows and the borders are alive at
    any time; inverses are never formed, since J'G^-1 J = sum f f'/pivot over the eliminated rows f of the borders J.
    """

    def __init__(self, columns: Floats, p: int, lags: Floats, spread: Floats, links: Floats) -> None:
        L, n = lags.shape[0] - 1, spread.size
        self._log_determinant = float(np.sum(np.log1p(-(links**2))))
        diagonal, beside = chain_precision(links)
        # Elements beside and on the diagonal by lag; L unit rows past the end, coupled to nothing, flush the window.
        self._steady = np.zeros((n + L, L + 1, 1))
        self._moving = np.zeros((n + L, L + 1, 1))
        self._steady[:n, 0, 0] = diagonal
        self._steady[1:n, 1, 0] = beside
        self._steady[n:, 0] = 1.0
        for lag in range(L + 1):
            self._moving[lag:n, lag, 0] = lags[lag, lag:] * spread[lag:] * spread[: n - lag]
        left = columns / spread[:, None]
        carried = tridiagonal(diagonal, beside, left)
        self._borders = np.zeros((n + L, p + columns.shape[1], 1))
        self._borders[:n, :, 0] = np.hstack([spread[:, None] * columns[:, :p], carried])
        self._whole = left.T @ carried
        self._n, self._L, self._p = n, L, p

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        n, L, p, t = self._n, self._L, self._p, theta.size
        m = self._borders.shape[1]
        log_determinant = np.full(t, self._log_determinant, dtype=theta.dtype)
        total = np.zeros((t, m, m), dtype=theta.dtype)
        window = np.zeros((L, L, t), dtype=theta.dtype)
        border = np.zeros((L, m, t), dtype=theta.dtype)
        border[:] = self._borders[:L]
        for j in range(L):
            elements = self._steady[j] + self._moving[j] * theta
            window[j, : j + 1] = window[: j + 1, j] = elements[j::-1]
        kept = np.empty((_FLUSH, m, t), dtype=theta.dtype)
        pivots = np.empty((_FLUSH, t), dtype=theta.dtype)
        for i in range(n):
            at = i % _FLUSH
            pivots[at], kept[at] = window[0, 0], border[0]
            # The window moves on by one row: what is left of the old rows goes up and left, the entering row comes last.
            elements = self._steady[i + L] + self._moving[i + L] * theta
            coupling = np.concatenate([window[0, 1:], elements[L:]])
            shares = coupling / pivots[at]
            moved = np.empty_like(window)
            moved[:-1, :-1] = window[1:, 1:]
            moved[-1, ::-1] = moved[::-1, -1] = elements[:L]
            moved -= shares[:, None] * coupling[None]
            border[:-1] = border[1:]
            border[-1] = self._borders[i + L]
            border -= shares[:, None] * kept[at]
            window = moved
            if at == _FLUSH - 1 or i == n - 1:
                log_determinant += np.log(pivots[: at + 1]).sum(axis=0)
                rows = kept[: at + 1].transpose(2, 1, 0)
                total += (rows / pivots[: at + 1].T[:, None, :]) @ rows.transpose(0, 2, 1)
        products = np.moveaxis(total, 0, 2)
        return Pieces(log_determinant, self._whole[:, :, None] - products[p:, p:], products[p:, :p], products[:p, :p])
