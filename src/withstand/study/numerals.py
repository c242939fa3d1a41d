"""Which text is a number: the one place that decides it, for files and frames alike."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd

from withstand.errors import TableError

_NUMBER = {
    ".": re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?"),
    ",": re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?"),
}
_CENSORED = re.compile(r"[<>≤≥]\s*=?\s*[+-]?[\d.,]+")
_UNBOUNDED = re.compile(r"[+-]?(inf|infinity|nan)", re.IGNORECASE)

_MOSTLY = 0.5
"""A text column in which more than this share of the cells are numbers is taken for a numeric one with faults."""


def looks_numeric(cells: pd.Series, decimal: str = ".") -> pd.Series:
    """Which cells are numbers.

    Parameters
    ----------
    cells : Series of str
        Without missing values, stripped.
    decimal : {".", ","}
        Decimal sign.

    Returns
    -------
    Series of bool
    """
    pattern = _NUMBER[decimal]
    return cells.map(lambda cell: pattern.fullmatch(cell) is not None).astype(bool)


def as_numbers(cells: pd.Series, decimal: str = ".") -> pd.Series | None:
    """A text column as float64 if every cell that is not missing is a number, otherwise None.

    Parameters
    ----------
    cells : Series of str
        Missing values allowed.
    decimal : {".", ","}
        Decimal sign.
    """
    present = cells.dropna()
    if present.empty or not looks_numeric(present, decimal).all():
        return None
    return cells.map(lambda cell: float(cell.replace(",", ".")), na_action="ignore").astype(np.float64)


def refuse_text_among_numbers(cells: pd.Series, name: str, place: str) -> None:
    """Complain about a text column that was plainly meant to be numeric.

    Parameters
    ----------
    cells : Series
        The column; its index tells the rows.
    name : str
        Its name.
    place : str
        What a row is called, such as "row".

    Raises
    ------
    TableError
        If most cells are numbers, or all would be with a decimal comma.
    """
    present = cells.dropna().astype(str).str.strip()
    numeric = looks_numeric(present)
    comma = ~numeric & present.str.contains(",", regex=False) & looks_numeric(present, ",")
    if not numeric.all() and (numeric | comma).mean() > _MOSTLY:
        row = present.index[int(np.argmax(~numeric.to_numpy()))]
        cell = str(present.loc[row] if present.index.is_unique else present[~numeric].iloc[0])
        raise TableError(_fault(name, cell), where=f"{place} {row}, column '{name}'", remedy=_remedy(name, cell))


def _fault(name: str, cell: str) -> str:
    return f"'{cell}' stands among the numbers of '{name}'"


def _remedy(name: str, cell: str) -> str:
    on_purpose = f"if the column holds labels on purpose, write C({name}) in the model"
    if _NUMBER[","].fullmatch(cell):
        return f'If this is a decimal comma, say decimal = ","; {on_purpose}.'
    if _CENSORED.fullmatch(cell):
        return f"A value below or above a limit is no number: decide what it counts as and put it there; {on_purpose}."
    if _UNBOUNDED.fullmatch(cell):
        return f"Every value must be finite; leave the cell blank if it is missing; {on_purpose}."
    return f"Leave the cell blank if the value is missing, or correct it; {on_purpose}."
