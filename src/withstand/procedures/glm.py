"""Generalised linear models with a log link, fitted to all replicates of a block at once."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.procedures.base import Answer, Fitter, Procedure, register
from withstand.procedures.fit import Fit, Flags, IntervalFit, wald_statistic
from withstand.procedures.sample import Sample
from withstand.procedures.transforms import NO_OTHER_NULL, only_a_test, test_of_no_effect
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

_ITERATIONS = 30
"""Newton steps: many more than a sound fit takes, and too few for one whose means run off to 0 to pass for converged."""

_HALVINGS = 30
_CONVERGED = 1e-18
"""Accepted Newton decrement, relative to the total weight of the rows."""


@dataclass(frozen=True)
class LogLink(Procedure):
    """A log-linear mean with a variance that is a function of it, the dispersion by Pearson's statistic.

    Notes
    -----
    Iteratively reweighted least squares in its Newton form with halved steps; the criterion is convex in both families. A
    replicate that does not converge, or has a response outside the family's range, counts as a failure.
    """

    family = "generalised linear model"
    null = "the predictor has no effect"
    target = "log of the mean of the response; at a point the mean itself"
    equivariant = False
    claims_variance = False

    @abstractmethod
    def outside(self, y: Floats) -> Floats:
        """Responses outside the range of the family, (n, B) of bool."""

    @abstractmethod
    def loss(self, y: Floats, eta: Floats) -> Floats:
        """Half the deviance but for a constant, (r,), at linear predictors eta (n, r)."""

    @abstractmethod
    def score(self, y: Floats, mu: Floats) -> Floats:
        """Minus the derivative of `loss` in eta, (n, r)."""

    @abstractmethod
    def curvature(self, y: Floats, mu: Floats) -> Floats:
        """Second derivative of `loss` in eta, (n, r)."""

    @abstractmethod
    def weight(self, mu: Floats) -> Floats:
        """Expected curvature, (n, r)."""

    @abstractmethod
    def squared_pearson(self, y: Floats, mu: Floats) -> Floats:
        """(y - mu)^2 over the variance function, (n, B)."""

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return "not applicable, because a mean and a variance function give no law for a new response"
        if focus.kind is not FocusKind.MEAN and np.any(focus.null != 0.0):
            return NO_OTHER_NULL
        return None

    def answers(self, focus: Focus) -> frozenset[Answer]:
        """See Procedure; slopes on the original scale are not estimated, the mean response is."""
        return test_of_no_effect(focus)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        bases = [design.basis_rows(focus.L) for focus in foci]
        t = float(tails.t_isf((1.0 - level) / 2.0, design.df))
        bounds = [float(tails.f_isf(1.0 - level, focus.k, design.df)) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            y = sample.response
            failed = np.any(self.outside(y), axis=0)
            y = np.where(failed, 1.0, y)
            c, converged = self.converge(design, y)
            mu = np.exp(np.where(converged, design.Q @ c, 0.0))
            dispersion = np.sum(self.squared_pearson(y, mu), axis=0) / design.df
            normal, sound = _normal(design, self.weight(mu))
            failed = failed | ~converged | ~sound
            inverse = np.linalg.inv(np.where(sound[:, None, None], normal, np.eye(design.p)))
            fits: list[Fit] = []
            for basis, focus, bound in zip(bases, foci, bounds, strict=True):
                estimate = basis @ c
                covariance = np.einsum("kp,bpq,lq->klb", basis, inverse, basis, optimize=True) * dispersion
                if focus.kind is FocusKind.MEAN:
                    fits.append(_mean(estimate[0], t * np.sqrt(covariance[0, 0]), failed))
                else:
                    covariance = np.where(failed, np.eye(focus.k)[:, :, None], covariance)
                    statistic = wald_statistic(np.where(failed, 0.0, estimate), covariance)
                    fits.append(only_a_test(statistic, bound, failed, focus.k))
            return fits

        return fit

    def converge(self, design: Design, y: Floats) -> tuple[Floats, Flags]:
        """Coefficients in the coordinates of Q (p, B) of responses (n, B), and which replicates converged."""
        Q, mean = design.Q, y.mean(axis=0)
        c = Q.T @ np.log(np.where(mean > 0.0, 0.5 * (y + mean), 1.0))
        converged = np.zeros(y.shape[1], dtype=bool)
        active = np.flatnonzero(mean > 0.0)
        for _ in range(_ITERATIONS):
            if not len(active):
                break
            there, now = y[:, active], c[:, active]
            eta = Q @ now
            mu = np.exp(eta)
            normal, sound = _normal(design, self.curvature(there, mu))
            active, there, now, eta, mu, normal = (
                active[sound], there[:, sound], now[:, sound], eta[:, sound], mu[:, sound], normal[sound]
            )  # fmt: skip
            gradient = Q.T @ self.score(there, mu)
            step = np.linalg.solve(normal, gradient.T[:, :, None])[:, :, 0].T
            decrement = np.einsum("pr,pr->r", gradient, step)
            c[:, active] = now + self._length(there, eta, Q @ step) * step
            done = decrement <= _CONVERGED * np.sum(self.weight(mu), axis=0)
            converged[active[done]] = True
            active = active[~done]
        return c, converged

    def _length(self, y: Floats, eta: Floats, move: Floats) -> Floats:
        """Step lengths (r,): 1, halved until the loss is no larger."""
        length = np.ones(y.shape[1])
        before = self.loss(y, eta)
        allowed = before + 1e-12 * np.abs(before)
        worse = np.arange(len(length))
        for _ in range(_HALVINGS):
            with np.errstate(over="ignore", invalid="ignore"):
                after = self.loss(y[:, worse], eta[:, worse] + length[worse] * move[:, worse])
            worse = worse[~(after <= allowed[worse])]
            if not len(worse):
                break
            length[worse] *= 0.5
        return length


def _normal(design: Design, weights: Floats) -> tuple[Floats, Flags]:
    """Q'WQ (r, p, p) for weights (n, r), and whether each is sound enough to solve with."""
    Q, p = design.Q, design.p
    normal = (weights.T @ (Q[:, :, None] * Q[:, None, :]).reshape(design.n, -1)).reshape(-1, p, p)
    finite: Flags = np.asarray(np.isfinite(normal).all(axis=(1, 2)))
    eigenvalues = np.linalg.eigvalsh(np.where(finite[:, None, None], normal, np.eye(p)))
    return normal, finite & (eigenvalues[:, 0] > 1e-14 * eigenvalues[:, -1])


