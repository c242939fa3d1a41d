"""Least squares on a transformed response.

A coefficient on the transformed scale estimates another quantity than the same coefficient on the original one, so that only
its test of 'no effect' is compared. Mean and new responses are brought back to the original scale.
"""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.procedures.base import Answer, Fitter, Procedure, register
from withstand.procedures.fit import Fit, Flags, IntervalFit, wald_statistic
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

NO_OTHER_NULL = "not applicable, because only 'no effect' (a null value of 0) means the same on both scales"

LAMBDAS = (-2.0, 2.0)
"""Range of the Box-Cox exponent."""

_GRID = np.linspace(LAMBDAS[0], LAMBDAS[1], 17)
_GOLDEN_STEPS = 24
_GOLDEN = (np.sqrt(5.0) - 1.0) / 2.0


def test_of_no_effect(focus: Focus) -> frozenset[Answer]:
    """What a fit on another scale of the response gives for a focal quantity."""
    if focus.kind in (FocusKind.MEAN, FocusKind.NEW):
        return frozenset({Answer.ESTIMATE, Answer.INTERVAL})
    return frozenset({Answer.TEST})


@dataclass(frozen=True)
class TransformedResponse(Procedure):
    """Ordinary least squares on g(y)."""

    family = "transformed response"
    null = "the predictor has no effect"
    target = "mean of the transformed response; at a point the mean, or the median of a new response, on the original scale"
    equivariant = False
    claims_variance = False

    @abstractmethod
    def transform(self, design: Design, y: Floats) -> tuple[Floats, _Scale, Flags]:
        """The transformed response (n, B), its scale, and the replicates in which it is not defined (B,)."""

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind not in (FocusKind.MEAN, FocusKind.NEW) and np.any(focus.null != 0.0):
            return NO_OTHER_NULL
        return None

    def answers(self, focus: Focus) -> frozenset[Answer]:
        """See Procedure; slopes on the original scale are not estimated."""
        return test_of_no_effect(focus)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        bases = [design.basis_rows(focus.L) for focus in foci]
        t = float(tails.t_isf((1.0 - level) / 2.0, design.df))
        bounds = [float(tails.f_isf(1.0 - level, focus.k, design.df)) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            z, scale, failed = self.transform(design, sample.response)
            c = design.Q.T @ z
            e = z - design.Q @ c
            s2 = np.einsum("tb,tb->b", e, e) / design.df
            fits: list[Fit] = []
            for basis, focus, bound in zip(bases, foci, bounds, strict=True):
                if focus.kind is FocusKind.NEW:
                    half = t * np.sqrt(s2 * (1.0 + np.sum(basis**2)))
                    fits.append(_new_response(basis @ c, half, scale, failed))
                elif focus.kind is FocusKind.MEAN:
                    fits.append(_mean_response(design, basis, c, e, s2, t, scale, failed))
                else:
                    covariance = (basis @ basis.T)[:, :, None] * s2
                    with np.errstate(divide="ignore", invalid="ignore"):
                        statistic = wald_statistic(basis @ c, np.where(failed, np.eye(focus.k)[:, :, None], covariance))
                    fits.append(only_a_test(statistic, bound, failed, focus.k))
            return fits

        return fit


def only_a_test(statistic: Floats, critical: float, failed: Flags, k: int) -> IntervalFit:
    """A fit that answers no more than whether 'no effect' is rejected."""
    no_estimate, rejected = np.zeros((k, len(statistic))), statistic > critical
    found = failed if failed.any() else None
    return IntervalFit(no_estimate, found, test=lambda value: rejected, scaled=statistic / critical)


@dataclass(frozen=True, eq=False)
class _Scale:
    """The power transformation z = (y^lam - 1)/lam, log y at 0, and its way back.

    Parameters
    ----------
    lam : ndarray of shape (B,)
        Exponents.
    """

    lam: Floats

    def to(self, y: Floats) -> Floats:
        """Transform positive y (..., B)."""
        log = np.log(y)
        near_zero = np.abs(self.lam) < 1e-8
        lam = np.where(near_zero, 1.0, self.lam)
        return np.where(near_zero, log, np.expm1(lam * log) / lam)

    def back(self, z: Floats) -> tuple[Floats, Floats]:
        """Response and its derivative in z, for z (..., B); 0 (or infinity) beyond the range of the transformation."""
        near_zero = np.abs(self.lam) < 1e-8
        lam = np.where(near_zero, 1.0, self.lam)
        inside = 1.0 + lam * z
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            power = np.where(inside > 0.0, np.log(np.maximum(inside, 0.0)) / lam, np.where(lam > 0.0, -np.inf, np.inf))
            y = np.exp(np.where(near_zero, z, power))
            slope = np.where(near_zero, y, np.where(inside > 0.0, y / inside, 0.0))
        return y, slope


def _new_response(centre: Floats, half: Floats, scale: _Scale, failed: Flags) -> IntervalFit:
    """The prediction interval, brought back end by end; the prediction is the median."""
    middle, low, high = (scale.back(z)[0] for z in (centre[0], centre[0] - half, centre[0] + half))
    return _sound(middle, low, high, failed)


def _mean_response(
    design: Design, basis: Floats, c: Floats, e: Floats, s2: Floats, t: float, scale: _Scale, failed: Flags
) -> IntervalFit:
    """The mean response by smearing (Duan 1983): the mean over rows of what fit plus residual is on the original scale.

    The variance is that of its linear part in independent errors of equal variance on the transformed scale; the interval is
    symmetric on that scale. With r_t the response at fit + e_t and r'_t its slope, the mean m = mean of r_t moves by
    v'Q'(errors) + mean of (r_t - E r_t), v = mean(r') basis - mean of r'_t q_t.
    """
    Q, n = design.Q, design.n
    response, slope = scale.back(basis @ c + e)
    with np.errstate(all="ignore"):
        mean = response.mean(axis=0)
        centred = response - mean
        v = slope.mean(axis=0) * basis.T - Q.T @ slope / n
        crossed = (Q.sum(axis=0) @ v) * np.einsum("tb,tb->b", e, centred) / (n * design.df)
        spread = np.einsum("tb,tb->b", centred, centred) / (n * design.df)
        variance = np.einsum("pb,pb->b", v, v) * s2 + spread + 2.0 * crossed
        z = scale.to(np.where(mean > 0.0, mean, 1.0))
        half = t * np.sqrt(np.maximum(variance, 0.0)) / scale.back(z)[1]
    return _sound(mean, scale.back(z - half)[0], scale.back(z + half)[0], failed)


def _sound(estimate: Floats, low: Floats, high: Floats, failed: Flags) -> IntervalFit:
    """An interval fit with every replicate flagged that has no finite answer."""
    failed = failed | ~(np.isfinite(estimate) & np.isfinite(low) & np.isfinite(high))
    estimate, low, high = (np.where(failed, 0.0, values) for values in (estimate, low, high))
    return IntervalFit(estimate[None], failed if failed.any() else None, low, high)


@register
@dataclass(frozen=True)
class LogResponse(TransformedResponse):
    """Least squares on the logarithm of the response.

    Notes
    -----
    A replicate with a response that is not positive counts as a failure. A mean response is estimated as a mean (smearing), a
    new response is predicted by its median.
    """

    name = "log-response"
    title = "least squares on log y"
    formula = "OLS on log y; means brought back by smearing, prediction intervals end by end"
    source = "common practice; Duan (1983)"

    def transform(self, design: Design, y: Floats) -> tuple[Floats, _Scale, Flags]:
        """See TransformedResponse."""
        y, failed = positive(y)
        return np.log(y), _Scale(np.zeros(y.shape[1])), failed


@register
@dataclass(frozen=True)
class SqrtResponse(TransformedResponse):
    """Least squares on the square root of the response.

    Notes
    -----
    A replicate with a negative response counts as a failure. A mean response is estimated as a mean (smearing), a new response
    is predicted by its median.
    """

    name = "sqrt-response"
    title = "least squares on the square root of y"
    formula = "OLS on sqrt y; means brought back by smearing, prediction intervals end by end"
    source = "Bartlett (1936); Duan (1983)"

    def transform(self, design: Design, y: Floats) -> tuple[Floats, _Scale, Flags]:
        """See TransformedResponse."""
        failed = np.any(y < 0.0, axis=0)
        y = np.where(failed, 1.0, y)
        # In the form (y^lam - 1)/lam, whose additive constant matters only to a model without an intercept.
        return 2.0 * np.sqrt(y), _Shifted(np.full(y.shape[1], 0.5)), failed


class _Shifted(_Scale):
    """z = y^lam / lam: without the constant, so that a model without an intercept means what it says."""

    def to(self, y: Floats) -> Floats:
        """See _Scale."""
        return np.asarray(y**self.lam / self.lam)

    def back(self, z: Floats) -> tuple[Floats, Floats]:
        """See _Scale."""
        return super().back(z - 1.0 / self.lam)


@register
@dataclass(frozen=True)
class BoxCox(TransformedResponse):
    """Least squares on a power of the response, chosen by maximum likelihood in every replicate.

    Notes
    -----
    The exponent is sought from -2 to 2 and then taken as known, as is usual. A replicate with a response that is not positive
    counts as a failure. A mean response is estimated as a mean (smearing), a new response is predicted by its median.
    """

    name = "box-cox"
    title = "least squares on a fitted power of y"
    formula = "OLS on (y^lam - 1)/lam, lam by maximum likelihood in [-2, 2] and then taken as known"
    source = "Box & Cox (1964); Duan (1983)"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        ones = np.ones(design.n)
        if np.linalg.norm(ones - design.Q @ (design.Q.T @ ones)) > 1e-8 * np.sqrt(design.n):
            return "not applicable, because without an intercept the exponent would depend on the unit of the response"
        return super().not_applicable(design, focus)

    def transform(self, design: Design, y: Floats) -> tuple[Floats, _Scale, Flags]:
        """See TransformedResponse."""
        y, failed = positive(y)
        log = np.log(y)
        centred = log - log.mean(axis=0)
        scale = _Scale(likely_power(design, centred))
        return scale.to(y), scale, failed


def positive(y: Floats) -> tuple[Floats, Flags]:
    """The responses with those of hopeless replicates set to 1, and which replicates (B,) have one that is not positive."""
    failed = np.any(y <= 0.0, axis=0)
    return (np.where(failed, 1.0, y) if failed.any() else y), failed


def likely_power(design: Design, log: Floats) -> Floats:
    """The Box-Cox exponent of maximum likelihood, (B,).

    Parameters
    ----------
    design : Design
        The rows.
    log : ndarray of shape (n, B)
        Log responses less their mean: responses over their geometric mean, which makes residual sums comparable.

    Notes
    -----
    The best of a grid of 17 exponents, then golden-section search between its neighbours, to about 2e-6.
    """
    spread = np.ptp(log, axis=0) > 0.0
    log = np.where(spread, log, 0.0)

    def loss(lam: Floats) -> Floats:
        near_zero = np.abs(lam) < 1e-8
        safe = np.where(near_zero, 1.0, lam)
        z = np.where(near_zero, log, np.expm1(safe * log) / safe)
        c = design.Q.T @ z
        return np.asarray(np.einsum("tb,tb->b", z, z) - np.einsum("pb,pb->b", c, c))

    width = log.shape[1]
    values = np.stack([loss(np.full(width, lam)) for lam in _GRID])
    best = np.argmin(values, axis=0)
    low, high = _GRID[np.maximum(best - 1, 0)], _GRID[np.minimum(best + 1, len(_GRID) - 1)]
    left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    f_left, f_right = loss(left), loss(right)
    for _ in range(_GOLDEN_STEPS):
        lower = f_left < f_right
        low, high = np.where(lower, low, left), np.where(lower, right, high)
        new_left, new_right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
        f_new = loss(np.where(lower, new_left, new_right))
        f_left, f_right = np.where(lower, f_new, f_right), np.where(lower, f_left, f_new)
        left, right = new_left, new_right
    return 0.5 * (low + high)
