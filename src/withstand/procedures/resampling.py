"""Bootstraps that draw rows, or residuals, with replacement; percentile-t and percentile intervals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np

from withstand.errors import ScenarioError
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.bootstrap import NO_LAW
from withstand.procedures.fit import Fit, Flags, IntervalFit
from withstand.procedures.multipliers import (
    DRAWS,
    allowed_exceedances,
    check_draws,
    exceeded,
    indicator_sums,
    ratio,
    slabs,
    wald,
    without_residuals,
)
from withstand.procedures.sample import Sample
from withstand.procedures.sandwich import Hc1
from withstand.study.design import Design, Floats, Ints
from withstand.study.focus import Focus, FocusKind

_INTERVALS = ("percentile-t", "percentile")

_ROUNDS = 200
"""Rounds of drawing samples again before a slab of replicates counts as failed."""

_SINGULAR = 1e-10
"""Smallest accepted ratio of the eigenvalues of Q'WQ: below it a sample of rows does not determine the coefficients."""


@dataclass(frozen=True)
class PercentileT(Procedure):
    """Least squares with the law of its t statistic taken from resampled responses.

    Parameters
    ----------
    draws : int
        Bootstrap samples.
    """

    draws: int = DRAWS

    family = "bootstrap"

    def __post_init__(self) -> None:
        check_draws(self.draws, self.name)

    def tails(self, level: float) -> int:
        """How many drawn t statistics lie beyond each end of the interval.

        Notes
        -----
        The end is the order statistic of rank (B* + 1) alpha / 2, counted from its side, where that is a whole number.
        """
        return allowed_exceedances(self.draws, (1.0 - level) / 2.0, self.name)

    def ends(self, estimate: Floats, claimed: Floats, drawn: Floats, tails: int) -> tuple[Floats, Floats]:
        """Ends (r,) of the percentile-t interval from drawn t statistics (r, B*)."""
        last = drawn.shape[1] - 1 - tails
        ordered = np.partition(drawn, (tails, last), axis=1)
        error = np.sqrt(claimed)
        return estimate - ordered[:, last] * error, estimate - ordered[:, tails] * error


def _interval(estimate: Floats, claimed: Floats | None, low: Floats, high: Floats) -> IntervalFit:
    failed: Flags = ~(np.isfinite(low) & np.isfinite(high))
    low, high = np.where(failed, estimate[0], low), np.where(failed, estimate[0], high)
    return IntervalFit(estimate, failed if failed.any() else None, low, high, claimed)


def _signed_root(distance: Floats, variance: Floats) -> Floats:
    """Signed t statistics; infinite where the variance is 0."""
    with np.errstate(divide="ignore", invalid="ignore"):
        t = distance / np.sqrt(np.maximum(variance, 0.0))
    return np.asarray(np.where(np.isnan(t), 0.0, t))