def _mean(eta: Floats, half: Floats, failed: Flags) -> IntervalFit:
    """Mean responses exp(eta), with an interval that is symmetric on the log scale."""
    with np.errstate(over="ignore"):
        estimate, low, high = np.exp(eta), np.exp(eta - half), np.exp(eta + half)
    failed = failed | ~np.isfinite(high)
    estimate, low, high = (np.where(failed, 0.0, values) for values in (estimate, low, high))
    return IntervalFit(estimate[None], failed if failed.any() else None, low, high)


@register
@dataclass(frozen=True)
class GammaLog(LogLink):
    """Log-linear mean, standard deviation proportional to the mean; positive responses.

    Notes
    -----
    See LogLink; McCullagh & Nelder (1989).
    """

    name = "gamma-log"
    title = "gamma model with a log link"
    formula = "log mean = X b, variance = phi mean^2, phi = Pearson statistic / (n - p); Wald t(n - p)"
    source = "Nelder & Wedderburn (1972); McCullagh & Nelder (1989)"

    def outside(self, y: Floats) -> Floats:
        """See LogLink."""
        return np.asarray(y <= 0.0)

    def loss(self, y: Floats, eta: Floats) -> Floats:
        """See LogLink."""
        return np.asarray(np.sum(y * np.exp(-eta) + eta, axis=0))

    def score(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return y / mu - 1.0

    def curvature(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return y / mu

    def weight(self, mu: Floats) -> Floats:
        """See LogLink."""
        return np.ones_like(mu)

    def squared_pearson(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return np.asarray((y / mu - 1.0) ** 2)


@register
@dataclass(frozen=True)
class PoissonLog(LogLink):
    """Log-linear mean, variance proportional to the mean; responses of 0 or more, which need not be counts.

    Notes
    -----
    See LogLink; the dispersion is estimated, as in Wedderburn (1974).
    """

    name = "poisson-log"
    title = "Poisson model with a log link and free dispersion"
    formula = "log mean = X b, variance = phi mean, phi = Pearson statistic / (n - p); Wald t(n - p)"
    source = "Wedderburn (1974); McCullagh & Nelder (1989)"

    def outside(self, y: Floats) -> Floats:
        """See LogLink."""
        return np.asarray(y < 0.0)

    def loss(self, y: Floats, eta: Floats) -> Floats:
        """See LogLink."""
        return np.asarray(np.sum(np.exp(eta) - y * eta, axis=0))

    def score(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return y - mu

    def curvature(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return mu

    def weight(self, mu: Floats) -> Floats:
        """See LogLink."""
        return mu

    def squared_pearson(self, y: Floats, mu: Floats) -> Floats:
        """See LogLink."""
        return np.asarray((y - mu) ** 2 / mu)
