"""One exact question in its simplest coordinates.

The focal quantity is turned into unit coordinates: with A = T'(O'Q'), O orthonormal and T upper triangular (k x k), the
statistic rejects where |w|^2 > c^2 e' D e, w = O'Q'y - truth. For k = 1 that is the t-type test with D divided by a'a; for the
classical joint test D = I/(n - p) and c^2 = k F.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from withstand.departures.world import Disturbance
from withstand.exact.correlation import Correlation, correlation_of
from withstand.exact.middle import DiagonalMiddle, Middle, middle_of
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind


@dataclass(frozen=True, eq=False)
class Problem:
    """|w|^2 against c^2 e' D e, with y = mean + spread * u.

    Parameters
    ----------
    Q : ndarray of shape (n, p)
        Orthonormal basis of the fitted model space; its last k columns are the focal directions.
    k : int
        Focal coordinates.
    T : ndarray of shape (k, k)
        Focal quantities = T' w; for k = 1 the positive root of a'a.
    middle : Middle
        D.
    threshold : float
        c^2.
    shift : ndarray of shape (k,)
        Mean of w when the hypothesised value is the true one: the bias.
    residual_mean : ndarray of shape (n,) or None
        M times the mean shift.
    spread : ndarray of shape (n,)
        SD of every row of the fitted response.
    correlation : Correlation or None
        None: independent.
    disturbance : Disturbance
        For products with its correlation matrix.
    added : float
        Variance of a new response's own error, in the unit of w squared.
    critical : float
        Critical value of the procedure.
    """

    Q: Floats
    k: int
    T: Floats
    middle: Middle
    threshold: float
    shift: Floats
    residual_mean: Floats | None
    spread: Floats
    correlation: Correlation | None
    disturbance: Disturbance
    added: float
    critical: float

    @property
    def n(self) -> int:
        """Rows."""
        return self.Q.shape[0]

    @property
    def p(self) -> int:
        """Model columns."""
        return self.Q.shape[1]

    @property
    def columns(self) -> Floats:
        """Q, and the residual mean as a further column where there is one: (n, p) or (n, p + 1)."""
        return self.Q if self.residual_mean is None else np.column_stack([self.Q, self.residual_mean])

    def covariance(self, M: Floats) -> Floats:
        """Covariance of the fitted response times M (n, m)."""
        inner = self.spread[:, None] * M
        dependence = self.disturbance.dependence
        return np.asarray(self.spread[:, None] * (inner if dependence is None else dependence.correlate(inner)))

    def to_unit(self, values: Floats) -> Floats:
        """Values of the focal quantities (E, k) in the coordinates of w."""
        return np.asarray(solve_triangular(self.T, np.asarray(values, dtype=np.float64).T, trans="T").T)


def pose(procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance, level: float) -> Problem:
    """Bring a question into unit coordinates; `cannot` of `applicability` has been asked before.

    Raises
    ------
    TypeError
        If the variance estimate is of a shape not known here.
    """
    used = procedure.fitted_design(design)
    root = np.sqrt(np.asarray(design.weights)) if procedure.weighted else np.ones(design.n)
    A = used.estimator(focus.L)
    k = focus.k
    O, T = qr(used.basis_rows(focus.L).T, mode="full")
    T = T[:k]
    flip = np.where(np.diag(T) < 0.0, -1.0, 1.0)
    O[:, :k] *= flip
    T = flip[:, None] * T
    Q = used.Q @ np.roll(O, -k, axis=1)
    unit = float(T[0, 0]) ** 2 if k == 1 else 1.0
    new = focus.kind is FocusKind.NEW and focus.point is not None
    critical = procedure.critical(used, A, level)
    if k == 1:
        middle = middle_of(procedure.form(used, A), 1.0 / unit, 1.0 / (used.df * unit) if new else 0.0)
        threshold = critical**2
    else:
        middle, threshold = DiagonalMiddle(np.full(design.n, 1.0 / used.df)), k * critical
    if middle is None:
        raise TypeError(f"the variance estimate of '{procedure.name}' has no exact answers")
    mean = None if disturbance.mean is None else root * disturbance.mean
    bias = -disturbance.target_shift(focus) if mean is None else A @ mean - disturbance.target_shift(focus)
    residual = None if mean is None else mean - used.Q @ (used.Q.T @ mean)
    if residual is not None and np.abs(residual).max() <= 1e-13 * np.abs(mean).max():
        residual = None
    dependence = disturbance.dependence
    point_spread = disturbance.spread_at(focus.point) if new and focus.point is not None else 0.0
    return Problem(
        Q=np.ascontiguousarray(Q),
        k=k,
        T=T,
        middle=middle,
        threshold=threshold,
        shift=solve_triangular(T, bias, trans="T"),
        residual_mean=residual,
        spread=root if disturbance.spread is None else root * disturbance.spread,
        correlation=None if dependence is None else correlation_of(dependence),
        disturbance=disturbance,
        added=point_spread**2 / unit,
        critical=critical,
    )