@register
@dataclass(frozen=True)
class PairsBootstrap(PercentileT):
    """Rows are drawn with replacement, predictors and response together; t statistics have HC1 errors.

    Parameters
    ----------
    interval : {"percentile-t", "percentile"}
        Ends from drawn t statistics, or plainly the order statistics of the drawn estimates, whose variance over the samples is
        then the claimed one.

    Notes
    -----
    A sample of rows that leaves a coefficient or its variance undetermined (too few different rows, a level without rows) is
    drawn again.
    """

    interval: str = "percentile-t"

    name = "pairs-bootstrap"
    title = "bootstrap of the rows"
    formula = "rows drawn with replacement; percentile-t with HC1 errors"
    source = "Freedman (1981); Efron & Tibshirani (1993)"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.interval not in _INTERVALS:
            raise ScenarioError(
                f"interval is '{self.interval}'",
                where=f"procedures.use: {self.name}.interval",
                remedy=f"Give one of {', '.join(_INTERVALS)}.",
            )

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.JOINT and self.interval == "percentile":
            return "not applicable, because several coefficients at once have no percentile interval"
        return NO_LAW if focus.kind is FocusKind.NEW else None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        tails, allowed = self.tails(level), allowed_exceedances(self.draws, 1.0 - level, self.name)
        bases = [design.basis_rows(focus.L) for focus in foci]
        if self.interval == "percentile":
            return partial(self._percentile, design, bases, tails)
        forms = [Hc1().form(design, design.estimator(focus.L)) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            estimates = [basis @ sample.projections for basis in bases]
            covariances = [form.evaluate(sample) for form in forms]
            ends = [np.full((2, sample.width), np.nan) for _ in foci]
            for part, rows in slabs(sample, self.name, partial(self._draw, design)):
                if rows is None:
                    continue
                c = rows.solved @ sample.residuals[:, part]
                for i, basis in enumerate(bases):
                    if len(basis) == 1:
                        distance, pairs = rows.statistics(basis, c, sample, part)
                        drawn = _signed_root(distance[0], pairs[0, 0])
                        ends[i][:, part] = self.ends(estimates[i][0, part], covariances[i][0, 0, part], drawn, tails)
            fits: list[Fit] = []
            for basis, estimate, covariance, end in zip(bases, estimates, covariances, ends, strict=True):
                if len(basis) == 1:
                    fits.append(_interval(estimate, covariance[0, 0], end[0], end[1]))
                else:
                    region = partial(self._rejects, design, basis, sample, estimate, covariance, allowed)
                    fits.append(IntervalFit(estimate, without_residuals(sample), test=region))
            return fits

        return fit

    def _percentile(self, design: Design, bases: list[Floats], tails: int, sample: Sample) -> list[Fit]:
        """Intervals between order statistics of the drawn estimates."""
        last = self.draws - 1 - tails
        found = [np.full((3, sample.width), np.nan) for _ in bases]
        for part, rows in slabs(sample, self.name, partial(self._draw, design)):
            if rows is None:
                continue
            c = rows.solved @ sample.residuals[:, part]
            for basis, (low, high, claimed) in zip(bases, found, strict=True):
                moved = np.einsum("p,pjr->rj", basis[0], c)
                claimed[part] = moved.var(axis=1, ddof=1)
                ordered = np.partition(moved, (tails, last), axis=1)
                low[part], high[part] = ordered[:, tails], ordered[:, last]
        estimates = [basis @ sample.projections for basis in bases]
        return [
            _interval(estimate, claimed, estimate[0] + low, estimate[0] + high)
            for estimate, (low, high, claimed) in zip(estimates, found, strict=True)
        ]

    def _rejects(
        self, design: Design, basis: Floats, sample: Sample, estimate: Floats, covariance: Floats, allowed: int, value: Floats
    ) -> Flags:
        observed = wald(estimate - value.reshape(len(estimate), -1), covariance)
        rejected = np.zeros(sample.width, dtype=bool)
        for part, rows in slabs(sample, self.name, partial(self._draw, design)):
            if rows is not None:
                c = rows.solved @ sample.residuals[:, part]
                rejected[part] = exceeded(wald(*rows.statistics(basis, c, sample, part)), observed[part], allowed)
        return rejected

    def _draw(self, design: Design, generator: np.random.Generator) -> _Rows | None:
        """Samples of rows; None where the design all but never yields one that determines the fit."""
        found: list[Floats] = []
        count = 0
        for _ in range(_ROUNDS):
            codes = generator.integers(0, design.n, (self.draws, design.n))
            flat = (codes + design.n * np.arange(self.draws)[:, None]).ravel()
            counts = np.bincount(flat, minlength=codes.size).reshape(codes.shape).astype(float)
            kept = counts[np.count_nonzero(counts, axis=1) > design.p]
            eigenvalues = np.linalg.eigvalsh(_normal(design, kept))
            kept = kept[eigenvalues[:, 0] > _SINGULAR * eigenvalues[:, -1]]
            found.append(kept)
            count += len(kept)
            if count >= self.draws:
                return _Rows.of(design, np.concatenate(found)[: self.draws])
        return None


def _normal(design: Design, counts: Floats) -> Floats:
    """Q'WQ, (B*, p, p), for rows counted W (B*, n)."""
    Q, p = design.Q, design.p
    return np.asarray(counts @ (Q[:, :, None] * Q[:, None, :]).reshape(design.n, -1)).reshape(-1, p, p)


@dataclass(frozen=True, eq=False)
class _Rows:
    """Samples of rows, with the least-squares fit on each.

    Parameters
    ----------
    counts : ndarray of shape (B*, n)
        How often each row was drawn, w.
    inverse : ndarray of shape (B*, p, p)
        (Q'WQ)^-1.
    solved : ndarray of shape (p, B*, n)
        (Q'WQ)^-1 Q'W: coefficients in the coordinates of Q, of any response.
    """

    design: Design
    counts: Floats
    inverse: Floats
    solved: Floats

    @classmethod
    def of(cls, design: Design, counts: Floats) -> _Rows:
        """Fit all samples."""
        inverse = np.linalg.inv(_normal(design, counts))
        solved = (inverse @ design.Q.T) * counts[:, None, :]
        return cls(design, counts, np.asarray(inverse), np.ascontiguousarray(solved.transpose(1, 0, 2)))

    def statistics(self, basis: Floats, c: Floats, sample: Sample, part: slice) -> tuple[Floats, Floats]:
        """Drawn estimates minus the estimate (k, r, B*) and their HC1 covariances (k, k, r, B*).

        With g = basis (Q'WQ)^-1 q_t for each row t, V_ij = n/(n - p) sum_t w_t g_i,t g_j,t (e_t - q_t'c)^2.
        """
        design, e = self.design, sample.residuals[:, part]
        Q, n, p = design.Q, design.n, design.p
        g = np.einsum("kp,jpq,nq->kjn", basis, self.inverse, Q, optimize=True)
        distance = np.einsum("kp,pjr->krj", basis, c)
        covariance = np.empty((len(basis), len(basis), e.shape[1], len(self.counts)))
        for i, j in zip(*np.triu_indices(len(basis)), strict=True):
            D = self.counts * g[i] * g[j]
            inner = (D @ (Q[:, :, None] * Q[:, None, :]).reshape(n, -1)).reshape(-1, p, p)
            crossed = ((Q.T[:, None, :] * e.T).reshape(-1, n) @ D.T).reshape(p, e.shape[1], -1)
            curved = np.einsum("jpq,qjr->prj", inner, c)
            first = (e * e).T @ D.T
            form = first + np.einsum("pjr,prj->rj", c, curved - 2.0 * crossed)
            # Left-over rounding must not pass for a variance where the sample is fitted without residuals.
            form[np.abs(form) <= 1e-12 * first] = 0.0
            covariance[i, j] = covariance[j, i] = form * n / design.df
        return distance, covariance


@register
@dataclass(frozen=True)
class ResidualBootstrap(PercentileT):
    """Residuals e / sqrt(1 - h), centred, are drawn with replacement; t statistics have classical errors.

    Notes
    -----
    The interval for a new response takes one more residual for its error (Stine 1985).
    """

    name = "residual-bootstrap"
    title = "bootstrap of the residuals"
    formula = "y* = fit + e* drawn from e/sqrt(1 - h), centred; percentile-t with classical errors"
    source = "Freedman (1981); Davison & Hinkley (1997)"

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        tails, allowed = self.tails(level), allowed_exceedances(self.draws, 1.0 - level, self.name)
        bases = [design.basis_rows(focus.L) for focus in foci]
        pool = np.setdiff1d(np.arange(design.n), design.saturated_rows)
        stretch = 1.0 / np.sqrt(1.0 - design.leverage[pool])[:, None]

        def draw(generator: np.random.Generator) -> tuple[Ints, Ints]:
            codes = generator.integers(0, len(pool), (self.draws, design.n))
            return codes, generator.integers(0, len(pool), self.draws)

        def fit(sample: Sample) -> list[Fit]:
            residuals = sample.residuals[pool] * stretch
            residuals -= residuals.mean(axis=0)
            s2 = sample.residual_sum / design.df
            estimates = [basis @ sample.projections for basis in bases]
            ends = [np.full((2, sample.width), np.nan) for _ in foci]
            forms: list[list[Floats]] = [[] for _ in foci]
            for part, (codes, new) in slabs(sample, self.name, draw):
                c, variance = _refitted(design, codes, len(pool), residuals[:, part])
                for i, (basis, focus) in enumerate(zip(bases, foci, strict=True)):
                    size = float((basis @ basis.T)[0, 0])
                    moved = np.einsum("kp,prj->krj", basis, c)
                    if len(basis) > 1:
                        shape = np.linalg.inv(basis @ basis.T)
                        forms[i].append(ratio(np.einsum("irj,ik,krj->rj", moved, shape, moved, optimize=True), variance))
                        continue
                    if focus.kind is FocusKind.NEW:
                        # y_new - estimate in the drawn world: one more drawn error, less the error of the estimate.
                        moved = moved - residuals[new, part].T
                        size += 1.0
                    drawn = _signed_root(moved[0], size * variance)
                    ends[i][:, part] = self.ends(estimates[i][0, part], size * s2[part], drawn, tails)
            fits: list[Fit] = []
            for basis, focus, estimate, end, form in zip(bases, foci, estimates, ends, forms, strict=True):
                size = float((basis @ basis.T)[0, 0]) + (focus.kind is FocusKind.NEW)
                if len(basis) == 1:
                    fits.append(_interval(estimate, size * s2, end[0], end[1]))
                else:
                    region = partial(_classical_region, basis @ basis.T, np.concatenate(form), estimate, s2, allowed)
                    fits.append(IntervalFit(estimate, without_residuals(sample), test=region))
            return fits

        return fit


def _classical_region(gram: Floats, drawn: Floats, estimate: Floats, s2: Floats, allowed: int, value: Floats) -> Flags:
    distance = estimate - value.reshape(len(estimate), -1)
    observed = ratio(np.einsum("ib,ib->b", distance, np.linalg.solve(gram, distance)), s2)
    return exceeded(drawn, observed, allowed)


def _refitted(design: Design, codes: Ints, count: int, residuals: Floats) -> tuple[Floats, Floats]:
    """Coefficients in the coordinates of Q (p, r, B*) and residual mean squares (r, B*) of errors drawn by `codes` (B*, n).

    residuals is (count, r): what is drawn from.
    """
    draws, p, r = len(codes), design.p, residuals.shape[1]
    loads = indicator_sums(codes, np.column_stack([design.Q, np.ones(design.n)]), count)
    c = (residuals.T @ loads[:p].reshape(p * draws, -1).T).reshape(r, p, draws).transpose(1, 0, 2)
    total = (residuals * residuals).T @ loads[p].T
    left = total - np.einsum("prj,prj->rj", c, c)
    left[left <= 1e-12 * total] = 0.0
    return c, left / design.df
