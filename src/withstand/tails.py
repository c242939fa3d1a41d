"""Tail probabilities and quantiles of the normal, t, F and beta laws, elementwise for arrays.

They are those of scipy.special, brought to one shape. The distributions of scipy.stats give the same numbers, but loading them
takes longer than many a whole answer does.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from scipy import special


class norm:
    """The normal law."""

    @staticmethod
    def pdf(x: Any) -> Any:
        """Standard density."""
        return np.exp(-0.5 * np.square(x)) / math.sqrt(2.0 * math.pi)

    @staticmethod
    def cdf(x: Any) -> Any:
        """Standard probability of less."""
        return special.ndtr(x)

    @staticmethod
    def sf(x: Any, mean: Any = 0.0, sd: Any = 1.0) -> Any:
        """Probability of more."""
        return special.ndtr((mean - x) / sd)

    @staticmethod
    def ppf(p: Any) -> Any:
        """What is exceeded with probability 1 - p."""
        return special.ndtri(p)

    @staticmethod
    def isf(p: Any) -> Any:
        """What is exceeded with probability p."""
        return -special.ndtri(p)


class t:
    """Student's t law."""

    @staticmethod
    def sf(x: Any, df: Any) -> Any:
        """Probability of more."""
        return special.stdtr(df, np.negative(x))

    @staticmethod
    def isf(p: Any, df: Any) -> Any:
        """What is exceeded with probability p."""
        return -special.stdtrit(df, p)


class f:
    """The F law."""

    @staticmethod
    def sf(x: Any, numerator: Any, denominator: Any) -> Any:
        """Probability of more."""
        return special.fdtrc(numerator, denominator, np.maximum(x, 0.0))

    @staticmethod
    def isf(p: Any, numerator: Any, denominator: Any) -> Any:
        """What is exceeded with probability p."""
        return special.fdtri(numerator, denominator, np.subtract(1.0, p))


class beta:
    """The beta law."""

    @staticmethod
    def ppf(p: Any, a: Any, b: Any) -> Any:
        """What is exceeded with probability 1 - p."""
        return special.betaincinv(a, b, p)

    @staticmethod
    def isf(p: Any, a: Any, b: Any) -> Any:
        """What is exceeded with probability p."""
        return special.betainccinv(a, b, p)
