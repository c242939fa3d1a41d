"""Quantile functions of the error laws at normal scores, accurate in both tails, and the tabulated laws.

Each half of the scores works with its own tail probability, so that nothing is subtracted from 1.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy.special import betaincinv, erf, gammainccinv, gammaincinv, log_ndtr, ndtr

from withstand.departures.law import Law, tabulate
from withstand.study.design import Floats

_SLIGHT = 0.01
"""Below this skewness the inverse incomplete gamma function of so large a shape is not monotone to the last digits."""

_NEAR_NORMAL = 1e-6
"""Below this tail index the inverse incomplete beta function has lost too many digits."""

_STEPS = 60
"""Most steps within a bracket; halving alone would use up the 53 bits of a double."""

_CLOSE = 1e-9
"""Relative length of a last Newton step: the error left is of the order of its square."""

_HALF_LOG_2PI = 0.5 * np.log(2.0 * np.pi)


@lru_cache(maxsize=256)
def student(tail_index: float) -> Law:
    """Student's t with 1/tail_index degrees of freedom, standardised."""
    df = 1.0 / tail_index
    kurtosis = 3.0 + 6.0 / (df - 4.0) if df > 4.0 else np.inf
    name = f"t with {df:g} df"
    return tabulate(name, lambda z: student_quantile(z, tail_index), skewness=0.0, kurtosis=kurtosis, symmetric=True)


@lru_cache(maxsize=256)
def contaminated(k: float, share: float) -> Law:
    """(1 - share) N(0, 1) + share N(0, k^2), standardised."""
    variance = 1.0 - share + share * k**2
    kurtosis = 3.0 * (1.0 - share + share * k**4) / variance**2
    name = f"contaminated normal, {100.0 * share:g} % with SD {k:g}"
    return tabulate(name, lambda z: contaminated_quantile(z, k, share), skewness=0.0, kurtosis=kurtosis, symmetric=True)


@lru_cache(maxsize=256)
def gamma(skewness: float) -> Law:
    """Gamma law of the given skewness, standardised."""
    name = f"gamma with skewness {skewness:g}"
    return tabulate(name, lambda z: gamma_quantile(z, skewness), skewness=skewness, kurtosis=3.0 + 1.5 * skewness**2)


@lru_cache(maxsize=256)
def lognormal(skewness: float) -> Law:
    """Lognormal law of the given skewness, standardised."""
    sigma = lognormal_sigma(skewness)
    w = np.exp(sigma**2)
    kurtosis = float(w**4 + 2.0 * w**3 + 3.0 * w**2 - 3.0)
    name = f"lognormal with skewness {skewness:g}"
    return tabulate(name, lambda z: np.asarray(np.expm1(sigma * z)), skewness=skewness, kurtosis=kurtosis)


def student_quantile(z: Floats, tail_index: float) -> Floats:
    """Quantiles at Phi(z) of t with 1/tail_index degrees of freedom.

    Notes
    -----
    With w = x^2/(df + x^2), P(|T| < |x|) = I_w(1/2, df/2) and P(|T| > |x|) = I_(1-w)(df/2, 1/2): the first serves the middle,
    the second the tails. Next to the normal, x = z + (z^3 + z)/(4 df) (Abramowitz & Stegun 1964, 26.7.5) leaves out terms of
    order z^5/df^2.
    """
    if tail_index < _NEAR_NORMAL:
        return np.asarray(z + tail_index / 4.0 * (z**3 + z))
    df = 1.0 / tail_index
    score = np.abs(z)
    inner = betaincinv(0.5, df / 2.0, erf(np.minimum(score, 1.0) / np.sqrt(2.0)))
    outer = betaincinv(df / 2.0, 0.5, 2.0 * ndtr(-np.maximum(score, 1.0)))
    odds = np.where(score < 1.0, inner / (1.0 - inner), (1.0 - outer) / outer)
    return np.asarray(np.copysign(np.sqrt(df * odds), z))


def contaminated_quantile(z: Floats, k: float, share: float) -> Floats:
    """Quantiles of (1 - share) N(0, 1) + share N(0, k^2) at Phi(z).

    Notes
    -----
    Newton's method on the log tail probability, within a bracket: the mixture's tail lies between those of its parts, so its
    quantile lies between z and k z. A step that leaves the bracket is replaced by halving it.
    """
    score = np.abs(z)
    target = log_ndtr(-score)
    low, high = score.copy(), k * score
    narrow, wide = np.log1p(-share), np.log(share)
    x = score.copy()
    for _ in range(_STEPS):
        tail = np.logaddexp(narrow + log_ndtr(-x), wide + log_ndtr(-x / k))
        low, high = np.where(tail > target, x, low), np.where(tail > target, high, x)
        log_density = np.logaddexp(narrow - 0.5 * x**2, wide - np.log(k) - 0.5 * (x / k) ** 2) - _HALF_LOG_2PI
        moved = x + (tail - target) * np.exp(tail - log_density)
        moved = np.where((moved >= low) & (moved <= high), moved, 0.5 * (low + high))
        step, x = np.abs(moved - x), moved
        if np.all(step <= _CLOSE * x):
            break
    return np.copysign(x, z)


def gamma_quantile(z: Floats, skewness: float) -> Floats:
    """Quantiles at Phi(z) of the gamma law of shape 4/skewness^2, minus its mean; the scale is left open.

    Notes
    -----
    A slight skewness g is served by the Cornish-Fisher expansion in g to second order (Abramowitz & Stegun 1964, 26.2.49), of
    error below g^3 z^4 / 400.
    """
    if skewness < _SLIGHT:
        return np.asarray(z + skewness / 6.0 * (z**2 - 1.0) + skewness**2 / 144.0 * (z**3 - 7.0 * z))
    shape = 4.0 / skewness**2
    lower = gammaincinv(shape, ndtr(np.minimum(z, 0.0)))
    upper = gammainccinv(shape, ndtr(-np.maximum(z, 0.0)))
    return np.asarray(np.where(z < 0.0, lower, upper) - shape)


def lognormal_sigma(skewness: float) -> float:
    """SD of the logarithm of the lognormal law of the given skewness.

    Notes
    -----
    skewness = (w + 2) sqrt(w - 1) with w = exp(sigma^2) is a cubic in w + 1 whose root is 2 cosh(2 asinh(skewness/2)/3), so
    w - 1 = 4 sinh^2(asinh(skewness/2)/3) without cancellation.
    """
    return float(np.sqrt(np.log1p(4.0 * np.sinh(np.arcsinh(skewness / 2.0) / 3.0) ** 2)))
