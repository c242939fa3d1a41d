"""The wild bootstrap: residuals keep their rows and change their signs, so that unequal variances survive the resampling."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np

from withstand.errors import ScenarioError
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.fit import Fit, Flags, IntervalFit
from withstand.procedures.multipliers import (
    DRAWS,
    MULTIPLIERS,
    allowed_exceedances,
    check_draws,
    check_multipliers,
    exceeded,
    kth_largest,
    slabs,
    wald,
    without_residuals,
)
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

_POWERS = {"hc3": 1.0, "hc2": 0.5, "hc0": 0.0}
"""Power of 1 - h that residuals are divided by."""

NO_LAW = "not applicable, because this resampling says nothing about the error of a new response"


@register
@dataclass(frozen=True)
class WildBootstrap(Procedure):
    """Least squares with the law of its HC3 t statistic taken from responses with randomly signed residuals.

    Parameters
    ----------
    weights : {"rademacher", "webb"}
        Two points (signs) or Webb's six.
    draws : int
        Bootstrap samples.
    residuals : {"hc3", "hc2", "hc0"}
        What the residuals are divided by, in the samples and in the standard errors: 1 - h, its root, or nothing.

    Notes
    -----
    The interval is studentised and symmetric. The test imposes the null hypothesis: residuals and leverages are those of the
    restricted fit (MacKinnon 2013).
    """

    weights: str = "rademacher"
    draws: int = DRAWS
    residuals: str = "hc3"

    name = "wild-bootstrap"
    family = "bootstrap"
    title = "wild bootstrap"
    formula = "y* = fit + v e/(1 - h), v = +-1; |t*| with HC3 errors; tests with the null imposed"
    source = "Wu (1986); Liu (1988); MacKinnon (2013)"

    def __post_init__(self) -> None:
        check_multipliers(self.weights, self.name)
        check_draws(self.draws, self.name)
        if self.residuals not in _POWERS:
            raise ScenarioError(
                f"residuals is '{self.residuals}'",
                where=f"procedures.use: {self.name}.residuals",
                remedy=f"Give one of {', '.join(_POWERS)}.",
            )

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return NO_LAW
        if len(design.saturated_rows):
            return f"not applicable, because row {design.saturated_rows[0] + 1} (in analysis order) has leverage 1"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        allowed = allowed_exceedances(self.draws, 1.0 - level, self.name)
        machines = [_Machine.of(design, focus, _POWERS[self.residuals]) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            return [self._fit(machine, sample, allowed) for machine in machines]

        return fit

    def _draw(self, n: int, generator: np.random.Generator) -> Floats:
        return MULTIPLIERS[self.weights](generator, (self.draws, n))

    def _fit(self, machine: _Machine, sample: Sample, allowed: int) -> Fit:
        estimate = machine.basis @ sample.projections
        covariance = machine.covariance(sample)
        test = partial(self._test, machine, sample, estimate, covariance, allowed)
        if len(estimate) > 1:
            return IntervalFit(estimate, without_residuals(sample), test=test)
        critical = np.empty(sample.width)
        for part, V in slabs(sample, self.name, partial(self._draw, machine.design.n)):
            statistics = machine.drawn(V, machine.stretch[:, None] * sample.residuals[:, part])
            critical[part] = kth_largest(statistics, allowed)
        claimed = covariance[0, 0]
        with np.errstate(invalid="ignore"):
            half = np.sqrt(critical * claimed)
        failed = ~np.isfinite(half)
        half = np.where(failed, 0.0, half)
        return IntervalFit(estimate, failed if failed.any() else None, estimate[0] - half, estimate[0] + half, claimed, test)

    def _test(
        self, machine: _Machine, sample: Sample, estimate: Floats, covariance: Floats, allowed: int, value: Floats
    ) -> Flags:
        distance = estimate - value.reshape(len(estimate), -1)
        observed = wald(distance, covariance)
        restricted = sample.residuals + machine.back @ distance
        restricted *= machine.restricted_stretch[:, None]
        rejected = np.empty(sample.width, dtype=bool)
        for part, V in slabs(sample, self.name, partial(self._draw, machine.design.n)):
            rejected[part] = exceeded(machine.drawn(V, restricted[:, part]), observed[part], allowed)
        return rejected


@dataclass(frozen=True, eq=False)
class _Machine:
    """Wald statistics with sandwich covariances of responses v u, for many v and u at once.

    With D a diagonal of sandwich weights, M = I - QQ' and c = Q'(v u), (M v u)' D (M v u) = sum v^2 d u^2 + c'(G c - 2 g),
    G = Q'DQ and g = Q'D(v u): everything is a product of the matrix of v with matrices made from u.

    Parameters
    ----------
    basis : ndarray of shape (k, p)
        Focal quantities in the coordinates of Q.
    weights : ndarray of shape (m, n)
        Sandwich weights a_i a_j / (1 - h)^2 (or a lower power) of the m = k (k + 1) / 2 pairs of focal rows.
    loads : ndarray of shape ((m + 1) p, n)
        Columns of Q, then those of -2 DQ for each pair.
    inner : ndarray of shape (m, p, p)
        G.
    back : ndarray of shape (n, k)
        A'(AA')^-1: what the restricted fit moves the residuals by.
    stretch, restricted_stretch : ndarray of shape (n,)
        1 / (1 - h), or a lower power, with the leverages of the full and of the restricted fit.
    """

    design: Design
    basis: Floats
    weights: Floats
    loads: Floats
    inner: Floats
    back: Floats
    stretch: Floats
    restricted_stretch: Floats

    @classmethod
    def of(cls, design: Design, focus: Focus, power: float) -> _Machine:
        """Prepare a focal quantity on a design."""
        A, Q = design.estimator(focus.L), design.Q
        left, right = np.triu_indices(len(A))
        stretch = (1.0 - design.leverage) ** -power
        weights = A[left] * A[right] * stretch**2
        loaded = weights[:, :, None] * Q
        back = np.linalg.solve(A @ A.T, A).T
        restricted = design.leverage - np.einsum("nk,kn->n", back, A)
        return cls(
            design,
            design.basis_rows(focus.L),
            weights,
            np.ascontiguousarray(np.concatenate([Q, *(-2.0 * loaded)], axis=1).T),
            np.asarray(Q.T @ loaded),
            np.asarray(back),
            stretch,
            (1.0 - restricted) ** -power,
        )

    def covariance(self, sample: Sample) -> Floats:
        """Sandwich covariances of the estimates, (k, k, B)."""
        return full_square(self.weights @ sample.squared_residuals)

    def drawn(self, V: Floats, U: Floats) -> Floats:
        """Statistics (r, B*) of the responses v u, for all rows v of V (B*, n) and columns u of U (n, r)."""
        p, (n, r) = self.design.p, U.shape
        products = (self.loads[:, None, :] * U.T).reshape(-1, n) @ V.T
        parts = products.reshape(-1, p, r, len(V))
        c = parts[0].reshape(p, -1)
        first = self._first(V, U)
        forms = np.empty((len(self.inner), r, len(V)))
        for i, G in enumerate(self.inner):
            rest = (G @ c).reshape(p, r, -1)
            rest += parts[i + 1]
            np.einsum("prj,prj->rj", parts[0], rest, out=forms[i])
            forms[i] += first[i]
        # Left-over rounding must not pass for a variance: M v u = 0 has variance 0.
        forms[np.abs(forms) <= 1e-12 * np.abs(first)] = 0.0
        return wald((self.basis @ c).reshape(-1, r, len(V)), full_square(forms))

    def _first(self, V: Floats, U: Floats) -> Floats:
        """Sum of v^2 d u^2, (m, r, B* or 1)."""
        squares = self.weights[:, None, :] * (U * U).T
        V2 = V * V
        if np.all(V2 == 1.0):
            return np.asarray(squares.sum(axis=2)[:, :, None])
        return np.asarray(squares @ V2.T)


def full_square(pairs: Floats) -> Floats:
    """From the m = k (k + 1) / 2 pairs of rows (m, ...) to the symmetric (k, k, ...)."""
    k = round((np.sqrt(8.0 * len(pairs) + 1.0) - 1.0) / 2.0)
    full = np.empty((k, k, *pairs.shape[1:]))
    for (i, j), pair in zip(zip(*np.triu_indices(k), strict=True), pairs, strict=True):
        full[i, j] = full[j, i] = pair
    return full
