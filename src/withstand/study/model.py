"""A formula bound to a table: model matrices for its rows and for new points."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import formulaic
import numpy as np
import pandas as pd

from withstand.errors import FormulaError, ScenarioError, TableError, nearest
from withstand.study.design import Factor, Floats
from withstand.study.formula import Formula

_LARGEST = 1e150
"""Beyond it squares overflow double precision."""

_CONTEXT = {"sqrt": np.sqrt, "log1p": np.log1p, "log2": np.log2}
"""Allowed functions that the formula library does not bring."""


@dataclass(frozen=True, eq=False)
class Model:
    """What a formula makes of a table, with the bases, centres and levels it found there kept.

    Parameters
    ----------
    formula : Formula
        The checked formula.
    names : tuple of str, length p
        Model columns: `x`, `g[b]`, `x:g[b]`, `poly(x, 2)[1]`.
    written : tuple of str, length p
        The same as the formula library writes them.
    terms : mapping of str to tuple of int
        Columns of each term.
    levels : mapping of str to tuple of str
        Levels of the categorical predictors.
    spec : formulaic.ModelSpec
        Makes model matrices.
    """

    formula: Formula
    names: tuple[str, ...]
    written: tuple[str, ...]
    terms: Mapping[str, tuple[int, ...]]
    levels: Mapping[str, tuple[str, ...]]
    spec: Any

    @classmethod
    def of(cls, formula: Formula, frame: pd.DataFrame) -> tuple[Model, Floats]:
        """The model of a clean table, and its matrix (n, p).

        Raises
        ------
        FormulaError
            If a function cannot be evaluated on the table, or the formula has no terms.
        TableError
            If a model column is not finite in some row.
        """
        matrix = _evaluated(formula, formula.predictors, frame)
        spec = matrix.model_spec
        written = tuple(str(name) for name in matrix.columns)
        if not written:
            raise FormulaError(
                f"`{formula.text}` has no terms", where="study.model", remedy="Name a predictor, or 1 for a mean."
            )
        terms = {
            _plain(str(term)) if str(term) != "1" else "Intercept": tuple(range(*part.indices(len(written))))
            for term, part in spec.term_slices.items()
        }
        if empty := [name for name, columns in terms.items() if not columns]:
            raise FormulaError(
                f"`{empty[0]}` in `{formula.text}` makes no column",
                where="study.model",
                remedy="Check its options, or drop it.",
            )
        levels = {
            name: tuple(map(str, frame[name].cat.categories))
            for name in formula.columns
            if isinstance(frame[name].dtype, pd.CategoricalDtype)
        }
        model = cls(formula, tuple(_friendly(name) for name in written), written, terms, levels, spec)
        return model, _finite(matrix, model.names, frame)

    def matrix(self, frame: pd.DataFrame) -> Floats:
        """Model matrix of other rows, (n, p), on the same bases and levels.

        Parameters
        ----------
        frame : DataFrame
            Numeric columns as float64, others as categories with the levels of this model.

        Raises
        ------
        TableError
            If a model column is not finite in some row.
        """
        with np.errstate(all="ignore"):
            matrix = self.spec.get_model_matrix(frame, context=_CONTEXT, na_action="ignore")
        return _finite(matrix, self.names, frame)

    def row(self, values: Mapping[str, float | str]) -> Floats:
        """The model row at a point, (p,).

        Parameters
        ----------
        values : mapping of str to float or str
            A value for every predictor; levels for the categorical ones.

        Raises
        ------
        ScenarioError
            If a predictor is missing or unknown, or a level or number is not one.
        """
        place = "study.focus.at"
        for name in values:
            if name not in self.formula.columns:
                raise ScenarioError(
                    f"'{name}' is no predictor of the model", where=place, remedy=nearest(name, self.formula.columns)
                )
        cells: dict[str, Any] = {}
        for name in self.formula.columns:
            if name not in values:
                raise ScenarioError(f"the point gives no value for '{name}'", where=place, remedy=f"Add {name} = ... to it.")
            cells[name] = [self._cell(name, values[name], place)]
        frame = pd.DataFrame(cells) if cells else pd.DataFrame(index=[0])
        for name, levels in self.levels.items():
            frame[name] = pd.Categorical(frame[name], categories=list(levels))
        return np.asarray(self.matrix(frame)[0])

    def _cell(self, name: str, value: float | str, place: str) -> float | str:
        if name in self.levels:
            level = value if isinstance(value, str) else f"{value:.15g}"
            if level not in self.levels[name]:
                raise ScenarioError(f"'{name}' has no level '{level}'", where=place, remedy=nearest(level, self.levels[name]))
            return level
        if isinstance(value, str) or not np.isfinite(value):
            raise ScenarioError(f"'{name}' is a number, and the point gives '{value}'", where=place, remedy="Give a number.")
        return float(value)


def response_values(formula: Formula, frame: pd.DataFrame) -> Floats:
    """The left side of the formula, (n,).

    Raises
    ------
    TableError
        If it is text, or not finite in some row.
    """
    for name in formula.response_columns:
        if isinstance(frame[name].dtype, pd.CategoricalDtype):
            raise TableError(
                f"the response '{name}' is text", where="study.model", remedy="The response of a regression is a number."
            )
    matrix = _evaluated(formula, f"0 + {formula.response}", frame)
    if matrix.shape[1] != 1:
        raise FormulaError(
            f"`{formula.response}` makes {matrix.shape[1]} columns", where="study.model", remedy="Name one response."
        )
    return np.ascontiguousarray(_finite(matrix, (formula.response,), frame)[:, 0])


def factors_of(frame: pd.DataFrame, names: tuple[str, ...]) -> dict[str, Factor]:
    """The categorical columns among `names`."""
    return {
        name: Factor(np.asarray(frame[name].cat.codes, dtype=np.int64), tuple(map(str, frame[name].cat.categories)))
        for name in names
        if isinstance(frame[name].dtype, pd.CategoricalDtype)
    }


def _evaluated(formula: Formula, side: str, frame: pd.DataFrame) -> Any:
    try:
        with np.errstate(all="ignore"):
            return formulaic.model_matrix(side, frame, context=_CONTEXT, na_action="ignore")
    except Exception as error:  # the formula library raises many kinds, some of them of the functions it calls
        reason = str(error.__cause__ or error).splitlines()[0]
        raise FormulaError(
            f"`{side}` in `{formula.text}` cannot be evaluated on this table ({reason})",
            where="study.model",
            remedy="Functions take numeric columns; check their options.",
        ) from error


def _finite(matrix: Any, names: tuple[str, ...], frame: pd.DataFrame) -> Floats:
    values = np.ascontiguousarray(np.asarray(matrix, dtype=np.float64))
    wrong = ~(np.abs(values) <= _LARGEST)
    if wrong.any():
        row, column = np.argwhere(wrong)[0]
        raise TableError(
            f"'{names[column]}' is {values[row, column]:g} there",
            where=f"row {frame.index[row]}",
            remedy="Correct the value or the formula: a logarithm needs a number above 0, a root one of 0 or more, "
            f"a quotient a divisor other than 0, and nothing may be beyond {_LARGEST:g}.",
        )
    return values


def _plain(term: str) -> str:
    return re.sub(r"\bC\(([^()]+)\)", r"\1", term)


def _friendly(name: str) -> str:
    return re.sub(r"\bC\(([^()]+)\)(?=\[)", r"\1", name).replace("[T.", "[")
