"""Weighted least squares with weights from a fitted variance function."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.linalg import qr

from withstand.departures.along import FITTED, column_along, value_at
from withstand.errors import ScenarioError
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.critical import student_critical
from withstand.procedures.fit import Fit, Flags, WaldFit
from withstand.procedures.normal import Products, quadratic, solve
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

MODEL = "model"
"""Stands for all columns of the model matrix."""

_RANK = 1e-10
_NO_RESIDUAL = 1e-20
"""A squared residual below this share of their mean is rounding: it has no logarithm worth the name."""

_FULL = 1e-9
"""A weighted leverage this near to 1 leaves no residual to protect with."""


@dataclass(frozen=True, eq=False)
class WeightedBlock:
    """The weighted fits of one block, to the residuals of the unweighted one.

    Parameters
    ----------
    weights : ndarray of shape (n, B)
        w = exp(-(z - zbar)' gamma).
    gamma : ndarray of shape (q, B)
        Coefficients of the centred variance function in its orthonormal coordinates.
    step : ndarray of shape (p, B)
        Weighted minus unweighted coefficients, in the coordinates of Q.
    residuals : ndarray of shape (n, B)
        Of the weighted fits, not multiplied by weights.
    inverses : list of ndarray of shape (p, k, B)
        N^-1 l for the rows l of each focal quantity; the last one is N^-1 itself where that was asked for.
    scale : ndarray of shape (B,)
        s^2 = sum w e^2 / (n - p).
    failed : ndarray of bool, shape (B,)
        No logarithm, or no solution.
    """

    weights: Floats
    gamma: Floats
    step: Floats
    residuals: Floats
    inverses: list[Floats]
    scale: Floats
    failed: Flags


@register
@dataclass(frozen=True)
class FittedWeights(Procedure):
    """Weights exp(-Z gamma), gamma from the regression of the log squared residuals on Z.

    Parameters
    ----------
    along : str
        Z: a numeric column, "fitted" for the reference fitted mean, or "model" for all columns of the model matrix.

    Notes
    -----
    Harvey's two-step estimator; the intercept of the variance function cancels. A replicate with a residual of exactly zero
    has no logarithm there and counts as a failure. A new response has the variance s^2 exp(z' gamma) at its own z.
    """

    along: str = MODEL

    name = "fitted-weights"
    family = "weights"
    title = "least squares with fitted weights"
    formula = "w = exp(-z'gamma), gamma from log e^2 on (1, Z); V = s^2 l'(X'WX)^-1 l, s^2 = sum w e^2 / (n - p), t(n - p)"
    source = "Harvey (1976)"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if len(design.saturated_rows):
            return (
                f"not applicable, because row {design.saturated_rows[0] + 1} (in analysis order) has leverage 1: its squared "
                "residual is zero and has no logarithm"
            )
        if self._variance_columns(design)[0].shape[1] == 0:
            return f"not applicable, because '{self.along}' is the same in every row"
        known = focus.point is not None and (self.along == FITTED or self.along in focus.point.columns)
        if focus.kind is FocusKind.NEW and self.along != MODEL and not known:
            return f"not applicable, because the point of the focus gives no value for '{self.along}'"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        bases = [design.basis_rows(focus.L) for focus in foci]
        criticals = [student_critical(focus.k, design.df, level) for focus in foci]
        products = Products(design.Q)
        Z, to_z = self._variance_columns(design)
        points = [self._point_row(design, focus) @ to_z if focus.kind is FocusKind.NEW else None for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            block = weighted_block(sample, products, Z, bases, whole=self._protected)
            covariances, failed = self._covariances(sample, products, bases, block)
            fits: list[Fit] = []
            for basis, covariance, critical, z in zip(bases, covariances, criticals, points, strict=True):
                claimed = covariance if z is None else covariance + block.scale * np.exp(z @ block.gamma)
                fits.append(WaldFit(basis @ (sample.projections + block.step), failed, claimed, critical))
            return fits

        return fit

    _protected = False

    def _covariances(
        self, sample: Sample, products: Products, bases: list[Floats], block: WeightedBlock
    ) -> tuple[list[Floats], Flags]:
        """Claimed covariances, one (k, k, B) a focal quantity, and the replicates that have none."""
        return [block.scale * quadratic(rows, part) for rows, part in zip(bases, block.inverses, strict=True)], block.failed

    def _variables(self, design: Design) -> Floats:
        """Z, (n, m), in its own units."""
        if self.along == MODEL:
            return design.X
        try:
            return column_along(design, self.along, self.name)[:, None]
        except ScenarioError as refusal:
            where = f"procedures.use: {self.name}.along"
            raise ScenarioError(refusal.what, where=where, remedy=refusal.remedy) from refusal

    def _variance_columns(self, design: Design) -> tuple[Floats, Floats]:
        """Orthonormal basis (n, q) of the centred columns of Z, and the matrix (m, q) that takes a centred row there."""
        variables = self._variables(design)
        size = np.linalg.norm(variables, axis=0)
        centred = variables - variables.mean(axis=0)
        varies = np.linalg.norm(centred, axis=0) > _RANK * size
        centred, names = centred[:, varies], np.flatnonzero(varies)
        if names.size == 0:
            return np.empty((design.n, 0)), np.empty((variables.shape[1], 0))
        lengths = np.linalg.norm(centred, axis=0)
        Q, R, order = qr(centred / lengths, mode="economic", pivoting=True)
        rank = int(np.sum(np.abs(np.diag(R)) > _RANK))
        to_z = np.zeros((variables.shape[1], rank))
        kept = order[:rank]
        to_z[names[kept]] = np.linalg.inv(R[:rank, :rank]) / lengths[kept][:, None]
        return np.ascontiguousarray(Q[:, :rank]), to_z

    def _point_row(self, design: Design, focus: Focus) -> Floats:
        """The row of Z at the point of a new response, centred as the columns of Z are."""
        means = self._variables(design).mean(axis=0)
        if self.along == MODEL:
            return np.asarray(focus.L[0] - means)
        if focus.point is None:
            raise TypeError("a new response needs a point; not_applicable says so first")
        return np.asarray([value_at(focus.point, self.along, self.name)]) - means


@register
@dataclass(frozen=True)
class FittedWeightsHc3(FittedWeights):
    """Fitted weights with a sandwich that holds whatever the weights are worth."""

    name = "fitted-weights-hc3"
    title = "fitted weights, protected by HC3"
    formula = "w as in fitted-weights; V = sum (w_t l'(X'WX)^-1 x_t)^2 e_t^2 / (1 - h_t)^2, h weighted leverages, t(n - p)"
    source = "Harvey (1976); Romano & Wolf (2017)"

    _protected = True

    def _covariances(
        self, sample: Sample, products: Products, bases: list[Floats], block: WeightedBlock
    ) -> tuple[list[Floats], Flags]:
        """See FittedWeights."""
        leverage = block.weights * products.diagonal(block.inverses[-1])
        share = 1.0 - leverage
        lost = np.any(share < _FULL, axis=0)
        share[:, lost] = 1.0
        scores = block.weights * block.residuals / share
        covariances: list[Floats] = []
        for part in block.inverses[:-1]:
            rows = [(products.Q @ part[:, i]) * scores for i in range(part.shape[1])]
            covariances.append(np.array([[np.einsum("tb,tb->b", one, other) for other in rows] for one in rows]))
        return covariances, block.failed | lost


def weighted_block(sample: Sample, products: Products, Z: Floats, bases: list[Floats], *, whole: bool) -> WeightedBlock:
    """Fit the variance function and then the weighted regressions of a block.

    Parameters
    ----------
    sample : Sample
        The block.
    products : Products
        Of the basis Q of its design.
    Z : ndarray of shape (n, q)
        Orthonormal basis of the centred variance function.
    bases : list of ndarray of shape (k, p)
        Focal rows in the coordinates of Q.
    whole : bool
        Whether the whole inverse is needed as well.

    Returns
    -------
    WeightedBlock
        The fits.
    """
    squares = sample.squared_residuals
    lost = squares.min(axis=0) <= _NO_RESIDUAL * (sample.residual_sum / sample.design.n)
    logs = np.log(squares[:, ~lost]) if lost.any() else np.log(squares)
    gamma = np.zeros((Z.shape[1], sample.width))
    gamma[:, ~lost] = Z.T @ logs
    weights = np.exp(-(Z @ gamma))
    p = products.Q.shape[1]
    right = [weighted_score(products.Q, weights, sample)[:, None, :]]
    fixed = [*(rows.T for rows in bases), *([np.eye(p)] if whole else [])]
    right += [np.broadcast_to(rows[:, :, None], (*rows.shape, sample.width)) for rows in fixed]
    solved, singular = solve(products.normal(weights), np.concatenate(right, axis=1))
    step = solved[:, 0]
    ends = np.cumsum([1, *(rows.shape[1] for rows in fixed)])
    inverses = [solved[:, start:end] for start, end in pairwise(ends.tolist())]
    residuals = np.matmul(products.Q, step, out=sample.buffer("weighted residuals"))
    np.subtract(sample.residuals, residuals, out=residuals)
    scale = np.einsum("tb,tb,tb->b", weights, residuals, residuals) / sample.design.df
    failed = lost | singular | ~(scale > 0.0)
    return WeightedBlock(weights, gamma, step, residuals, inverses, np.where(failed, 1.0, scale), failed)


def weighted_score(Q: Floats, weights: Floats, sample: Sample) -> Floats:
    """Q' W e, (p, B), e the residuals of the unweighted fit."""
    product = np.multiply(weights, sample.residuals, out=sample.buffer("weighted residuals"))
    return np.asarray(Q.T @ product)
