"""Bias, true and claimed variance: exact for errors of any law with finite variance."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.departures.world import Disturbance
from withstand.exact.correlation import Correlation
from withstand.exact.middle import BandMiddle, DiagonalMiddle, GroupedMiddle, Middle, RowsMiddle
from withstand.exact.problem import Problem, pose
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

_CHUNK = 64
"""Columns of a matrix product taken at a time."""

_NO_BIAS = 1e-8
"""A bias below this share of the SD of the estimate is rounding error."""


@dataclass(frozen=True)
class Moments:
    """First and second moments of an estimate and the expected claim, in error SDs of the response.

    Parameters
    ----------
    bias : float
        Expected estimate minus true value; for a new response, expected prediction minus expected response.
    variance : float
        True variance of the estimate; for a new response, of the prediction error.
    claimed_variance : float
        Expected value of the claimed variance.
    vanishing : bool
        Whether the SD of the estimate vanishes as rows are added; for a new response it does not.
    """

    bias: float
    variance: float
    claimed_variance: float
    vanishing: bool = True

    @property
    def se_ratio(self) -> float:
        """Root mean claimed variance over true SD."""
        return math.sqrt(self.claimed_variance / self.variance)

    def large_sample_coverage(self, level: float) -> float:
        """Coverage that is approached as rows are added while `se_ratio` stays what it is.

        Parameters
        ----------
        level : float
            Nominal level.

        Returns
        -------
        float
            2 Phi(z * se_ratio) - 1 where the estimate is unbiased, 0 where a bias stays while the SD vanishes. For a new
            response, whose SD stays, the bias counts in SDs. The limit for a new response holds for normal errors.
        """
        z = float(tails.normal_isf((1.0 - level) / 2.0)) * self.se_ratio
        bias = self.bias / math.sqrt(self.variance)
        if abs(bias) <= _NO_BIAS:
            return float(1.0 - 2.0 * tails.normal_sf(z))
        if self.vanishing:
            return 0.0
        return float(tails.normal_cdf(z - bias) - tails.normal_cdf(-z - bias))


def moments(procedure: LinearProcedure, design: Design, focus: Focus, disturbance: Disturbance) -> Moments | None:
    """Exact moments of a procedure in a world.

    Parameters
    ----------
    procedure : LinearProcedure
        Applicable to the focus.
    design : Design
        The rows on which the disturbance was realised.
    focus : Focus
        The focal quantity.
    disturbance : Disturbance
        A world realised on the design.

    Returns
    -------
    Moments or None
        None for a joint quantity, which has no single claimed variance, and where outliers strike at random.

    Notes
    -----
    With y = mean + errors, bias = a'mean - truth, variance = a' Sigma a and
    E[V] = tr(M D M Sigma) + mean' M D M mean, without an n x n matrix.
    """
    if not focus.scalar or disturbance.outliers:
        return None
    problem = pose(procedure, design, focus, disturbance, None)
    unit = float(problem.T[0, 0]) ** 2
    focal = problem.Q[:, -1:]
    variance = float((focal.T @ problem.covariance(focal))[0, 0]) + problem.added
    return Moments(
        bias=float(problem.shift[0]) * math.sqrt(unit),
        variance=unit * variance,
        claimed_variance=unit * expected_claim(problem),
        vanishing=focus.kind is not FocusKind.NEW,
    )


def expected_claim(problem: Problem) -> float:
    """E[e' D e], in the unit of w squared."""
    Q, middle = problem.Q, problem.middle
    weighted = middle.times(Q)
    total = _trace(problem, middle)
    total -= 2.0 * float(np.sum(weighted * problem.covariance(Q)))
    total += float(np.sum((Q.T @ weighted) * (Q.T @ problem.covariance(Q))))
    if problem.residual_mean is not None:
        nu = problem.residual_mean[:, None]
        total += float(np.sum(nu * middle.times(nu)))
    return total


def _trace(problem: Problem, middle: Middle) -> float:
    """tr(D Sigma)."""
    squares = problem.spread**2
    plain = problem.disturbance.dependence is None
    match middle:
        case DiagonalMiddle():
            return float(middle.d @ squares)
        case BandMiddle() if plain:
            return float(middle.lags[0] @ squares)
        case BandMiddle() if problem.correlation is not None:
            total = float(middle.lags[0] @ squares)
            for lag in range(1, len(middle.lags)):
                late = np.arange(lag, problem.n)
                shared = problem.correlation.between(late, late - lag) * problem.spread[lag:] * problem.spread[:-lag]
                total += 2.0 * float(middle.lags[lag, lag:] @ shared)
            return total
        case GroupedMiddle() if plain:
            return float((middle.b**2 + middle.ridge) @ squares)
        case GroupedMiddle() if problem.correlation is not None:
            return _group_trace(middle, problem.correlation, problem.spread) + middle.ridge * float(np.sum(squares))
        case RowsMiddle():
            pieces = [middle.rows[begin : begin + _CHUNK] for begin in range(0, len(middle.rows), _CHUNK)]
            inside = sum(float(np.sum(piece.T * problem.covariance(piece.T))) for piece in pieces)
            return inside + middle.ridge * float(np.sum(squares))
        case _:
            # Column by column: nothing is known of the correlation but its products.
            return sum(_columns_trace(problem, middle, begin) for begin in range(0, problem.n, _CHUNK))


def _group_trace(middle: GroupedMiddle, correlation: Correlation, spread: Floats) -> float:
    """Sum of b_i b_j Sigma_ij over pairs of rows in one group, by distance in an order that has groups in one piece."""
    rows = np.argsort(middle.codes, kind="stable")
    codes, weights = middle.codes[rows], (middle.b * spread)[rows]
    total = float(np.sum(weights**2))
    for lag in range(1, int(np.bincount(codes).max())):
        together = np.flatnonzero(codes[lag:] == codes[:-lag])
        between = correlation.between(rows[together + lag], rows[together])
        total += 2.0 * float(np.sum(weights[together + lag] * weights[together] * between))
    return total


def _columns_trace(problem: Problem, middle: Middle, begin: int) -> float:
    unit = np.zeros((problem.n, min(_CHUNK, problem.n - begin)))
    unit[begin + np.arange(unit.shape[1]), np.arange(unit.shape[1])] = 1.0
    return float(np.sum(problem.covariance(unit) * middle.times(unit)))
