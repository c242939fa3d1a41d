"""The rows and columns that a study uses: typed, complete, in order, and every row accounted for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from withstand.errors import TableError, nearest
from withstand.study.formula import Formula
from withstand.study.numerals import as_numbers, looks_numeric, refuse_text_among_numbers
from withstand.study.rows import Account
from withstand.study.table import NOTICES, check_names

FEW_CODES = 8
LARGEST_CODE = 20
"""A whole-number predictor with at most so many values, none of them larger, may hold codes rather than amounts."""


@dataclass(frozen=True, eq=False)
class CleanTable:
    """The complete rows, in analysis order.

    Parameters
    ----------
    frame : DataFrame
        Numeric columns as float64, the others as categories of text in the order of their levels.
    account : Account
        Rows read and dropped.
    notices : tuple of str
        What the user should know.
    order, weights : ndarray of shape (n,), optional
        Position in time, and known weights.
    groups : ndarray of shape (n,), optional
        Cluster codes.
    """

    frame: pd.DataFrame
    account: Account
    notices: tuple[str, ...]
    order: np.ndarray | None = None
    groups: np.ndarray | None = None
    weights: np.ndarray | None = None


@dataclass(frozen=True)
class Roles:
    """Names of the columns that are no predictors."""

    order: str | None = None
    groups: str | None = None
    weights: str | None = None

    @property
    def named(self) -> dict[str, str]:
        """Column by role."""
        return {role: name for role in ("order", "groups", "weights") if (name := getattr(self, role)) is not None}


@dataclass
class _Cleaning:
    frame: pd.DataFrame
    formula: Formula
    roles: Roles
    notices: list[str] = field(default_factory=list)


def clean_table(frame: pd.DataFrame, formula: Formula, roles: Roles) -> CleanTable:
    """Take from a table what a study uses.

    Parameters
    ----------
    frame : DataFrame
        As read, or the user's own; never changed.
    formula : Formula
        Which columns the model uses.
    roles : Roles
        Which columns give order, groups and weights.

    Returns
    -------
    CleanTable

    Raises
    ------
    TableError
        If a column is missing or holds text among numbers, a value is not finite, a weight is not positive, the order is
        neither numbers nor dates, or no row is complete.
    """
    for role, name in roles.named.items():
        if name not in frame.columns:
            raise TableError(
                f"there is no column '{name}'", where=f"study.{role}", remedy=nearest(name, map(str, frame.columns))
            )
    used = list(dict.fromkeys([*formula.response_columns, *formula.columns, *roles.named.values()]))
    blank = frame.isna().all(axis=1)
    typed = pd.DataFrame({name: _typed(frame[name], name, formula, roles) for name in used}, index=frame.index)
    account = Account(len(frame), _dropped(typed, blank))
    complete = typed.dropna()
    if complete.empty:
        reasons = ", ".join(f"{count} for '{name}'" for name, count in account.dropped.items())
        raise TableError(
            f"no row is left: of {len(frame)} read, all lack a value ({reasons})",
            remedy="Fill the blank cells, or leave a column out of the model.",
        )
    order = None if roles.order is None else _positions(complete[roles.order], roles.order)
    if order is not None:
        arranged = np.argsort(order, kind="stable")
        complete, order = complete.iloc[arranged], order[arranged]
    for name in (*formula.response_columns, *formula.columns):
        if not isinstance(complete[name].dtype, pd.CategoricalDtype):
            _refuse_unbounded(complete[name], name)
    groups = None if roles.groups is None else _group_codes(complete[roles.groups])
    weights = None if roles.weights is None else _weights(complete[roles.weights], roles.weights)
    notices = [*frame.attrs.get(NOTICES, ()), *_code_notices(complete, formula)]
    if order is not None:
        notices += _order_notices(order, groups, str(roles.order))
    kept = complete.apply(lambda column: column.cat.remove_unused_categories() if column.dtype == "category" else column)
    also = _bystanders(frame, kept, used)
    return CleanTable(pd.concat([kept, also], axis=1), account, tuple(notices), order, groups, weights)


def check_frame(frame: pd.DataFrame) -> pd.DataFrame:
    """The frame with text names, if it can be a table at all.

    Raises
    ------
    TableError
        If it has no rows, or a column name comes twice.
    """
    names = [str(name) for name in frame.columns]
    check_names(names, "the table")
    if frame.empty:
        raise TableError("the table has no rows", remedy="Check where it comes from.")
    renamed = frame.copy(deep=False)
    renamed.columns = pd.Index(names)
    return renamed


def _typed(column: pd.Series, name: str, formula: Formula, roles: Roles) -> pd.Series:
    """Float64, or categories of text; blank text is missing."""
    if name == roles.order and name not in (*formula.columns, *formula.response_columns):
        return column
    labels = name in formula.coded or (name == roles.groups and name not in formula.columns)
    if isinstance(column.dtype, pd.CategoricalDtype):
        return column.cat.rename_categories([str(level) for level in column.cat.categories])
    if pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column):
        return _labelled_numbers(column) if labels else column.astype(np.float64)
    text = column.map(lambda cell: str(cell).strip(), na_action="ignore").astype(object)
    text = text.mask(text == "")
    if not labels:
        numbers = as_numbers(text)
        if numbers is not None:
            return numbers
        refuse_text_among_numbers(text, name, "row")
    return _categories(text, sorted(text.dropna().unique()))


def _labelled_numbers(column: pd.Series) -> pd.Series:
    levels = [f"{value:.15g}" for value in sorted(column.dropna().unique())]
    return _categories(column.map(lambda value: f"{value:.15g}", na_action="ignore"), levels)


def _categories(text: pd.Series, levels: Sequence[str]) -> pd.Series:
    return text.astype(pd.CategoricalDtype(list(levels)))


def _dropped(typed: pd.DataFrame, blank: pd.Series) -> dict[str, int]:
    """Rows lost, by the first column that lacks a value."""
    missing = typed.isna()
    counts = {"(blank row)": int(blank.sum())}
    left = ~blank
    for name in typed.columns:
        lacks = missing[name] & left
        counts[str(name)] = int(lacks.sum())
        left &= ~lacks
    return {name: count for name, count in counts.items() if count}


def _refuse_unbounded(column: pd.Series, name: str) -> None:
    wrong = ~np.isfinite(column.to_numpy(dtype=np.float64))
    if wrong.any():
        row = column.index[int(np.argmax(wrong))]
        raise TableError(
            f"{column.iloc[int(np.argmax(wrong))]} is not a finite number",
            where=f"row {row}, column '{name}'",
            remedy="Correct the value, or leave the cell blank if it is missing.",
        )


def _positions(column: pd.Series, name: str) -> np.ndarray:
    """Numbers as they are; dates and times in days."""
    if pd.api.types.is_numeric_dtype(column):
        _refuse_unbounded(column, name)
        return column.to_numpy(dtype=np.float64)
    numbers = as_numbers(column.astype(str).str.strip())
    if numbers is not None:
        return numbers.to_numpy()
    text = column.map(lambda cell: cell.isoformat() if hasattr(cell, "isoformat") else str(cell).strip())
    dates = pd.to_datetime(text, errors="coerce", format="ISO8601")
    if dates.isna().any():
        # Among numbers the text is at fault, among dates what is no date.
        wrong = ~looks_numeric(text) if looks_numeric(text).any() else dates.isna()
        row = column.index[int(np.argmax(wrong))]
        raise TableError(
            f"'{text.iloc[int(np.argmax(wrong))]}' is neither a number nor a date such as 2031-04-09",
            where=f"row {row}, column '{name}'",
            remedy="Give the order as numbers or as year-month-day.",
        )
    return ((dates - dates.min()) / pd.Timedelta(days=1)).to_numpy(dtype=np.float64)


def _group_codes(column: pd.Series) -> np.ndarray:
    return pd.factorize(column, sort=False)[0].astype(np.int64)


def _weights(column: pd.Series, name: str) -> np.ndarray:
    if not pd.api.types.is_numeric_dtype(column):
        raise TableError(
            f"the weights column '{name}' holds text", where="study.weights", remedy="Weights are positive numbers."
        )
    _refuse_unbounded(column, name)
    values = column.to_numpy(dtype=np.float64)
    if (values <= 0.0).any():
        at = int(np.argmax(values <= 0.0))
        raise TableError(
            f"the weight {values[at]:g} is not positive",
            where=f"row {column.index[at]}, column '{name}'",
            remedy="A weight is the reciprocal of an error variance; leave the row out if it should not count.",
        )
    return values


def _code_notices(complete: pd.DataFrame, formula: Formula) -> list[str]:
    notices = []
    for name in formula.columns:
        column = complete[name]
        if isinstance(column.dtype, pd.CategoricalDtype):
            continue
        values = np.unique(column.to_numpy())
        whole = (values == np.round(values)).all() and values.min() >= 0.0 and values.max() <= LARGEST_CODE
        if 2 < values.size <= FEW_CODES and 2 * values.size <= len(column) and whole:
            told = ", ".join(f"{value:g}" for value in values)
            notices.append(f"'{name}' holds only the whole numbers {told} and enters the model as a number; "
                           f"write C({name}) if they are codes")  # fmt: skip
    return notices


def _order_notices(order: np.ndarray, groups: np.ndarray | None, name: str) -> list[str]:
    series = [order] if groups is None else [order[groups == group] for group in np.unique(groups)]
    gaps = np.concatenate([np.diff(one) for one in series])
    if gaps.size == 0:
        return []
    notices = []
    if ties := int((gaps == 0.0).sum()):
        notices.append(
            f"{ties} rows stand at the same place of '{name}' as the row before; serial correlation needs distinct places"
        )
    apart = gaps[gaps > 0.0]
    if apart.size and apart.max() > 1.000001 * apart.min():
        notices.append(
            f"'{name}' has a spacing from {apart.min():g} to {apart.max():g}; serial correlation uses the gaps as they are"
        )
    return notices


def _bystanders(frame: pd.DataFrame, kept: pd.DataFrame, used: Sequence[str]) -> pd.DataFrame:
    """Numeric columns outside the model that are complete on the rows used: spread may run along them too."""
    if not frame.index.is_unique:
        return pd.DataFrame(index=kept.index)
    found = {}
    for name in frame.columns:
        column = frame[name]
        if name in used or not pd.api.types.is_numeric_dtype(column) or pd.api.types.is_bool_dtype(column):
            continue
        values = column.loc[kept.index].to_numpy(dtype=np.float64, na_value=np.nan)
        if np.isfinite(values).all():
            found[name] = values
    return pd.DataFrame(found, index=kept.index)
