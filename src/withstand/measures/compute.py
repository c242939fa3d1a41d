"""Measures as smooth functions of feature means, with Monte Carlo standard errors by the delta method.

Names and errors follow Morris, White & Crowther (2019), table 6, except that the error of a standard deviation uses the fourth
moment of the estimates instead of assuming them normal. The shift of a measure is its difference from the baseline on the same
noise; its error therefore knows how the two move together.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np

from withstand import tails
from withstand.engine.tally import FEATURES, Feature, Tally
from withstand.study.design import Floats

CONFIDENCE = 0.95
"""Level of the Monte Carlo interval [low, high] of a measure."""

Value = Callable[[Floats], tuple[float, Floats]]
"""Maps feature means (FEATURES,) to a value and its gradient (FEATURES,)."""


@dataclass(frozen=True)
class Estimate:
    """A simulated or exact value with its error.

    Parameters
    ----------
    value, mc_se : float
        In the unit of the measure; mc_se is 0 for exact values.
    low, high : float
        Monte Carlo interval of level CONFIDENCE: Clopper-Pearson for proportions of independent replicates.
    shift, shift_se : float
        Value minus the baseline's, on the same noise; nan where there is no baseline.
    """

    value: float
    mc_se: float
    low: float
    high: float
    shift: float
    shift_se: float


def _mean_of(feature: Feature, scale: float = 1.0) -> Value:
    """Mean over all replicates: failures count as 0."""

    def value(m: Floats) -> tuple[float, Floats]:
        gradient = np.zeros(FEATURES)
        gradient[feature] = scale
        return scale * float(m[feature]), gradient

    return value


def _mean_among_answers(feature: Feature, scale: float = 1.0) -> Value:
    """Mean over the replicates with an answer."""

    def value(m: Floats) -> tuple[float, Floats]:
        gradient = np.zeros(FEATURES)
        gradient[feature] = scale / m[Feature.OK]
        gradient[Feature.OK] = -scale * m[feature] / m[Feature.OK] ** 2
        return scale * float(m[feature] / m[Feature.OK]), gradient

    return value


def _root(inner: Value) -> Value:
    def value(m: Floats) -> tuple[float, Floats]:
        inside, gradient = inner(m)
        root = math.sqrt(max(inside, 0.0))
        return root, gradient / (2.0 * root) if root > 0.0 else np.zeros(FEATURES)

    return value


def _ratio(over: Value, under: Value) -> Value:
    def value(m: Floats) -> tuple[float, Floats]:
        a, da = over(m)
        b, db = under(m)
        if b == 0.0:
            return math.nan, np.zeros(FEATURES)
        return a / b, da / b - a * db / b**2

    return value


def _variance_of_error(m: Floats) -> tuple[float, Floats]:
    mean, d_mean = _mean_among_answers(Feature.ERROR)(m)
    square, d_square = _mean_among_answers(Feature.SQUARE)(m)
    return square - mean**2, d_square - 2.0 * mean * d_mean


def _failure_rate(m: Floats) -> tuple[float, Floats]:
    gradient = np.zeros(FEATURES)
    gradient[Feature.OK] = -1.0
    return 1.0 - float(m[Feature.OK]), gradient


PROPORTIONS = {
    "coverage": Feature.COVERED,
    "miss_below": Feature.BELOW,
    "miss_above": Feature.ABOVE,
    "size": Feature.REJECTED,
    "power": Feature.POWERED,
}
"""Measures that are shares of all replicates; a failure covers nothing and rejects nothing."""

GIVEN_ANSWER = {"coverage_given_answer": Feature.COVERED, "size_given_answer": Feature.REJECTED}
"""Measures that are shares of the replicates with an answer: what is seen by someone who always got one, as where a rule is
looked at only where its check passed."""

COUNTED = {*PROPORTIONS, "failure_rate"}
"""Measures that count replicates, whether the procedure answered in them or not."""


def _definitions(unit: float) -> dict[str, Value]:
    sd = _root(_variance_of_error)
    claimed = _root(_mean_among_answers(Feature.VARIANCE))
    scaled: dict[str, Value] = {
        "bias": _mean_among_answers(Feature.ERROR, unit),
        "bias_in_sd": _ratio(_mean_among_answers(Feature.ERROR), sd),
        "empirical_sd": _times(sd, unit),
        "claimed_sd": _times(claimed, unit),
        "se_ratio": _ratio(claimed, sd),
        "width": _mean_among_answers(Feature.WIDTH, unit),
        "rmse": _times(_root(_mean_among_answers(Feature.SQUARE)), unit),
        "failure_rate": _failure_rate,
    }
    shares = {name: _mean_of(feature) for name, feature in PROPORTIONS.items()}
    return scaled | shares | {name: _mean_among_answers(feature) for name, feature in GIVEN_ANSWER.items()}


def _times(inner: Value, factor: float) -> Value:
    def value(m: Floats) -> tuple[float, Floats]:
        inside, gradient = inner(m)
        return factor * inside, factor * gradient

    return value


MEASURES: dict[str, str] = {
    "bias": "mean of estimate minus truth, in the unit of the focal quantity",
    "bias_in_sd": "bias divided by the empirical SD of the estimate",
    "empirical_sd": "SD of the estimates over replicates",
    "claimed_sd": "root of the mean claimed variance",
    "se_ratio": "claimed SD over empirical SD; below 1 the standard errors are too small",
    "coverage": "share of intervals (or regions) that hold the true value",
    "miss_below": "share of intervals that lie wholly below the true value",
    "miss_above": "share of intervals that lie wholly above the true value",
    "width": "mean width of the interval, in the unit of the focal quantity",
    "size": "share of tests of a true null hypothesis that reject it",
    "power": "share of tests that reject when the stated effect is there",
    "rmse": "root mean square of estimate minus truth",
    "failure_rate": "share of replicates in which the procedure gave no answer",
    "coverage_given_answer": "share of intervals that hold the true value, among the replicates with an answer",
    "size_given_answer": "share of tests of a true null hypothesis that reject it, among the replicates with an answer",
}
"""Every measure with its meaning, in the order of the tables."""


def measure(tally: Tally, names: Sequence[str], unit: float = 1.0) -> dict[str, Estimate]:
    """Compute measures from a tally.

    Parameters
    ----------
    tally : Tally
        Sums over at least two replicates (two blocks where each has its own design).
    names : sequence of str
        Which of MEASURES.
    unit : float
        Error SD in the unit of the response, which lengths are multiplied by.

    Returns
    -------
    dict of str to Estimate
        In the order of `names`; a measure of answers is left out where there is none.

    Notes
    -----
    With feature means m over U independent units and gradient d, the variance of a value is d'Cd/U, C the covariance of the
    features over units.
    """
    means = tally.products[Feature.ONE] / tally.units
    covariance = (tally.products / tally.units - np.outer(means, means)) / (tally.units - 1)
    definitions = _definitions(unit)
    result = {}
    for name in names:
        definition = definitions[name]
        if means[Feature.OK] == 0.0 and name not in COUNTED:
            continue
        value, gradient = definition(means[:FEATURES])
        se = _spread(gradient, covariance[:FEATURES, :FEATURES])
        low, high = _interval(name, value, se, tally)
        shift = shift_se = math.nan
        if means[FEATURES + Feature.OK] > 0.0 or name in COUNTED:
            base, base_gradient = definition(means[FEATURES:])
            shift = value - base
            shift_se = _spread(np.concatenate([gradient, -base_gradient]), covariance)
        result[name] = Estimate(value, se, low, high, shift, shift_se)
    return result


def clopper_pearson(hits: float, count: int, level: float) -> tuple[float, float]:
    """The exact interval for a proportion (Clopper & Pearson 1934).

    Parameters
    ----------
    hits : float
        Successes among `count` independent trials.
    count : int
        Trials.
    level : float
        Confidence level.
    """
    tail = (1.0 - level) / 2.0
    low = 0.0 if hits <= 0 else float(tails.beta_ppf(tail, hits, count - hits + 1))
    high = 1.0 if hits >= count else float(tails.beta_isf(tail, hits + 1, count - hits))
    return low, high


def _spread(gradient: Floats, covariance: Floats) -> float:
    return math.sqrt(max(float(gradient @ covariance @ gradient), 0.0))


@cache
def _quantile(df: int) -> float:
    """Student's t; kept, since all measures of a look ask for the same one."""
    return float(tails.t_isf((1.0 - CONFIDENCE) / 2.0, df))


def _interval(name: str, value: float, se: float, tally: Tally) -> tuple[float, float]:
    independent = tally.units == tally.replicates
    if name in COUNTED and independent:
        return clopper_pearson(round(value * tally.replicates), tally.replicates, CONFIDENCE)
    bounds = (0.0, 1.0) if name in COUNTED or name in GIVEN_ANSWER else (-math.inf, math.inf)
    return monte_carlo_interval(value, se, tally.units, bounds)


def monte_carlo_interval(value: float, se: float, units: int, bounds: tuple[float, float]) -> tuple[float, float]:
    """Student's interval of level CONFIDENCE from independent units, cut at the bounds of the measure."""
    reach = _quantile(units - 1) * se
    return max(value - reach, bounds[0]), min(value + reach, bounds[1])
