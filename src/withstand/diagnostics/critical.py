"""From simulated values of a statistic to critical values and detection rates.

Under the ideal model every statistic here is free of the error SD and of the coefficients, so that the quantiles of its
simulated values are those of an exact test, up to their Monte Carlo error.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from withstand.diagnostics.base import Tail
from withstand.study.design import Floats


@dataclass(frozen=True)
class Critical:
    """Where a statistic starts to count against the null hypothesis.

    Parameters
    ----------
    low, high : float
        The test rejects below `low` and above `high`; infinite where a side does not count.
    alpha : float
        Size of the test.
    replicates : int
        Simulated values behind the bounds.
    """

    low: float
    high: float
    alpha: float
    replicates: int

    @classmethod
    def of(cls, values: Floats, tail: Tail, alpha: float = 0.05) -> Critical:
        """The bounds from values (B,) simulated under the ideal model.

        Notes
        -----
        The order statistic of rank ceil((1 - a)(B + 1)) makes the test exact over simulation and data together (the add-one
        rule of simulated p-values; Dwass 1957).
        """
        a = alpha / 2.0 if tail is Tail.BOTH else alpha
        ordered = np.sort(values)
        rank = math.ceil((1.0 - a) * (len(ordered) + 1))
        above = float(ordered[rank - 1]) if rank <= len(ordered) else math.inf
        below = float(ordered[len(ordered) - rank]) if rank <= len(ordered) else -math.inf
        low = below if tail is not Tail.UPPER else -math.inf
        high = above if tail is not Tail.LOWER else math.inf
        return cls(low, high, alpha, len(ordered))

    def rejects(self, values: Floats) -> np.ndarray:
        """Whether each value counts against the null hypothesis, (B,) of bool."""
        return np.asarray((values < self.low) | (values > self.high))

    def power(self, values: Floats) -> tuple[float, float]:
        """Share of values (B,) that are rejected, and its Monte Carlo standard error (that of the bounds left out)."""
        share = float(np.mean(self.rejects(values)))
        return share, math.sqrt(share * (1.0 - share) / len(values))
