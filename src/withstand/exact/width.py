"""The expected square root of a quadratic form in normal variables."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from withstand.errors import NumericalError
from withstand.exact.problem import Problem
from withstand.exact.tilt import Structure, tilt

_WANTED = 1e-8
_START = -18.0
_BLOCK = 12.0
_BLOCKS = 5
_STEP = 0.8
_LEVELS = 4


def expected_root(problem: Problem, structure: Structure, mean: float) -> float:
    """E[sqrt(V)], V = e' D e, in the unit of w.

    Parameters
    ----------
    problem : Problem
        The question.
    structure : Structure
        What carries it.
    mean : float
        E[V].

    Raises
    ------
    NumericalError
        If a relative accuracy of 1e-8 is not reached.

    Notes
    -----
    E[V^(1/2)] = 1/(2 sqrt(pi)) * integral over t > 0 of (1 - E exp(-t V)) t^(-3/2) dt. A scaled chi-square with the residual
    degrees of freedom and the same mean, whose root has a known expectation, is taken off first, so that the integrand in
    log t decays faster at both ends; the equally spaced sum then converges geometrically.
    """
    df = problem.n - problem.p
    known = math.sqrt(mean) * math.exp(gammaln((df + 1) / 2) - gammaln(df / 2) + 0.5 * math.log(2.0 / df))

    def total(x: NDArray[Any]) -> tuple[float, float]:
        t = np.exp(x) / mean
        reference = np.exp(-0.5 * df * np.log1p(2.0 * t * mean / df))
        own = np.exp(tilt(structure, 2.0 * t, problem.k, 0.0).log_laplace())
        terms = (reference - own) / np.sqrt(t)
        return float(terms.sum()), float((reference[-1] + own[-1]) / math.sqrt(t[-1]))

    summed, blocks, end = 0.0, 0, math.inf
    while end > 1e-13 * known and blocks < _BLOCKS:
        part, end = total(_START + blocks * _BLOCK + _STEP * np.arange(round(_BLOCK / _STEP)))
        summed += part
        blocks += 1
    value, step = known + _STEP * summed / (2.0 * math.sqrt(math.pi)), _STEP
    for _ in range(_LEVELS):
        part, _ = total(_START + step / 2.0 + step * np.arange(round(blocks * _BLOCK / step)))
        summed, step = summed + part, step / 2.0
        finer = known + step * summed / (2.0 * math.sqrt(math.pi))
        change, value = abs(finer - value) / known, finer
        if change**1.5 <= _WANTED / 10.0:
            return value
    raise NumericalError(f"an expected interval width was reached to {change:.1e} only, with {_WANTED:.0e} wanted")
