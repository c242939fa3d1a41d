"""Statistics that ask whether a single row stands out, or carries the fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.diagnostics.base import Diagnostic, Statistic, register
from withstand.procedures.sample import Sample
from withstand.study.design import FULL_LEVERAGE, Design, Floats


@register
@dataclass(frozen=True)
class LargestStudentised(Diagnostic):
    """The largest externally studentised residual in absolute value."""

    name = "max-studentised"
    title = "largest externally studentised residual"
    null = "no row is shifted"
    formula = "max |e_i| / sqrt(s_(i)^2 (1 - h_i)), s_(i)^2 without row i; Bonferroni t(n - p - 1)"
    source = "Cook & Weisberg (1982)"

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if design.df < 2:
            return "not applicable, because leaving a row out leaves no degree of freedom; collect more rows"
        return super().not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Two-sided t, times the number of rows (Bonferroni)."""
        return np.minimum(1.0, 2.0 * design.n * tails.t_sf(values, design.df - 1))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        share = _residual_share(design)[:, None]

        def statistic(sample: Sample) -> Floats:
            # t_i^2 = (df - 1) q / (1 - q) with q = e_i^2 / ((1 - h_i) e'e) is increasing in q: one search finds the row.
            q = (sample.squared_residuals / share).max(axis=0) / sample.residual_sum
            return np.asarray(np.sqrt((design.df - 1) * q / np.maximum(1.0 - q, np.finfo(float).tiny)))

        return statistic


@register
@dataclass(frozen=True)
class LargestCook(Diagnostic):
    """Cook's distance of the row that moves the coefficients most."""

    name = "max-cook"
    title = "largest Cook's distance"
    null = "no row carries the fit"
    formula = "max e_i^2 h_i / (p s^2 (1 - h_i)^2)"
    source = "Cook (1977)"

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        weight = np.minimum(design.leverage, 1.0) / (design.p * _residual_share(design) ** 2)

        def statistic(sample: Sample) -> Floats:
            return np.asarray((weight[:, None] * sample.squared_residuals).max(axis=0) / (sample.residual_sum / design.df))

        return statistic


def _residual_share(design: Design) -> Floats:
    """1 - h, (n,); infinite where h is 1, since such a row leaves no residual."""
    return np.where(design.leverage >= FULL_LEVERAGE, np.inf, 1.0 - design.leverage)
