"""Which measures decide a verdict, and what is accepted of each.

Coverage and size are judged on the harmful side: coverage below its band or size above it is a fault, the other side is a cost
and is reported as wasteful. A test that is the interval turned round (reject where the interval misses) is judged once, by its
coverage.
"""

from __future__ import annotations

import math
from collections.abc import Collection

from withstand.engine.tally import Feature, Tally
from withstand.judgement.findings import Aspect
from withstand.judgement.tolerance import Tolerance

_SAME = 1e-9
"""Sums of 0/1 features count as equal within this, relative to the units; block means carry rounding."""


def aspects_of(tolerance: Tolerance, alpha: float) -> dict[str, Aspect]:
    """Every measure the tolerance speaks about, by name.

    Parameters
    ----------
    tolerance : Tolerance
        What the user can live with.
    alpha : float
        Nominal size; coverage is 1 - alpha.
    """
    inf = math.inf
    size_low, size_high = tolerance.size_range(alpha)
    coverage_low, coverage_high = tolerance.coverage_range(alpha)
    source = tolerance.source
    aspects = [
        Aspect("coverage", coverage_low, inf, -inf, coverage_high, 1.0 - alpha, source),
        Aspect("size", -inf, size_high, size_low, inf, alpha, source),
    ]
    if tolerance.tails:
        aspects += [
            Aspect(name, -inf, size_high / 2.0, -inf, inf, alpha / 2.0, source) for name in ("miss_below", "miss_above")
        ]
    if tolerance.bias_absolute is not None:
        aspects.append(Aspect("bias", -tolerance.bias_absolute, tolerance.bias_absolute, -inf, inf, 0.0, "the user"))
    elif tolerance.bias is not None:
        published = "Schafer & Graham (2002)" if tolerance.bias == Tolerance.bias else "the user"
        aspects.append(Aspect("bias_in_sd", -tolerance.bias, tolerance.bias, -inf, inf, 0.0, published))
    return {aspect.measure: aspect for aspect in aspects}


def judged(aspects: Collection[str], tally: Tally) -> tuple[str, ...]:
    """Which of the measures a tally has something to say about.

    Parameters
    ----------
    aspects : collection of str
        Measures the tolerance speaks about.
    tally : Tally
        What was counted; a procedure without any answer is judged by its coverage, which is 0.
    """
    sums = tally.products[Feature.ONE]
    answers, covered, rejected = sums[Feature.OK], sums[Feature.COVERED], sums[Feature.REJECTED]
    interval = answers == 0.0 or covered + sums[Feature.BELOW] + sums[Feature.ABOVE] + sums[Feature.WIDTH] > 0.0
    dual = interval and abs(covered + rejected - answers) <= _SAME * tally.units
    located = sums[Feature.SQUARE] > 0.0
    two_sided = sums[Feature.BELOW] + sums[Feature.ABOVE] > 0.0
    speaks = {
        "coverage": interval,
        "size": rejected > 0.0 and not dual,
        "miss_below": two_sided,
        "miss_above": two_sided,
        "bias": located,
        "bias_in_sd": located,
    }
    found = tuple(name for name in aspects if speaks[name])
    # A test that never rejected claims no interval either: its size, 0, is all there is.
    return found or ("size",)
