"""One exact question in its simplest coordinates.

The focal quantity is turned into unit coordinates: with A = T'(O'Q'), O orthonormal and T upper triangular (k x k), the
statistic rejects where |w|^2 > c^2 e' D e, w = O'Q'y - truth. For k = 1 that is the t-type test with D divided by a'a; for the
classical joint test D = I/(n - p) and c^2 = k F.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from weakref import WeakKeyDictionary

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


@dataclass(frozen=True, eq=False)
class _Frame:
    """What does not depend on the world: see Problem; A is the estimator (k, n)."""

    A: Floats
    Q: Floats
    T: Floats
    middle: Middle
    unit: float


_frames: WeakKeyDictionary[Design, dict[tuple[object, ...], _Frame]] = WeakKeyDictionary()
"""By design, since the same procedure is asked about many worlds on it; a frame goes when its design goes."""

_criticals: WeakKeyDictionary[Design, dict[tuple[object, ...], float]] = WeakKeyDictionary()


def pose(procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance, level: float | None) -> Problem:
    """Bring a question into unit coordinates; `cannot` of `applicability` has been asked before.

    Parameters
    ----------
    procedure : LinearProcedure
        Applicable to the focus.
    design : Design
        The rows on which the disturbance was realised.
    focus : Focus
        The focal quantity.
    disturbance : Disturbance
        A world realised on the design.
    level : float or None
        Confidence level; None where only moments are wanted, which are free of the critical value.

    Raises
    ------
    TypeError
        If the variance estimate is of a shape not known here.
    """
    used = procedure.fitted_design(design)
    root = np.ones(design.n) if not procedure.weighted or design.weights is None else np.sqrt(design.weights)
    frame = _frame(procedure, design, focus)
    k = focus.k
    critical = math.nan if level is None else _critical(procedure, design, frame.A, level)
    mean = None if disturbance.mean is None else root * disturbance.mean
    bias = 0.0 - disturbance.target_shift(focus) if mean is None else frame.A @ mean - disturbance.target_shift(focus)
    residual = None if mean is None else mean - used.Q @ (used.Q.T @ mean)
    if residual is not None and mean is not None and np.abs(residual).max() <= 1e-13 * np.abs(mean).max():
        residual = None
    dependence = disturbance.dependence
    new = focus.kind is FocusKind.NEW and focus.point is not None
    point_spread = disturbance.spread_at(focus.point) if new and focus.point is not None else 0.0
    return Problem(
        Q=frame.Q,
        k=k,
        T=frame.T,
        middle=frame.middle,
        threshold=critical**2 if k == 1 else k * critical,
        shift=solve_triangular(frame.T, bias, trans="T"),
        residual_mean=residual,
        spread=root if disturbance.spread is None else root * disturbance.spread,
        correlation=None if dependence is None else correlation_of(dependence),
        disturbance=disturbance,
        added=point_spread**2 / frame.unit,
        critical=critical,
    )


def _frame(procedure: LinearProcedure, design: Design, focus: Focus) -> _Frame:
    known = _frames.setdefault(design, {})
    key = (procedure.identity, focus.L.tobytes(), focus.L.shape, focus.kind, focus.point is None)
    if key not in known:
        known[key] = _build(procedure, design, focus)
    return known[key]


def _build(procedure: LinearProcedure, design: Design, focus: Focus) -> _Frame:
    used = procedure.fitted_design(design)
    A = used.estimator(focus.L)
    k = focus.k
    rotation, found = qr(used.basis_rows(focus.L).T, mode="full")
    flip = np.where(np.diag(found[:k]) < 0.0, -1.0, 1.0)
    rotation[:, :k] *= flip
    T: Floats = np.asarray(flip[:, None] * found[:k], dtype=np.float64)
    unit = float(T[0, 0]) ** 2 if k == 1 else 1.0
    new = focus.kind is FocusKind.NEW and focus.point is not None
    if k == 1:
        middle = middle_of(procedure.form(used, A), 1.0 / unit, 1.0 / (used.df * unit) if new else 0.0)
    else:
        middle = DiagonalMiddle(np.full(design.n, 1.0 / used.df))
    if middle is None:
        raise TypeError(f"the variance estimate of '{procedure.name}' has no exact answers")
    return _Frame(A, np.ascontiguousarray(used.Q @ np.roll(rotation, -k, axis=1)), T, middle, unit)


def _critical(procedure: LinearProcedure, design: Design, A: Floats, level: float) -> float:
    known = _criticals.setdefault(design, {})
    key = (procedure.identity, A.tobytes(), level)
    if key not in known:
        known[key] = procedure.critical(procedure.fitted_design(design), A, level)
    return known[key]
