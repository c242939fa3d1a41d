"""Exact coverage of an interval or region, its two sides, and its expected width."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.world import Disturbance
from withstand.exact.closed import ClosedForm, answering_for
from withstand.exact.moments import expected_claim
from withstand.exact.problem import pose
from withstand.exact.width import expected_root
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus


@dataclass(frozen=True)
class ExactResult:
    """What is known of an interval without simulation.

    Parameters
    ----------
    coverage : float
        Probability that the interval, or region, holds the true value.
    size : float
        Probability that it does not; the rejection rate of the dual test. Small ones keep their leading digits.
    miss_below, miss_above : float or None
        Probability that the whole interval lies below, and above, the true value; None for a joint quantity.
    width : float or None
        Expected width, in error SDs; None for a joint quantity, or where it was not wanted.
    error : float
        Estimate, on the safe side, of the absolute error of each probability, from the convergence of the sums and rounding.
    power : ndarray of shape (E,) or None
        Rejection probabilities at the effects asked for; None where none were.
    """

    coverage: float
    size: float
    miss_below: float | None
    miss_above: float | None
    width: float | None
    error: float
    power: Floats | None = None


def coverage(
    procedure: LinearProcedure,
    design: Design,
    focus: Focus,
    disturbance: Disturbance,
    level: float,
    *,
    width: bool = True,
    effects: Floats | None = None,
) -> ExactResult:
    """Coverage under normal errors with any mean shift and covariance.

    Parameters
    ----------
    procedure : LinearProcedure
        `can_be_exact` has found no reason against it.
    design : Design
        The rows on which the disturbance was realised.
    focus : Focus
        The focal quantity.
    disturbance : Disturbance
        A world realised on the design.
    level : float
        Confidence level.
    width : bool
        Whether the expected width is wanted; it takes an integral of its own.
    effects : ndarray of shape (E, k), or (E,) for a single quantity, optional
        Effects whose power is wanted as well, as for `power`; not for a new response.

    Returns
    -------
    ExactResult
        Probabilities in [0, 1], width in error SDs.

    Raises
    ------
    NumericalError
        If the accuracy wanted (1e-8) is not reached.

    Notes
    -----
    The interval misses where |a'y - truth| > c sqrt(V), that is where a quadratic form in normal variables is positive (Imhof
    1961, Biometrika 48:419). The sides need no second integral: given the tilt by exp(-theta V/2) the estimate is normal, so
    its part on one side is known in closed form at every node of the contour.
    """
    problem = pose(procedure, design, focus, disturbance, level)
    scalar = focus.scalar
    wanted = None if effects is None else problem.to_unit(np.asarray(effects, dtype=np.float64).reshape(-1, problem.k))
    answering = answering_for(problem, wanted)
    found = answering.probabilities(np.zeros((1, problem.k)), sides=scalar)
    powers = None if wanted is None else answering.probabilities(wanted).beyond
    length = None
    if scalar and width:
        if isinstance(answering, ClosedForm):
            root = answering.expected_root()
        else:
            root = expected_root(problem, answering.structure, expected_claim(problem))
        length = 2.0 * problem.critical * float(problem.T[0, 0]) * root
    return ExactResult(
        coverage=float(found.within[0]),
        size=float(found.beyond[0]),
        miss_below=None if found.below is None else float(found.below[0]),
        miss_above=None if found.above is None else float(found.above[0]),
        width=length,
        error=float(found.error[0]),
        power=powers,
    )
