"""Tipping severity: the smallest severity at which the verdict is 'gives'.

Exact cells: the ladder is scanned for the first change of sign of the margin, then the root is found. Simulated cells: judged
severities on common random numbers bracket it, and bisection narrows the bracket.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

from scipy.optimize import brentq

from withstand.judgement.verdict import Judgement, Verdict

_ROOT = 1e-6
"""Accuracy of an exact tipping severity, as a share of its bracket."""

_SUBDIVISIONS = 2
"""Parts each rung of the ladder is scanned in, so that a dip between two rungs is not stepped over."""


@dataclass(frozen=True)
class Tipping:
    """Where the verdict turns.

    Parameters
    ----------
    point : float or None
        The tipping severity: a root (exact) or an interpolation within the bracket; None if it never gives, or if the turn
        lies in a stretch that is unsettled throughout.
    last_holds : float or None
        The largest severity below the turn that holds; None if none does.
    first_gives : float or None
        The smallest severity that gives; None if none does.
    tried : float
        The severity farthest from neutral that was tried: 'none up to' it, where `first_gives` is None.
    neutral : float
        The severity at which the assumption holds exactly.
    exact : bool
        Whether the point is a root of an exact answer.
    """

    point: float | None
    last_holds: float | None
    first_gives: float | None
    tried: float
    neutral: float
    exact: bool

    @property
    def never(self) -> bool:
        """Whether nothing gave up to the severity farthest out."""
        return self.first_gives is None

    @property
    def always(self) -> bool:
        """Whether the procedure gives even where nothing is wrong."""
        return self.first_gives == self.neutral


def halfway(a: float, b: float, neutral: float) -> float:
    """The middle of two severities: geometric for ratios (neutral 1), arithmetic otherwise."""
    return math.sqrt(a * b) if neutral == 1.0 else 0.5 * (a + b)


def outward(severities: Sequence[float], neutral: float) -> list[float]:
    """Distinct severities on one side of neutral, in increasing distance from it, neutral first.

    Raises
    ------
    ValueError
        If they lie on both sides; each direction has a tipping severity of its own.
    """
    ordered = sorted({neutral, *severities}, key=lambda s: abs(s - neutral))
    if min(ordered) < neutral < max(ordered):
        raise ValueError("severities on both sides of neutral; ask for one direction at a time")
    return ordered


def tipping_exact(margin: Callable[[float], float], ladder: Sequence[float], neutral: float) -> Tipping:
    """Find the tipping severity of an exact cell.

    Parameters
    ----------
    margin : callable
        Maps a severity to the margin of the cell: 0 or more within tolerance, negative outside.
    ladder : sequence of float
        Severities of one direction; the search goes from neutral to the farthest of them.
    neutral : float
        Where the assumption holds exactly.

    Returns
    -------
    Tipping
        The first turn met going outwards.
    """
    known: dict[float, float] = {}

    def at(severity: float) -> float:
        if severity not in known:
            known[severity] = margin(severity)
        return known[severity]

    rungs = outward(ladder, neutral)
    if at(neutral) < 0.0:
        return Tipping(neutral, None, neutral, rungs[-1], neutral, exact=True)
    inner = neutral
    for outer in (point for a, b in pairwise(rungs) for point in _divide(a, b, neutral)):
        if at(outer) < 0.0:
            root = float(brentq(at, inner, outer, xtol=_ROOT * abs(outer - inner), rtol=1e-12))
            holds = max((s for s, m in known.items() if m >= 0.0 and _between(s, inner, outer)), key=lambda s: abs(s - neutral))
            gives = min((s for s, m in known.items() if m < 0.0), key=lambda s: abs(s - neutral))
            return Tipping(root, holds, gives, rungs[-1], neutral, exact=True)
        inner = outer
    return Tipping(None, inner, None, rungs[-1], neutral, exact=True)


def next_severity(judged: Mapping[float, Judgement], neutral: float, steps: int, ladder: Sequence[float]) -> float | None:
    """The severity to judge next to narrow the bracket of a simulated cell; None when it is narrow enough.

    Parameters
    ----------
    judged : mapping of float to Judgement
        Severities judged so far, of one direction, at least the ladder; neutral may be left out.
    neutral : float
        Where the assumption holds exactly.
    steps : int
        Bisections to spend beyond the ladder.
    ladder : sequence of float
        The severities that are not counted as bisections.

    Notes
    -----
    The ends are the nearest severities that are settled, `holds` below and `gives` above. An unsettled severity between
    them is as near to the turn as the cap of replicates can tell, and ends the search.
    """
    spent = sum(1 for severity in judged if severity not in ladder and severity != neutral)
    found = bracket(judged, neutral)
    if found.first_gives is None or found.last_holds is None or found.always or spent >= steps:
        return None
    low, high = found.last_holds, found.first_gives
    if any(_between(s, low, high) and s not in (low, high) for s in judged):
        return None
    return halfway(low, high, neutral)


def bracket(judged: Mapping[float, Judgement], neutral: float) -> Tipping:
    """The tipping severity as the judged severities show it.

    Parameters
    ----------
    judged : mapping of float to Judgement
        Of one direction; where neutral is missing it is taken to hold.
    neutral : float
        Where the assumption holds exactly.
    """
    ordered = outward(list(judged), neutral)
    giving = [s for s in ordered if s in judged and judged[s].verdict is Verdict.GIVES]
    exact = all(j.exact for j in judged.values())
    first = giving[0] if giving else None
    below = ordered if first is None else ordered[: ordered.index(first)]
    holding = [s for s in below if s not in judged or judged[s].verdict is Verdict.HOLDS]
    last = holding[-1] if holding else None
    point = None
    if first is not None:
        point = first if last is None else _interpolate(judged, last, first, neutral)
    return Tipping(point, last, first, ordered[-1], neutral, exact)


def _interpolate(judged: Mapping[float, Judgement], low: float, high: float, neutral: float) -> float:
    """Where the margin crosses 0 between neighbouring judged severities of the bracket."""
    path = [s for s in outward(list(judged), neutral) if _between(s, low, high) and (s in judged or s == low)]
    margins = [judged[s].margin if s in judged else 1.0 for s in path]
    for a, b, margin_a, margin_b in zip(path[:-1], path[1:], margins[:-1], margins[1:], strict=True):
        if margin_b < 0.0:
            share = margin_a / (margin_a - margin_b) if margin_a > 0.0 else 0.0
            if neutral == 1.0:
                return float(math.exp(math.log(a) + share * (math.log(b) - math.log(a))))
            return a + share * (b - a)
    return high


def _divide(a: float, b: float, neutral: float) -> list[float]:
    """Points between two rungs, the last of them b."""
    parts = range(1, _SUBDIVISIONS)
    if neutral == 1.0:
        return [a * (b / a) ** (i / _SUBDIVISIONS) for i in parts] + [b]
    return [a + (b - a) * i / _SUBDIVISIONS for i in parts] + [b]


def _between(s: float, a: float, b: float) -> bool:
    return min(a, b) <= s <= max(a, b)
