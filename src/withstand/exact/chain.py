"""Autoregressive errors with a diagonal D: one tridiagonal solve for each theta."""

from __future__ import annotations

import numpy as np
from scipy.linalg import lapack

from withstand.exact.correlation import Chain
from withstand.exact.tilt import Pieces, Values
from withstand.study.design import Floats


class TridiagonalSolves:
    """Sigma = S R S with R the correlation of a chain, D = diag(d).

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
    chain : Chain
        The correlation.

    Notes
    -----
    R^-1 + theta S D S is tridiagonal, and eliminated from one end its pivots never fall below the element beside them in
    modulus while the real part of theta is not negative, so LAPACK's row exchanges do not occur and its pivots are the wanted
    ones. Where they do occur, at negative theta, the theta is treated as out of range.
    """

    def __init__(self, columns: Floats, p: int, d: Floats, spread: Floats, chain: Chain) -> None:
        rows = chain.order
        s = spread[rows][:, None]
        self._diagonal, self._beside = chain_precision(chain.links)
        self._log_determinant = float(np.sum(np.log1p(-(chain.links**2))))
        self._d = s[:, 0] ** 2 * d[rows]
        self._left = columns[rows] / s
        self._right = np.asfortranarray(
            np.hstack([s * columns[rows, :p], tridiagonal(self._diagonal, self._beside, self._left)])
        )
        self._p = p

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        r, p, t = self._left.shape[1], self._p, theta.size
        log_determinant = np.empty(t, dtype=theta.dtype)
        A, B, C = (np.full(shape, np.nan, dtype=theta.dtype) for shape in ((r, r, t), (r, p, t), (p, p, t)))
        factor, solve = (lapack.zgttrf, lapack.zgttrs) if np.iscomplexobj(theta) else (lapack.dgttrf, lapack.dgttrs)
        n = self._d.size
        beside, right = self._beside.astype(theta.dtype), self._right.astype(theta.dtype, order="F")
        for i, value in enumerate(theta):
            below, pivots, above, second, exchanges, _ = factor(beside, self._diagonal + value * self._d, beside)
            if np.any(exchanges != np.arange(1, n + 1)) or (not np.iscomplexobj(theta) and pivots.min() <= 0.0):
                log_determinant[i] = np.nan
                continue
            log_determinant[i] = self._log_determinant + np.sum(np.log(pivots))
            solved, _ = solve(below, pivots, above, second, exchanges, right)
            A[:, :, i] = _times(self._left * self._d[:, None], solved[:, p:]) * value
            B[:, :, i] = _times(self._right[:, :p], solved[:, p:]).T
            C[:, :, i] = _times(self._right[:, :p], solved[:, :p])
        return Pieces(log_determinant, A, B, C)


def _times(left: Floats, right: Values) -> Values:
    """Left' right without turning the real left into a complex copy."""
    if not np.iscomplexobj(right):
        return np.asarray(left.T @ right)
    return np.asarray(left.T @ right.real + 1j * (left.T @ right.imag))


def chain_precision(links: Floats) -> tuple[Floats, Floats]:
    """Diagonal (n,) and off-diagonal (n - 1,) of the inverse of a chain's correlation matrix."""
    own = 1.0 / (1.0 - links**2)
    diagonal = own.copy()
    diagonal[:-1] += links[1:] ** 2 * own[1:]
    return diagonal, -links[1:] * own[1:]


def tridiagonal(diagonal: Floats, beside: Floats, M: Floats) -> Floats:
    """A symmetric tridiagonal matrix times M (n, m)."""
    result = diagonal[:, None] * M
    result[:-1] += beside[:, None] * M[1:]
    result[1:] += beside[:, None] * M[:-1]
    return result
