"""What ever more rows lead to: the large-sample limit of coverage, bias and width, from exact moments of a very large study."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from withstand.departures.world import Disturbance
from withstand.errors import InputError
from withstand.exact import moments
from withstand.judgement.sample_size import Requirement
from withstand.lab.size_plan import Condition
from withstand.procedures.base import REGISTRY, LinearProcedure, Procedure, make_procedure
from withstand.study.focus import Focus, FocusKind
from withstand.study.growth import Growth
from withstand.study.study import Study

LARGE = 40_000
"""Rows of the very large study."""

_GROWS = 1.5
"""The bias vanishes against the standard error unless four times the rows raise it, in standard errors, by this factor."""

_SLACK = 0.0015
"""A limit counts as outside by more than this: a drawn table, however large, has a little spread of its own."""

_SCORES = 100_001
"""Points of the normal quantile grid on which the law of a new response is read."""


@dataclass(frozen=True)
class Limit:
    """Where a procedure goes as rows are added for ever.

    Parameters
    ----------
    coverage : float
        Of the interval.
    bias_in_sd : float
        In SDs of the estimate; infinite where it does not vanish.
    half_width : float
        In the unit of the focal quantity.
    words : str
        What stands in the way, for people.
    """

    coverage: float
    bias_in_sd: float
    half_width: float
    words: str

    def fails(self, requirement: Requirement) -> bool:
        """Whether a requirement is not met in the limit."""
        value = {
            "coverage": self.coverage,
            "size": 1.0 - self.coverage,
            "bias_in_sd": self.bias_in_sd,
            "half_width": self.half_width,
        }.get(requirement.measure)
        if value is None or requirement.margin(value) >= 0.0:
            return False
        return not math.isfinite(value) or -requirement.margin(value) > _SLACK * max(1.0, abs(value))


def large_sample_limits(
    growth: Growth, procedure: Procedure, focus: Focus, conditions: Sequence[Condition]
) -> list[Limit | None]:
    """The limit in each world; None where it is not known.

    Parameters
    ----------
    growth : Growth
        How rows are added.
    procedure : Procedure
        Only procedures linear in the response have a known limit.
    focus : Focus
        A single quantity.
    conditions : sequence of Condition
        The worlds.

    Notes
    -----
    For an estimate with bias b and SD v whose claimed SD is c, the coverage tends to Phi(z c/v - b/v) - Phi(-z c/v - b/v);
    b/v tends to 0, or to infinity where the bias stays as rows are added. The law of the errors plays no part but for a new
    response, whose own error does not average out.
    """
    if not isinstance(procedure, LinearProcedure) or not focus.scalar:
        return [None] * len(conditions)
    try:
        large, larger = (growth.at(growth.smallest + -(-n // growth.step) * growth.step) for n in (LARGE // 4, LARGE))
    except InputError:
        # Some rules cannot grow some studies that far; the search itself then says so.
        return [None] * len(conditions)
    if any(procedure.not_applicable(grown.design, focus) for grown in (large, larger)):
        return [None] * len(conditions)
    found = []
    for condition in conditions:
        realised = [condition.world.on(grown.design) for grown in (large, larger)]
        found.append(_limit(larger, procedure, focus, realised[0], realised[1]))
    return found


def passing_procedures(
    growth: Growth, focus: Focus, conditions: Sequence[Condition], requirements: Sequence[Requirement]
) -> tuple[str, ...]:
    """Registered procedures whose limits are all within what is asked."""
    passing = []
    for name in REGISTRY:
        procedure = make_procedure(name)
        limits = large_sample_limits(growth, procedure, focus, conditions)
        known = [limit for limit in limits if limit is not None]
        asked = [(limits[int(r.key.partition("|")[0])], r) for r in requirements]
        if len(known) == len(limits) and not any(limit is not None and limit.fails(r) for limit, r in asked):
            passing.append(name)
    return tuple(passing)


def _limit(study: Study, procedure: LinearProcedure, focus: Focus, large: Disturbance, larger: Disturbance) -> Limit | None:
    z = float(stats.norm.isf((1.0 - study.level) / 2.0))
    line = replace(focus, kind=FocusKind.MEAN) if focus.kind is FocusKind.NEW else focus
    before = moments(procedure, large.design, line, large)
    after = moments(procedure, larger.design, line, larger)
    if before is None or after is None:
        return None
    first, bias = (found.bias / math.sqrt(found.variance) for found in (before, after))
    stays = abs(bias) > 1e-6 and abs(bias) > _GROWS * abs(first)
    if focus.kind is FocusKind.NEW:
        return _new_response(study, focus, larger, z, after.bias if stays else 0.0)
    ratio = math.sqrt(after.claimed_variance / after.variance)
    if stays:
        return Limit(0.0, math.copysign(math.inf, bias), 0.0, "the bias does not fade while the standard error does")
    coverage = float(stats.norm.cdf(z * ratio) - stats.norm.cdf(-z * ratio))
    words = f"the standard error claimed stays {ratio:.2f} times the true one however many rows there are"
    return Limit(coverage, 0.0, 0.0, words)


def _new_response(study: Study, focus: Focus, world: Disturbance, z: float, bias: float) -> Limit | None:
    if focus.point is None:
        return None
    scores = np.asarray(stats.norm.ppf((np.arange(_SCORES) + 0.5) / _SCORES))
    errors = (scores if world.law is None else world.law(scores)) * world.spread_at(focus.point)
    curved = 0.0
    if world.mean is not None:
        left = world.mean - world.design.Q @ (world.design.Q.T @ world.mean)
        curved = float(np.mean(left**2))
    half = z * math.sqrt(1.0 + curved)
    coverage = float(np.mean(np.abs(errors - bias) <= half))
    words = "the interval for a new response takes the spread and the shape of its error for granted"
    return Limit(coverage, 0.0, half * study.error_sd, words)
