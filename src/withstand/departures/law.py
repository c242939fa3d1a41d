"""Marginal laws of the errors, as monotone transforms of a standard normal score.

Writing every law as F^-1(Phi(z)) of the same z couples all worlds as tightly as monotone laws allow, so that paired shifts
have the least variance, and it is cheaper than drawing afresh.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from withstand.study.design import Floats
from withstand.tails import normal_cdf, normal_pdf, normal_sf

_LIMIT = 9.0
"""The table covers scores within +- this; beyond it (probability 2e-19 a draw) the last cell is extended linearly."""

_CHUNK = 1 << 13
"""Scores transformed at a time."""

_CELLS = 1 << 13
"""Cells of the table. The quantile function is linear in each; its first two moments are those of the table, exactly."""


@dataclass(frozen=True, eq=False)
class Law:
    """A law with mean 0 and variance 1, tabulated over normal scores.

    Parameters
    ----------
    name : str
        As shown to people.
    base, slope : ndarray of shape (cells,)
        The transform in cell i is base[i] + slope[i] * z.
    skewness, kurtosis : float
        Of the exact law; kurtosis is 3 for the normal, inf where it does not exist.
    """

    name: str
    base: Floats
    slope: Floats
    skewness: float
    kurtosis: float

    def __call__(self, z: Floats, out: Floats | None = None) -> Floats:
        """Transform standard normal scores of any shape; `out` may be `z`."""
        result = np.empty(z.shape) if out is None else out
        if not (z.flags.c_contiguous and result.flags.c_contiguous):
            result[...] = self(np.ascontiguousarray(z))
            return result
        source, target = z.reshape(-1), result.reshape(-1)
        # Chunks keep the temporaries and the table in the second-level cache: 4 ns an element against 11 ns in one pass.
        chunk = min(source.size, _CHUNK)
        position, piece, cell = np.empty(chunk), np.empty(chunk), np.empty(chunk, np.intp)
        for start in range(0, source.size, _CHUNK):
            scores, errors = source[start : start + _CHUNK], target[start : start + _CHUNK]
            x, b, i = position[: scores.size], piece[: scores.size], cell[: scores.size]
            np.multiply(scores, _CELLS / (2.0 * _LIMIT), out=x)
            x += _CELLS / 2.0
            np.copyto(i, x, casting="unsafe")
            # mode="clip" extends the end cells and lets take() write to its output without a buffer.
            self.slope.take(i, out=x, mode="clip")
            self.base.take(i, out=b, mode="clip")
            np.multiply(scores, x, out=errors)
            errors += b
        return result


def tabulate(
    name: str, quantile: Callable[[Floats], Floats], *, skewness: float, kurtosis: float, symmetric: bool = False
) -> Law:
    """Tabulate a law.

    Parameters
    ----------
    name : str
        As shown to people.
    quantile : callable
        Maps normal scores z (any shape) to F^-1(Phi(z)), accurate in both tails; any location and scale.
    skewness, kurtosis : float
        Of the exact law.
    symmetric : bool
        Whether the quantiles are odd in z, so that one half of them is enough.

    Returns
    -------
    Law
        Standardised so that the tabulated law itself has mean 0 and variance 1.

    Notes
    -----
    For a transform linear in each cell, mean and variance under the normal density are sums over cells of the truncated
    normal moments: with density phi and probability P of the cell (l, u), E[z] = phi(l) - phi(u) and
    E[z^2] = P + l phi(l) - u phi(u).
    """
    edges = np.linspace(-_LIMIT, _LIMIT, _CELLS + 1)
    if symmetric:
        upper = quantile(edges[_CELLS // 2 + 1 :])
        values = np.concatenate([-upper[::-1], [0.0], upper])
    else:
        values = quantile(edges)
    slope = np.diff(values) / np.diff(edges)
    base = values[:-1] - slope * edges[:-1]
    mean, variance = _moments(edges, base, slope)
    scale = 1.0 / np.sqrt(variance)
    return Law(name, (base - mean) * scale, slope * scale, skewness, kurtosis)


def _moments(edges: Floats, base: Floats, slope: Floats) -> tuple[float, float]:
    lower, upper = edges[:-1], edges[1:]
    # Survival functions in the upper half keep the small cell probabilities exact.
    mass = np.where(lower >= 0, normal_sf(lower) - normal_sf(upper), normal_cdf(upper) - normal_cdf(lower))
    first = normal_pdf(lower) - normal_pdf(upper)
    second = mass + lower * normal_pdf(lower) - upper * normal_pdf(upper)
    mean = float(np.sum(base * mass + slope * first))
    square = float(np.sum(base**2 * mass + 2 * base * slope * first + slope**2 * second))
    return mean, square - mean**2
