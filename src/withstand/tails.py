"""Tail probabilities and quantiles of the laws that criticals and p-values rest on, elementwise for arrays.

They are those of scipy.special, brought to one shape. The distributions of scipy.stats give the same numbers, but loading them
takes longer than many a whole answer does. `sf` is the probability of more, `isf` what is exceeded with a probability, `cdf`
and `ppf` the same from below.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from scipy import special


def normal_pdf(x: Any) -> Any:
    """Standard normal density."""
    return np.exp(-0.5 * np.square(x)) / math.sqrt(2.0 * math.pi)


def normal_cdf(x: Any) -> Any:
    """Standard normal, below x."""
    return special.ndtr(x)


def normal_sf(x: Any, mean: Any = 0.0, sd: Any = 1.0) -> Any:
    """Normal, above x."""
    return special.ndtr((mean - x) / sd)


def normal_ppf(p: Any) -> Any:
    """Standard normal quantile, p below it."""
    return special.ndtri(p)


def normal_isf(p: Any) -> Any:
    """Standard normal quantile, p above it."""
    return -special.ndtri(p)


def t_sf(x: Any, df: Any) -> Any:
    """Student's t, above x."""
    return special.stdtr(df, np.negative(x))


def t_isf(p: Any, df: Any) -> Any:
    """Quantile of Student's t, p above it."""
    return -special.stdtrit(df, p)


def f_sf(x: Any, numerator: Any, denominator: Any) -> Any:
    """F, above x."""
    return special.fdtrc(numerator, denominator, np.maximum(x, 0.0))


def f_isf(p: Any, numerator: Any, denominator: Any) -> Any:
    """Quantile of F, p above it."""
    return special.fdtri(numerator, denominator, np.subtract(1.0, p))


def chi2_sf(x: Any, df: Any) -> Any:
    """Chi-square, above x."""
    return special.chdtrc(df, np.maximum(x, 0.0))


def chi2_ppf(p: Any, df: Any) -> Any:
    """Quantile of chi-square, p below it."""
    return 2.0 * special.gammaincinv(0.5 * df, p)


def chi2_isf(p: Any, df: Any) -> Any:
    """Quantile of chi-square, p above it."""
    return special.chdtri(df, p)


def beta_ppf(p: Any, a: Any, b: Any) -> Any:
    """Quantile of the beta law, p below it."""
    return special.betaincinv(a, b, p)


def beta_isf(p: Any, a: Any, b: Any) -> Any:
    """Quantile of the beta law, p above it."""
    return special.betainccinv(a, b, p)
