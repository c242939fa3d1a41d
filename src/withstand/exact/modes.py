"""Variance estimates of few directions, or of designs small enough for eigenvalues: V as a sum of squares of normals."""

from __future__ import annotations

import numpy as np
from scipy.linalg import cholesky, eigh, solve_triangular

from withstand.exact.middle import GroupedMiddle, RowsMiddle
from withstand.exact.problem import Problem
from withstand.exact.tilt import Pieces, Values
from withstand.study.design import Floats

_ROWS = 4096
"""Modes handled at a time."""

_DIRECTIONS = 64
"""Rows of B carried through the covariance at a time."""


class Modes:
    """errors' D errors = sum_r beta_r eta_r^2 with independent standard normal eta.

    Parameters
    ----------
    beta : ndarray of shape (m,)
        Not negative.
    w : ndarray of shape (m, r)
        P' Sigma^-1 Cov(errors, eta_r): with it, P' D errors = sum beta_r w_r eta_r.
    u : ndarray of shape (m, p)
        Cov(Q' errors, eta_r).
    B0, C0 : ndarray of shape (r, p) and (p, p)
        P'Q - sum w_r u_r' and Q' Sigma Q - sum u_r u_r': what the modes leave of the errors; zero if they are n.
    """

    def __init__(self, beta: Floats, w: Floats, u: Floats, B0: Floats, C0: Floats) -> None:
        self._beta = beta
        self._wu = np.hstack([w, u])
        self._r, self._p = w.shape[1], u.shape[1]
        self._B0, self._C0 = B0, C0

    def pieces(self, theta: Values) -> Pieces:
        """See Structure."""
        r, t = self._r, theta.size
        log_determinant = np.zeros(t, dtype=theta.dtype)
        steep = np.zeros((r, r, t), dtype=theta.dtype)
        flat = np.zeros((r + self._p, self._p, t), dtype=theta.dtype)
        for begin in range(0, self._beta.size, _ROWS):
            delta = self._beta[begin : begin + _ROWS, None] * theta
            inner = 1.0 + delta
            log_determinant += np.log(inner).sum(axis=0)
            wu = self._wu[begin : begin + _ROWS]
            steep += _weighted(wu[:, :r], wu[:, :r], delta / inner)
            flat += _weighted(wu, wu[:, r:], 1.0 / inner)
        return Pieces(log_determinant, steep, self._B0[:, :, None] + flat[:r], self._C0[:, :, None] + flat[r:])


def _weighted(left: Floats, right: Floats, weights: Values) -> Values:
    """Sum over modes of weight * left * right', (l, r, t)."""
    table = (left[:, :, None] * right[:, None, :]).reshape(len(left), -1)
    product = table.T @ np.ascontiguousarray(weights).view(np.float64)
    return product.view(weights.dtype).reshape(left.shape[1], right.shape[1], -1)


def dense_modes(problem: Problem) -> Modes:
    """The eigenvalue route: whiten the errors, rotate D to its eigenvectors. Memory n^2, time n^3."""
    G = cholesky(problem.covariance(np.eye(problem.n)), lower=True)
    beta, U = eigh(G.T @ problem.middle.times(G), driver="evd", overwrite_a=True)
    w = U.T @ solve_triangular(G, problem.columns, lower=True)
    u = U.T @ (G.T @ problem.Q)
    # What rounding leaves of a zero eigenvalue must not change sign.
    beta = np.maximum(beta, 0.0)
    return Modes(beta, w, u, np.zeros((w.shape[1], problem.p)), np.zeros((problem.p, problem.p)))


def row_modes(problem: Problem, middle: RowsMiddle) -> Modes:
    """D = B'B with few rows B (m, n): the eigenvalues of B Sigma B'."""
    B = middle.rows
    inner = np.empty((len(B), len(B)))
    for begin in range(0, len(B), _DIRECTIONS):
        inner[:, begin : begin + _DIRECTIONS] = B @ problem.covariance(B[begin : begin + _DIRECTIONS].T)
    beta, U = eigh(inner, driver="evd", overwrite_a=True)
    through = problem.covariance(problem.Q)
    return _from_scores(problem, beta, U.T @ (B @ problem.columns), U.T @ (B @ through), through)


def group_modes(problem: Problem, middle: GroupedMiddle) -> Modes:
    """D = sum_g b_g b_g' where no correlation reaches from one group to another: the b_g' errors are independent."""
    through = problem.covariance(problem.Q)
    beta = middle.sums(problem.covariance(middle.b[:, None]))[:, 0]
    return _from_scores(problem, beta, middle.sums(problem.columns), middle.sums(through), through)


def _from_scores(problem: Problem, beta: Floats, q: Floats, r: Floats, through: Floats) -> Modes:
    # Directions whose variance is rounding error do not move V.
    kept = beta > 1e-14 * beta.max()
    root = np.sqrt(beta[kept])[:, None]
    w, u = q[kept] / root, r[kept] / root
    return Modes(beta[kept], w, u, problem.columns.T @ problem.Q - w.T @ u, problem.Q.T @ through - u.T @ u)
