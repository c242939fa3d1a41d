"""What there is to say about a design and its reference fit before anything is simulated."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from scipy.linalg import solve_triangular

from withstand import tails
from withstand.study.design import Design, Floats
from withstand.study.focus import FocusKind
from withstand.study.study import Study

HIGH_LEVERAGE = 2.0
"""A row with more than this many times the mean leverage p/n is named (Hoaglin & Welsch 1978, American Statistician 32:17)."""

_MOST_ROWS = 10


@dataclass(frozen=True)
class DesignFacts:
    """Design, leverage, fit and collinearity, in plain Python values.

    Parameters
    ----------
    order, groups, weights : str
        Columns in these roles; empty where there are none.
    group_sizes : list of int, length G
        Rows in each group.
    leverage_max : float
        In [0, 1].
    leverage_rows : list of mapping
        The rows of high leverage, highest first, by the name the user knows them by; of a plan, their place from 1.
    coefficients : list of mapping
        Name, estimate and classical standard error of each model column; without data, the coefficients as stated.
    vif : mapping of str to float
        Variance inflation factor of each model column but the intercept.
    widening : mapping of str to float
        By what collinearity multiplies the width of each focal interval.
    r_squared, skewness, kurtosis : float, optional
        Of the reference fit; None without data.
    """

    order: str
    groups: str
    weights: str
    group_sizes: list[int]
    leverage_max: float
    leverage_rows: list[dict[str, Any]]
    coefficients: list[dict[str, Any]]
    vif: dict[str, float]
    widening: dict[str, float]
    r_squared: float | None
    skewness: float | None
    kurtosis: float | None

    def as_record(self) -> dict[str, Any]:
        """As a dictionary."""
        return asdict(self)


def design_facts(study: Study) -> DesignFacts:
    """Look a study over.

    Parameters
    ----------
    study : Study
        Data or plan; of a plan, one draw of it.
    """
    design = study.design
    shape = (None, None, None) if study.residuals is None else _shape(study, study.residuals)
    return DesignFacts(
        order=study.roles.get("order", ""),
        groups=study.roles.get("groups", ""),
        weights=study.roles.get("weights", ""),
        group_sizes=[] if design.groups is None else np.bincount(design.groups).tolist(),
        leverage_max=float(design.leverage.max()),
        leverage_rows=_high_leverage(design, study.labels),
        coefficients=_coefficients(study),
        vif=variance_inflation(design),
        widening=widening(study),
        r_squared=shape[0],
        skewness=shape[1],
        kurtosis=shape[2],
    )


def variance_inflation(design: Design) -> dict[str, float]:
    """Variance inflation factors, at least 1, of the model columns that vary.

    Parameters
    ----------
    design : Design

    Notes
    -----
    (X'X)^-1_jj times the sum of squares of column j about its mean where the model has a constant, about zero otherwise
    (Marquardt 1970, Technometrics 12:591).
    """
    inverse = solve_triangular(design.R, np.eye(design.p))
    own = np.einsum("ij,ij->i", inverse, inverse)
    spread = _spread(design)
    return {name: float(own[j] * spread[j]) for j, name in enumerate(design.names) if spread[j] > 0.0}


def widening(study: Study) -> dict[str, float]:
    """The factor by which collinearity widens the classical interval of each focal coefficient.

    Parameters
    ----------
    study : Study

    Notes
    -----
    The square root of its variance inflation factor. Contrasts and the intercept have none: columns that code levels of one
    factor are correlated by their making.
    """
    inflation = variance_inflation(study.design)
    factors = {}
    for focus in study.focus:
        used = np.flatnonzero(focus.L[0])
        if focus.kind is FocusKind.COEFFICIENT and used.size == 1 and study.design.names[used[0]] in inflation:
            factors[focus.name] = float(np.sqrt(inflation[study.design.names[used[0]]]))
    return factors


def focal_estimates(study: Study) -> list[dict[str, float]]:
    """Estimate and classical interval of each focal quantity of the reference fit; empty mappings without data or for a term.

    Parameters
    ----------
    study : Study

    Returns
    -------
    list of mapping
        estimate, low, high, in units of the focal quantity.
    """
    if study.residuals is None:
        return [{} for _ in study.focus]
    design, sd = _as_fitted(study, study.residuals)
    critical = float(tails.t_isf(study.alpha / 2.0, design.df))
    found: list[dict[str, float]] = []
    for focus in study.focus:
        if focus.k > 1:
            found.append({})
            continue
        estimate = float(focus.L[0] @ study.coefficients)
        own = 1.0 if focus.kind is FocusKind.NEW else 0.0
        reach = critical * sd * float(np.sqrt(np.sum(design.basis_rows(focus.L) ** 2) + own))
        found.append({"estimate": estimate, "low": estimate - reach, "high": estimate + reach})
    return found


def _as_fitted(study: Study, residuals: Floats) -> tuple[Design, float]:
    """The design of the reference fit and its error SD: weighted where weights are known."""
    if study.design.weights is None:
        return study.design, study.error_sd
    sd = float(np.sqrt(np.sum(study.design.weights * residuals**2) / study.design.df))
    return study.design.weighted, sd


def _spread(design: Design) -> Floats:
    """Sum of squares of each column about its mean, (p,); about zero where no column is constant; 0 for a constant one."""
    X = design.X
    constant = np.ptp(X, axis=0) == 0.0
    centred = X - X.mean(axis=0) if constant.any() else X
    return np.asarray(np.where(constant, 0.0, np.einsum("ij,ij->j", centred, centred)))


def _high_leverage(design: Design, labels: tuple[str, ...]) -> list[dict[str, Any]]:
    leverage = design.leverage
    ranked = np.argsort(-leverage, kind="stable")[:_MOST_ROWS]
    limit = HIGH_LEVERAGE * design.p / design.n
    return [
        {"row": labels[row] if labels else str(row + 1), "leverage": float(leverage[row])}
        for row in ranked
        if leverage[row] > limit
    ]


def _coefficients(study: Study) -> list[dict[str, Any]]:
    design, sd = (study.design, study.error_sd) if study.residuals is None else _as_fitted(study, study.residuals)
    inverse = solve_triangular(design.R, np.eye(design.p))
    errors = sd * np.sqrt(np.einsum("ij,ij->i", inverse, inverse))
    return [
        {"name": name, "estimate": float(value), "se": float(error)}
        for name, value, error in zip(study.design.names, study.coefficients, errors, strict=True)
    ]


def _shape(study: Study, residuals: Floats) -> tuple[float, float, float]:
    """R squared, skewness and kurtosis (3 for a normal law) of the reference fit."""
    y = np.asarray(study.response)
    centred = y - y.mean()
    spread = residuals - residuals.mean()
    second = float(np.mean(spread**2))
    return (
        1.0 - float(residuals @ residuals) / float(centred @ centred),
        float(np.mean(spread**3)) / second**1.5,
        float(np.mean(spread**4)) / second**2,
    )
