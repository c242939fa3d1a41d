"""The variable a departure acts along: a numeric column or the reference fitted mean."""

from __future__ import annotations

from withstand.errors import ScenarioError, nearest
from withstand.study.design import Design, Factor, Floats
from withstand.study.focus import Point

FITTED = "fitted"
"""Stands for the reference fitted mean; a data column of the same name is out of reach."""


def column_along(design: Design, along: str, kind: str) -> Floats:
    """Look up the numeric variable a departure acts along.

    Parameters
    ----------
    design : Design
        Where to look.
    along : str
        A numeric column, or "fitted".
    kind : str
        The departure, for the message.

    Returns
    -------
    ndarray of shape (n,)
        In its own unit.

    Raises
    ------
    ScenarioError
        If there is no such numeric column, or no fitted mean.
    """
    if along == FITTED and design.fitted is not None:
        return design.fitted
    if along in design.columns:
        return design.columns[along]
    known = [*design.columns, *([FITTED] if design.fitted is not None else [])]
    if along == FITTED:
        what = f"'{kind}' along 'fitted' needs a reference fitted mean, and this study has none"
    elif along in design.factors:
        what = f"'{kind}' acts along a numeric column, and '{along}' is categorical"
    elif along:
        what = f"'{kind}' along '{along}': there is no numeric column '{along}'"
    else:
        what = f"'{kind}' does not say which column it acts along"
    raise ScenarioError(what, where="departure.along", remedy=nearest(along, known))


def factor_along(design: Design, along: str, kind: str) -> Factor:
    """Look up the categorical column a departure acts along.

    Raises
    ------
    ScenarioError
        If there is no such categorical column.
    """
    if along in design.factors:
        return design.factors[along]
    if along in design.columns:
        what = f"'{kind}' acts along a categorical column, and '{along}' is numeric"
    elif along:
        what = f"'{kind}' along '{along}': there is no categorical column '{along}'"
    else:
        what = f"'{kind}' does not say which column it acts along"
    raise ScenarioError(what, where="departure.along", remedy=nearest(along, design.factors))


def value_at(point: Point, along: str, kind: str) -> float:
    """The value at a point of the variable a departure acts along.

    Raises
    ------
    ScenarioError
        If the point does not give it.
    """
    if along == FITTED:
        return point.fitted
    if along not in point.columns:
        raise ScenarioError(
            f"'{kind}' acts along '{along}', and the point of the focus gives no value for it",
            where="study.focus.at",
            remedy=f"Add {along} = ... to the point.",
        )
    return float(point.columns[along])
