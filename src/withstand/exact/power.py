"""Exact power at stated effects, and the smallest effect that a test detects."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
from scipy.optimize import brentq
from scipy.special import ndtri

from withstand.departures.world import Disturbance
from withstand.errors import InputError
from withstand.exact.closed import answering_for
from withstand.exact.contour import Inverter
from withstand.exact.problem import Problem, pose
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind


def power(
    procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance, level: float, effects: Floats
) -> Floats:
    """Rejection probability of the two-sided test at level 1 - `level` when the null value is off by an effect.

    Parameters
    ----------
    procedure : LinearProcedure
        `can_be_exact` has found no reason against it.
    design : Design
        The rows on which the disturbance was realised.
    focus : Focus
        The focal quantity; not a new response.
    disturbance : Disturbance
        A world realised on the design.
    level : float
        Confidence level.
    effects : ndarray of shape (E, k), or (E,) for a single quantity
        True minus null value, in error SDs per unit of the focal quantity.

    Returns
    -------
    ndarray of shape (E,)
        In [0, 1].

    Raises
    ------
    InputError
        For a new response, which has no test.
    NumericalError
        If the accuracy wanted (1e-8) is not reached.
    """
    problem = _problem(procedure, design, focus, disturbance, level)
    wanted = problem.to_unit(np.asarray(effects, dtype=np.float64).reshape(-1, focus.k))
    return answering_for(problem, wanted).probabilities(wanted).beyond


def adjusted_power(
    procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance, level: float, effects: Floats
) -> Floats:
    """Power of the test with the critical value at which its size is 1 - `level`.

    Parameters
    ----------
    procedure, design, focus, disturbance, level, effects
        As for `power`.

    Returns
    -------
    ndarray of shape (E,)
        In [0, 1].

    Raises
    ------
    InputError
        For a new response, which has no test.
    NumericalError
        If the accuracy wanted (1e-8) is not reached.

    Notes
    -----
    Size-adjusted power (Davidson & MacKinnon 1998): what a test could do if its critical value were right in this very world.
    """
    problem = _problem(procedure, design, focus, disturbance, level)
    nothing = np.zeros((1, problem.k))

    def scaled(factor: float) -> Inverter:
        return Inverter(replace(problem, threshold=problem.threshold * factor**2))

    @cache
    def excess(factor: float) -> float:
        # On the scale of normal quantiles, where a size is all but straight in the critical value.
        return _two_sided(float(scaled(factor).probabilities(nothing).beyond[0])) - wanted

    wanted = _two_sided(1.0 - level)
    step = 1.1 if excess(1.0) < 0.0 else 1.0 / 1.1
    far = step * wanted / (wanted + excess(1.0))
    while (excess(far) < 0.0) == (step > 1.0):
        far *= step**3
    found = brentq(excess, min(1.0, far), max(1.0, far), xtol=1e-8)
    shaped = np.asarray(effects, dtype=np.float64).reshape(-1, problem.k)
    return scaled(float(found)).probabilities(problem.to_unit(shaped)).beyond


def _two_sided(size: float) -> float:
    """The critical value of a two-sided normal test of a size."""
    return -float(ndtri(0.5 * max(size, 1e-300)))


def detectable_effect(
    procedure: LinearProcedure,
    design: Design,
    focus: Focus,
    disturbance: Disturbance,
    level: float,
    *,
    power: float = 0.8,
) -> float:
    """The smallest positive effect from which on the test rejects with probability `power` or more.

    Parameters
    ----------
    procedure, design, focus, disturbance, level
        As for `power`; a single quantity.
    power : float
        Between 0 and 1.

    Returns
    -------
    float
        In error SDs per unit of the focal quantity; 0 where the test rejects that often without any effect.

    Raises
    ------
    InputError
        For a joint quantity or a new response, or a power outside (0, 1).
    NumericalError
        If the accuracy wanted (1e-8) is not reached.
    """
    if not focus.scalar:
        raise InputError(
            f"'{focus.name}' has {focus.k} components, and a detectable effect is a single number",
            where="study.focus",
            remedy="Name a coefficient or a contrast.",
        )
    if not 0.0 < power < 1.0:
        raise InputError(f"power is {power:g}", where="power", remedy="Give a number between 0 and 1, as in 0.8.")
    inverter = Inverter(_problem(procedure, design, focus, disturbance, level))

    def short(effect: float) -> float:
        return power - float(inverter.probabilities(np.array([[effect]])).beyond[0])

    # The test is weakest where the effect cancels the bias.
    low = max(0.0, -float(inverter.problem.shift[0]))
    if short(low) <= 0.0:
        return 0.0 if low == 0.0 else low * float(inverter.problem.T[0, 0])
    step = math.sqrt(inverter.variance) * (inverter.problem.critical + abs(float(ndtri(power))))
    while short(low + step) > 0.0:
        low, step = low + step, 2.0 * step
    found = brentq(short, low, low + step, xtol=1e-10 * (low + step), rtol=1e-10)
    return float(found) * float(inverter.problem.T[0, 0])


def _problem(procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance, level: float) -> Problem:
    if focus.kind is FocusKind.NEW:
        raise InputError(
            f"'{focus.name}' is a new response, which has no test and so no power",
            where="study.focus",
            remedy='Ask for the mean there: of = "mean".',
        )
    return pose(procedure, design, focus, disturbance, level)
