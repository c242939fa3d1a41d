"""Critical values from Student's t and from F."""

from __future__ import annotations

from functools import lru_cache

from withstand import tails


@lru_cache(maxsize=256)
def student_critical(k: int, df: float, level: float) -> float:
    """Critical value of |t| for one quantity, of the statistic divided by k for k > 1 quantities.

    Parameters
    ----------
    k : int
        Rows of the focal quantity.
    df : float
        Degrees of freedom of the error variance.
    level : float
        Confidence level.

    Returns
    -------
    float
        Quantile of t(df), or of F(k, df).
    """
    return float(tails.t_isf((1.0 - level) / 2.0, df)) if k == 1 else float(tails.f_isf(1.0 - level, k, df))
