"""What more rows do: whether a distortion fades as the study grows, or no sample size cures it.

The study is grown by doubling under its rule of growth, and the exact moments are followed: the ratio r of claimed to true SD
and the bias in SDs. The law of the errors plays no part in the limit but for a new response, whose own error does not average
out.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from enum import StrEnum

import numpy as np

from withstand import tails
from withstand.departures.base import OutlierDeparture
from withstand.departures.outliers import Outliers
from withstand.departures.world import Disturbance, World
from withstand.errors import InputError
from withstand.exact import moments
from withstand.judgement.findings import Aspect
from withstand.procedures.base import LinearProcedure, Procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind
from withstand.study.growth import Growth
from withstand.study.study import Study

_DOUBLINGS = 8
_ROWS = 5000
"""Doublings and rows to go to, at least two doublings."""

_STILL_RISING = 0.005
"""A ratio that two more doublings move by this is still on its way: a consistent variance estimate that converges slowly."""

_STAYS = 1.5
"""Four times the rows double a bias in SDs that does not fade; one that grows less than this fades."""

_SCORES = 20_001
"""Points of the normal quantile grid on which the law of a new response is read."""


class Cure(StrEnum):
    """What more rows do."""

    FADES = "fades with rows"
    SLOWLY = "helps, but slowly"
    NEVER = "no cure"


@dataclass(frozen=True)
class Stage:
    """The moments at one number of rows.

    Parameters
    ----------
    n : int
        Rows.
    ratio : float
        Claimed over true SD of the estimate.
    bias_in_sd : float
        Bias over the true SD.
    """

    n: int
    ratio: float
    bias_in_sd: float


@dataclass(frozen=True)
class Limit:
    """Where the coverage goes.

    Parameters
    ----------
    cure : Cure
        What more rows do.
    coverage : float
        In the limit; nan where it converges too slowly for the stages looked at.
    ratio : float
        Claimed over true SD in the limit, or at the last stage where that is not reached.
    bias_stays : bool
        Whether the bias does not fade against the standard error.
    """

    cure: Cure
    coverage: float
    ratio: float
    bias_stays: bool


def limit_from(stages: Sequence[Stage], accepted: Aspect, level: float) -> Limit:
    """Read the limit off the moments of growing studies.

    Parameters
    ----------
    stages : sequence of Stage
        At least three, each with twice the rows of the one before.
    accepted : Aspect
        The tolerance on coverage.
    level : float
        Confidence level.

    Notes
    -----
    With the bias gone, coverage tends to 2 Phi(z r) - 1. The ratio approaches its limit with error about k/n, so the last two
    stages extrapolate to 2 r(2n) - r(n).
    """
    middle, last = stages[-2], stages[-1]
    earlier = stages[-3]
    stays = abs(last.bias_in_sd) > 1e-6 and abs(last.bias_in_sd) > _STAYS * abs(earlier.bias_in_sd)
    if stays:
        return Limit(Cure.NEVER, 0.0, last.ratio, bias_stays=True)
    if last.ratio < 1.0 and last.ratio - earlier.ratio > _STILL_RISING:
        reached = _coverage(last.ratio, level) >= accepted.low
        return Limit(Cure.FADES if reached else Cure.SLOWLY, math.nan, last.ratio, bias_stays=False)
    ratio = 2.0 * last.ratio - middle.ratio
    coverage = _coverage(ratio, level)
    return Limit(Cure.FADES if coverage >= accepted.low else Cure.NEVER, coverage, ratio, bias_stays=False)


def limit_of(studies: Sequence[Study], procedure: Procedure, focus: Focus, world: World, accepted: Aspect) -> Limit | None:
    """The large-sample limit of a cell.

    Parameters
    ----------
    studies : sequence of Study
        The study and its doublings; see `doublings`.
    procedure : Procedure
        Only procedures linear in the response have a known limit.
    focus : Focus
        A single quantity.
    world : World
        What is wrong.
    accepted : Aspect
        The tolerance on coverage.

    Returns
    -------
    Limit or None
        None where it is not known.
    """
    if not isinstance(procedure, LinearProcedure) or not focus.scalar:
        return None
    # The limit is read off the last three alone.
    studies = studies[-3:]
    if len(studies) < 3 or any(procedure.not_applicable(study.design, focus) for study in studies):
        return None
    level = studies[0].level
    # Outliers add to the true and to the claimed variance alike in the limit; their bias is worked out apart.
    calm = World(tuple((departure, s) for departure, s in world.stack if not isinstance(departure, OutlierDeparture)))
    line = replace(focus, kind=FocusKind.MEAN) if focus.kind is FocusKind.NEW else focus
    stages = []
    for study in studies:
        realised = calm.on(study.design)
        found = moments(procedure, study.design, line, realised)
        struck = _outlier_bias(world, study.design, procedure, line)
        if found is None or struck is None:
            return None
        sd = math.sqrt(found.variance)
        stages.append(Stage(study.n, math.sqrt(found.claimed_variance) / sd, (found.bias + struck) / sd))
    limit = limit_from(stages, accepted, level)
    if focus.kind is FocusKind.NEW and not limit.bias_stays:
        coverage = _new_response(focus, world.on(studies[-1].design), level)
        return Limit(Cure.FADES if coverage >= accepted.low else Cure.NEVER, coverage, limit.ratio, bias_stays=False)
    return limit


def _coverage(ratio: float, level: float) -> float:
    return 1.0 - 2.0 * float(tails.normal_sf(float(tails.normal_isf((1.0 - level) / 2.0)) * ratio))


def doublings(growth: Growth) -> list[Study]:
    """The study and its doublings, as far as the rule and the bound on rows go."""
    studies = [growth.study]
    base = growth.study.n
    for doubling in range(1, _DOUBLINGS + 1):
        rows = base * 2**doubling
        if doubling > 2 and rows > _ROWS:
            break
        try:
            studies.append(growth.at(growth.smallest + -(-(rows - growth.smallest) // growth.step) * growth.step))
        except InputError:
            # Some rules cannot grow some studies that far; what there is has to do.
            break
    return studies


def _outlier_bias(world: World, design: Design, procedure: LinearProcedure, focus: Focus) -> float | None:
    """Mean shift of the estimate by outliers, in error SDs; None where it is not known.

    A given count of rows is a vanishing share of a growing study. A share of rows struck at random, one-sidedly, moves the mean
    of all errors alike.
    """
    bias = 0.0
    for departure, severity in world.stack:
        if isinstance(departure, OutlierDeparture) and not isinstance(departure, Outliers):
            return None
        if isinstance(departure, Outliers) and departure.share is not None:
            if departure.placement != "random":
                return None
            a = procedure.fitted_design(design).estimator(focus.L)[0]
            level = float(a.sum()) if abs(a.sum()) > 1e-9 * np.abs(a).sum() else 0.0
            bias += departure.share * severity * level if departure.sign == "one-sided" else 0.0
    return bias


def _new_response(focus: Focus, realised: Disturbance, level: float) -> float:
    """Coverage of the interval for a new response once the fit itself is known: P(|b + s u| <= z claimed)."""
    if focus.point is None:
        raise TypeError("a focus on a new response has a point")
    scores = np.asarray(tails.normal_ppf((np.arange(_SCORES) + 0.5) / _SCORES))
    errors = (scores if realised.law is None else realised.law(scores)) * realised.spread_at(focus.point)
    curved = 0.0
    if realised.mean is not None:
        left = realised.mean - realised.design.Q @ (realised.design.Q.T @ realised.mean)
        curved = float(np.mean(left**2))
    half = float(tails.normal_isf((1.0 - level) / 2.0)) * math.sqrt(1.0 + curved)
    return float(np.mean(np.abs(errors) <= half))
