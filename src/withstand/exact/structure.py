"""Which structure answers which problem, and which problems have no exact answer at all."""

from __future__ import annotations

import numpy as np

from withstand.departures.world import Disturbance
from withstand.exact.band import BandSweep
from withstand.exact.chain import TridiagonalSolves
from withstand.exact.compressed import CompressedRows, worthwhile
from withstand.exact.correlation import Chain, Correlation, Shared, correlation_of
from withstand.exact.grouped import RowSums
from withstand.exact.middle import BandMiddle, DiagonalMiddle, GroupedMiddle, RowsMiddle
from withstand.exact.modes import dense_modes, group_modes, row_modes
from withstand.exact.problem import Problem
from withstand.exact.tilt import Structure
from withstand.procedures.base import LinearProcedure, Procedure
from withstand.procedures.classical import Ols
from withstand.procedures.forms import Banded, Diagonal, Grouped, Squares
from withstand.study.design import Ints
from withstand.study.focus import Focus, FocusKind

DENSE_ROWS = 2000
"""Up to this many rows an n x n matrix is accepted where nothing cheaper fits (a few seconds at the limit)."""

MOST_DIRECTIONS = 2000
"""Up to this many squares a variance estimate is reduced to the eigenvalues of their covariance."""

_MOST_ELEMENTS = 1 << 26
"""Largest number of rows times squares (0.5 GB)."""

_QUICKER_DENSE = {DiagonalMiddle: 120, BandMiddle: 500}
"""Below this many rows the eigenvalue route is quicker than the sweep along a chain or band (measured, one thread)."""

_SWEEP_WORK = 1 << 27
"""Largest n (lags + columns)^2 of a sweep down a band (about a minute)."""


def structure_of(problem: Problem) -> Structure:
    """The cheapest structure that carries a problem."""
    middle, correlation = problem.middle, problem.correlation
    columns, p, spread = problem.columns, problem.p, problem.spread
    plain = problem.disturbance.dependence is None
    match middle:
        case DiagonalMiddle() if plain and worthwhile(spread**2 * middle.d):
            return CompressedRows(columns, p, middle.d, spread)
        case DiagonalMiddle() if plain:
            return RowSums(columns, p, middle.d, spread)
        case DiagonalMiddle() if isinstance(correlation, Shared):
            return RowSums(columns, p, middle.d, spread, correlation.icc, correlation.codes)
        case DiagonalMiddle() if isinstance(correlation, Chain) and problem.n > _QUICKER_DENSE[DiagonalMiddle]:
            return TridiagonalSolves(columns, p, middle.d, spread, correlation)
        case BandMiddle() if _in_row_order(plain, correlation) and _sweeps(problem.n, len(middle.lags)):
            links = correlation.links if isinstance(correlation, Chain) else np.zeros(problem.n)
            return BandSweep(columns, p, middle.lags, spread, links)
        case GroupedMiddle() if middle.ridge == 0.0 and _within(plain, correlation, middle.codes):
            return group_modes(problem, middle)
        case GroupedMiddle() if middle.ridge == 0.0 and middle.codes.max() < problem.n // 2:
            return row_modes(problem, middle.as_rows())
        case RowsMiddle() if middle.ridge == 0.0 and len(middle.rows) < problem.n // 2:
            return row_modes(problem, middle)
        case _:
            return dense_modes(problem)


def can_be_exact(procedure: Procedure, focus: Focus, disturbance: Disturbance) -> str | None:
    """Why coverage, size and power have no exact answer; None if they have.

    Parameters
    ----------
    procedure : Procedure
        Any procedure.
    focus : Focus
        The focal quantity.
    disturbance : Disturbance
        A world realised on a design.

    Returns
    -------
    str or None
        A reason that reads on from 'not exact, because'.
    """
    if not isinstance(procedure, LinearProcedure):
        return f"'{procedure.name}' is not linear in the response with a variance estimate quadratic in the residuals"
    if disturbance.law is not None:
        return "the errors are not normal"
    if disturbance.outliers:
        return "outliers strike"
    if not focus.scalar and not isinstance(procedure, Ols):
        return f"the joint test with the variance estimate of '{procedure.name}' is not a quadratic form in the errors"
    design = disturbance.design
    refusal = procedure.not_applicable(design, focus)
    if refusal is not None:
        return f"the procedure is {refusal}"
    if design.n <= DENSE_ROWS:
        return None
    used = procedure.fitted_design(design)
    new = focus.kind is FocusKind.NEW
    plain = disturbance.dependence is None
    correlation = None if disturbance.dependence is None else correlation_of(disturbance.dependence)
    if not plain and correlation is None:
        fits = False
    elif not focus.scalar:
        fits = True
    else:
        match procedure.form(used, used.estimator(focus.L)):
            case Diagonal():
                fits = True
            case Banded() as form:
                lags = len(form.lag_weights)
                fits = lags == 1 or (_in_row_order(plain, correlation) and design.n * (lags + design.p) ** 2 <= _SWEEP_WORK)
            case Grouped() as form:
                fits = not new and (_within(plain, correlation, form.codes) or _affordable(int(form.codes.max()) + 1, design.n))
            case Squares() as form:
                fits = not new and _affordable(form.rows.shape[1], design.n)
            case _:
                fits = False
    return None if fits else f"{design.n} rows are too many for this variance estimate with these errors"


def _affordable(directions: int, n: int) -> bool:
    """Whether a variance estimate of that many squares may be written out."""
    return directions <= MOST_DIRECTIONS and directions * n <= _MOST_ELEMENTS


def _sweeps(n: int, lags: int) -> bool:
    """Whether the sweep down a band beats the eigenvalue route, or that route is out of reach."""
    return n > DENSE_ROWS or (n > _QUICKER_DENSE[BandMiddle] and 10 * lags < n)


def _in_row_order(plain: bool, correlation: Correlation | None) -> bool:
    """Whether errors are independent or follow chains in the order of the rows."""
    return plain or (isinstance(correlation, Chain) and correlation.contiguous)


def _within(plain: bool, correlation: Correlation | None, codes: Ints) -> bool:
    """Whether no correlation reaches from one group to another."""
    if plain:
        return True
    if isinstance(correlation, Shared):
        return bool(np.array_equal(correlation.codes, codes))
    if isinstance(correlation, Chain):
        ordered = codes[correlation.order]
        return bool(np.all((correlation.links[1:] == 0.0) | (ordered[1:] == ordered[:-1])))
    return False
