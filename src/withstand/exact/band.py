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
        self._log_determinant = float(np.sum(np.log1p(-(links**2))))
        scaled = lags.copy()
        for lag in range(len(lags)):
            scaled[lag, lag:] *= spread[lag:] * spread[: spread.size - lag]
        diagonal, beside = chain_precision(links)
        self._fixed = np.zeros((2, spread.size))
        self._fixed[0] = diagonal
        self._fixed[1, 1:] = beside
        self._lags = scaled
        left = columns / spread[:, None]
        carried = tridiagonal(diagonal, beside, left)
        self._borders = np.hstack([spread[:, None] * columns[:, :p], carried])
        self._whole = left.T @ carried
        self._p = p

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        p, t, n = self._p, theta.size, self._borders.shape[0]
        width = self._lags.shape[0] - 1
        m = self._borders.shape[1]
        log_determinant = np.full(t, self._log_determinant, dtype=theta.dtype)
        total = np.zeros((t, m, m), dtype=theta.dtype)
        # Rows past the end are decoupled unit rows without borders.
        window = np.zeros((width, width, t), dtype=theta.dtype)
        border = np.zeros((width, m, t), dtype=theta.dtype)
        for j in range(width):
            self._enter(j, window[j, : j + 1], border[j], theta)
            window[: j, j] = window[j, : j]
        kept = np.empty((_FLUSH, m, t), dtype=theta.dtype)
        pivots = np.empty((_FLUSH, t), dtype=theta.dtype)
        entering = np.empty((width, t), dtype=theta.dtype)
        for i in range(n):
            at = i % _FLUSH
            pivots[at] = window[0, 0]
            kept[at] = border[0]
            column = window[1:, 0] / window[0, 0]
            new = np.empty_like(window)
            np.subtract(window[1:, 1:], column[:, None] * window[None, 0, 1:], out=new[:-1, :-1])
            border[:-1] = border[1:] - column[:, None] * border[None, 0]
            # The entering row also meets the row eliminated now, at lag `width`.
            self._enter(i + width, entering, border[-1], theta, own=new[-1, -1:])
            new[-1, :-1] = entering[1:]
            far = entering[0] / window[0, 0]
            new[-1, :-1] -= far * window[0, 1:]
            new[:-1, -1] = new[-1, :-1]
            new[-1, -1] -= far * entering[0]
            border[-1] -= far * kept[at]
            window = new
            if at == _FLUSH - 1 or i == n - 1:
                log_determinant += np.log(pivots[: at + 1]).sum(axis=0)
                rows = kept[: at + 1].transpose(2, 1, 0)
                total += (rows / pivots[: at + 1].T[:, None, :]) @ rows.transpose(0, 2, 1)
        products = np.moveaxis(total, 0, 2)
        A = self._whole[:, :, None] - products[p:, p:]
        return Pieces(log_determinant, A, products[p:, :p], products[:p, :p])

    def _enter(self, row: int, entries: Values, border: Values, theta: Values, own: Values | None = None) -> None:
        """Write the elements of an entering row: `entries` beside the diagonal, nearest last, with the diagonal in `own`.

        Without `own`, `entries` ends with the diagonal.
        """
        n = self._borders.shape[0]
        if row >= n:
            entries[:] = 0.0
            border[:] = 0.0
            (entries[-1:] if own is None else own)[:] = 1.0
            return
        first = 0 if own is None else 1
        count = len(entries)
        lags = np.arange(count - 1 + first, first - 1, -1)
        values = self._lags[lags, row][:, None] * theta
        for lag in (0, 1):
            place = count - 1 + first - lag
            if 0 <= place < count:
                values[place] += self._fixed[lag, row]
        entries[:] = values
        border[:] = self._borders[row][:, None]
        if own is not None:
            own[0] = self._lags[0, row] * theta + self._fixed[0, row]
