"""Are the errors normal? Moments of the residuals about their mean."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.diagnostics.base import Diagnostic, Statistic, Tail, register
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats


def standard_moments(sample: Sample) -> tuple[Floats, Floats]:
    """Skewness m3/m2^(3/2) and kurtosis m4/m2^2 of the residuals about their mean, each (B,); shared within a sample."""

    def compute() -> tuple[Floats, Floats]:
        e = sample.residuals - sample.residuals.mean(axis=0)
        squares = e * e
        m2 = squares.mean(axis=0)
        m3 = np.einsum("tb,tb->b", squares, e) / len(e)
        m4 = np.einsum("tb,tb->b", squares, squares) / len(e)
        return m3 / m2**1.5, m4 / m2**2

    return sample.once("standard moments of residuals", compute)


@register
@dataclass(frozen=True)
class Skewness(Diagnostic):
    """Third standard moment of the residuals."""

    name = "skewness"
    title = "residual skewness"
    null = "the errors are normal, against skewed ones"
    formula = "m3 / m2^(3/2)"
    source = "moments; common practice"
    tail = Tail.BOTH

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        return lambda sample: standard_moments(sample)[0]


@register
@dataclass(frozen=True)
class Kurtosis(Diagnostic):
    """Fourth standard moment of the residuals; 3 for a large normal sample."""

    name = "kurtosis"
    title = "residual kurtosis"
    null = "the errors are normal, against heavier tails"
    formula = "m4 / m2^2"
    source = "moments; common practice"

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        return lambda sample: standard_moments(sample)[1]


@register
@dataclass(frozen=True)
class JarqueBera(Diagnostic):
    """Skewness and kurtosis together."""

    name = "jarque-bera"
    title = "Jarque-Bera test"
    null = "the errors are normal"
    formula = "n/6 (skewness^2 + (kurtosis - 3)^2/4), chi-square(2)"
    source = "Jarque & Bera (1980)"

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of chi-square(2)."""
        return np.asarray(tails.chi2_sf(values, 2))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""

        def statistic(sample: Sample) -> Floats:
            skewness, kurtosis = standard_moments(sample)
            return np.asarray(design.n / 6.0 * (skewness**2 + (kurtosis - 3.0) ** 2 / 4.0))

        return statistic
