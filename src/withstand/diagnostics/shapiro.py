"""The Shapiro-Wilk test with Royston's coefficients, on columns of residuals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial.polynomial import polyval
from scipy.special import ndtri

from withstand import tails
from withstand.diagnostics.base import Diagnostic, Statistic, Tail, register
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats

LARGEST = 5000
"""Royston fitted his approximations up to this n."""

# Polynomials of Royston (1995), Applied Statistics 44, 547-551 (algorithm AS R94), lowest power first.
_LAST = (0.0, 0.221157, -0.147981, -2.07119, 4.434685, -2.706056)
_NEXT_TO_LAST = (0.0, 0.042981, -0.293762, -1.752461, 5.682633, -3.582633)
_SMALL_MEAN = (0.544, -0.39978, 0.025054, -6.714e-4)
_SMALL_LOG_SD = (1.3822, -0.77857, 0.062767, -0.0020322)
_SMALL_GAMMA = (-2.273, 0.459)
_MEAN = (-1.5861, -0.31082, -0.083751, 0.0038915)
_LOG_SD = (-0.4803, -0.082676, 0.0030302)


def royston_weights(n: int) -> Floats:
    """Weights (n,) of the ordered values, antisymmetric, of unit length; n at least 3."""
    if n == 3:
        return np.array([-np.sqrt(0.5), 0.0, np.sqrt(0.5)])
    m = ndtri((np.arange(1, n + 1) - 0.375) / (n + 0.25))
    square = float(m @ m)
    x = 1.0 / np.sqrt(n)
    a = np.empty(n)
    a[-1] = polyval(x, _LAST) + m[-1] / np.sqrt(square)
    outer = 1
    if n > 5:
        a[-2] = polyval(x, _NEXT_TO_LAST) + m[-2] / np.sqrt(square)
        outer = 2
    # The inner weights are proportional to the expected scores; the length of the whole is 1.
    rest = square - 2.0 * float(m[-outer:] @ m[-outer:])
    left = 1.0 - 2.0 * float(a[-outer:] @ a[-outer:])
    a[outer:-outer] = m[outer:-outer] / np.sqrt(rest / left)
    a[:outer] = -a[-outer:][::-1]
    return a


@register
@dataclass(frozen=True)
class ShapiroWilk(Diagnostic):
    """How straight the normal plot of the residuals is; small where it bends."""

    name = "shapiro-wilk"
    title = "Shapiro-Wilk W of the residuals"
    null = "the errors are normal"
    formula = "W = (sum a_i e_(i))^2 / sum (e - mean)^2"
    source = "Shapiro & Wilk (1965); Royston (1995)"
    tail = Tail.LOWER

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if not 3 <= design.n <= LARGEST:
            return f"not applicable, because W is tabulated for 3 to {LARGEST} rows, not {design.n}; use jarque-bera"
        return super().not_applicable(design)

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        weights = royston_weights(design.n)

        def statistic(sample: Sample) -> Floats:
            ordered = np.sort(sample.residuals, axis=0)
            ordered -= ordered.mean(axis=0)
            return np.asarray((weights @ ordered) ** 2 / np.einsum("tb,tb->b", ordered, ordered))

        return statistic

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Royston's normal approximation (exact for n = 3), as if the residuals were independent."""
        n = design.n
        if n == 3:
            # The exact law of W for three values: Shapiro & Wilk (1965).
            return np.clip(6.0 / np.pi * (np.arcsin(np.sqrt(values)) - np.arcsin(np.sqrt(0.75))), 0.0, 1.0)
        y = np.log1p(-values)
        if n <= 11:
            gamma = polyval(n, _SMALL_GAMMA)
            beyond = y >= gamma
            score = -np.log(np.where(beyond, 1.0, gamma - y))
            p = tails.normal_sf(score, polyval(n, _SMALL_MEAN), np.exp(polyval(n, _SMALL_LOG_SD)))
            return np.where(beyond, 0.0, p)
        return np.asarray(tails.normal_sf(y, polyval(np.log(n), _MEAN), np.exp(polyval(np.log(n), _LOG_SD))))
