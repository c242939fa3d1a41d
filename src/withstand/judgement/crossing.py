"""Where a curve that grows with n, known at some n with error, crosses zero: a monotone fit and its band."""

from __future__ import annotations

import numpy as np
from scipy import optimize

from withstand.study.design import Floats


def crossings(n: Floats, margins: Floats, errors: Floats, z: float) -> tuple[float | None, float | None, float | None]:
    """Where a curve that grows with n, known at some n with error, crosses zero.

    Parameters
    ----------
    n : ndarray of shape (m,)
        In increasing order; may repeat.
    margins, errors : ndarray of shape (m,)
        Values and standard errors; 0 for exact values.
    z : float
        Half width of the band in standard errors.

    Returns
    -------
    tuple of float or None
        Crossing of the monotone curve (weighted least squares, by pooling neighbours), of its upper band (the earliest n
        that is possible) and of its lower band (the latest). Between two n the curve is a straight line in 1/n.

    Notes
    -----
    Values before the last that clearly lies below zero are left out: the curve may start high by chance of a tiny design.
    """
    clearly_below = np.flatnonzero(margins + z * errors < 0.0)
    start = int(clearly_below[-1]) if clearly_below.size else 0
    n, margins, errors = n[start:], margins[start:], errors[start:]
    exact = errors == 0.0
    floor = float(errors[~exact].min()) * 1e-3 if (~exact).any() else 1.0
    weights = np.maximum(errors, floor) ** -2.0
    distinct = np.unique(n)
    pooled = np.array([np.average(margins[n == one], weights=weights[n == one]) for one in distinct])
    total = np.array([weights[n == one].sum() for one in distinct])
    spread = np.where([exact[n == one].any() for one in distinct], 0.0, total**-0.5)
    curve = optimize.isotonic_regression(pooled, weights=total).x
    upper = np.minimum.accumulate((pooled + z * spread)[::-1])[::-1]
    lower = np.maximum.accumulate(pooled - z * spread)
    # Pooling may push the curve past its own band where exact and simulated values meet.
    return _ordered(_crossing(distinct, curve), _crossing(distinct, upper), _crossing(distinct, lower))


def _ordered(middle: float | None, low: float | None, high: float | None) -> tuple[float | None, float | None, float | None]:
    """The three crossings with low <= middle <= high, None standing for beyond."""
    if middle is None:
        return None, low, None
    low = middle if low is None else min(low, middle)
    return middle, low, None if high is None else max(high, middle)


def _crossing(n: Floats, curve: Floats) -> float | None:
    met = np.flatnonzero(curve >= 0.0)
    if not met.size:
        return None
    i = int(met[0])
    if i == 0:
        return float(n[0])
    before, after = curve[i - 1], curve[i]
    share = -before / (after - before)
    return float(1.0 / (1.0 / n[i - 1] + share * (1.0 / n[i] - 1.0 / n[i - 1])))
