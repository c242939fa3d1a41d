"""What a study holds, from a table or from a fit that was made elsewhere."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, Literal

import numpy as np
import pandas as pd

from withstand.errors import DesignError, FormulaError, ScenarioError, TableError
from withstand.study.cleaning import CleanTable, Roles, check_frame, clean_table
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus
from withstand.study.focusing import Effect, FocusEntry, foci_of
from withstand.study.formula import parse_formula
from withstand.study.model import Model, factors_of, response_values
from withstand.study.rows import DrawnRows, FixedRows, Rows

_NOTHING_LEFT = 1e-24
"""A residual sum of squares below this share of the response's is rounding, not error."""

_WEIGHTS = "known weights"
"""Column that carries the weights of a fit that was handed over."""

_AGREES = 1e-6
"""Largest accepted difference, relative, between a fit handed over and its repetition here."""


def fields_from_frame(
    frame: pd.DataFrame,
    formula: str,
    *,
    focus: FocusEntry | Sequence[FocusEntry] = (),
    order: str | None = None,
    groups: str | None = None,
    weights: str | None = None,
    level: float = 0.95,
    rows: Literal["fixed", "resampled"] = "fixed",
    effect: Mapping[str, Effect] | None = None,
    name: str = "",
) -> dict[str, Any]:
    """The fields of a study of a table; see `Study.from_frame`.

    Raises
    ------
    InputError
        If the table, the formula, the focus or the model matrix cannot be used.
    """
    _check_level(level)
    frame = check_frame(frame)
    parsed = parse_formula(formula, list(frame.columns))
    roles = Roles(order, groups, weights)
    table = clean_table(frame, parsed, roles)
    y = response_values(parsed, table.frame)
    model, X = Model.of(parsed, table.frame)
    design = _design(X, model.names, table)
    coefficients, error_sd = reference_fit(design, y, parsed.response)
    design = replace(design, fitted=X @ coefficients)
    foci = foci_of(model, _listed(focus), effect, coefficients)
    labels = tuple(str(label) for label in table.frame.index)
    return {
        "name": name or parsed.text,
        "formula": parsed.text,
        "design": design,
        "focus": foci,
        "coefficients": coefficients,
        "error_sd": error_sd,
        "rows": _rows(design, rows),
        "response": y,
        "level": level,
        "account": table.account,
        "notices": (*table.notices, *_saturation(design, labels)),
        "labels": labels,
        "roles": roles.named,
        "digest": digest_of(design, foci, coefficients, y, f"{parsed.text}|{error_sd!r}|{level!r}|{rows}"),
    }


def fields_from_results(results: Any, **options: Any) -> dict[str, Any]:
    """The fields of a study of a fit of statsmodels; see `Study.from_results`.

    Raises
    ------
    InputError
        If the fit is of another kind than OLS or WLS, or its repetition here gives other fitted values.
    """
    fitted: Any = getattr(results, "model", None)
    kind = type(fitted).__name__
    if kind not in ("OLS", "WLS"):
        raise ScenarioError(
            f"the fit is of kind {kind}", where="results", remedy="Hand over the results of an OLS or WLS fit of statsmodels."
        )
    frame, formula = _table_of(fitted)
    if kind == "WLS":
        frame = frame.assign(**{_WEIGHTS: np.asarray(fitted.weights, dtype=np.float64)})
        options = {**options, "weights": _WEIGHTS}
    fields = fields_from_frame(frame, formula, **options)
    theirs, ours = np.sort(np.asarray(results.fittedvalues)), np.sort(fields["design"].fitted)
    if theirs.shape != ours.shape or np.abs(theirs - ours).max() > _AGREES * (np.abs(theirs).max() + fields["error_sd"]):
        raise FormulaError(
            f"`{formula}` gives other fitted values here than in the fit that was handed over",
            where="results",
            remedy="Build the study from the table: Study.from_frame(frame, formula).",
        )
    return fields


def reference_fit(design: Design, y: Floats, name: str) -> tuple[Floats, float]:
    """Coefficients (p,) and error SD of the user's own fit: weighted where weights are known.

    Raises
    ------
    TableError
        If the response is constant, or the model leaves no error.
    """
    if np.ptp(y) == 0.0:
        raise TableError(f"the response `{name}` is {y[0]:g} in every row", where="study.model", remedy="Check the column.")
    if design.weights is None:
        coefficients = design.coefficients(y)
    else:
        coefficients = design.weighted.coefficients(y * np.sqrt(design.weights))
    residuals = y - design.X @ coefficients
    rss = float(residuals @ residuals)
    if rss <= _NOTHING_LEFT * float(y @ y):
        raise TableError(
            f"the model fits `{name}` without error: the residual variance is zero",
            where="study.model",
            remedy="Check whether a predictor is computed from the response.",
        )
    return coefficients, float(np.sqrt(rss / design.df))


def digest_of(design: Design, foci: Sequence[Focus], coefficients: Floats, response: Floats | None, settings: str) -> str:
    """Hash of all in a study that can change a result.

    Parameters
    ----------
    design, foci, coefficients, response
        Fields of the study.
    settings : str
        The others, written out.
    """
    told = hashlib.sha256(settings.encode())
    for array in (design.X, response, design.order, design.groups, design.weights, coefficients):
        told.update(b"-" if array is None else np.ascontiguousarray(array).tobytes())
    for column, values in sorted(design.columns.items()):
        told.update(column.encode() + np.ascontiguousarray(values).tobytes())
    for column, factor in sorted(design.factors.items()):
        told.update(repr((column, factor.levels)).encode() + factor.codes.tobytes())
    for focus in foci:
        effect = None if focus.effect is None else focus.effect.tolist()
        told.update(repr((focus.name, focus.kind, focus.L.tolist(), focus.null.tolist(), effect)).encode())
    told.update(repr(design.names).encode())
    return told.hexdigest()


def _check_level(level: float) -> None:
    if not 0.0 < level < 1.0:
        raise ScenarioError(f"the level is {level:g}", where="study.level", remedy="Give a number between 0 and 1, as in 0.95.")


def _listed(focus: FocusEntry | Sequence[FocusEntry]) -> list[FocusEntry]:
    return [focus] if isinstance(focus, str | Mapping) else list(focus)


def _design(X: Floats, names: tuple[str, ...], table: CleanTable) -> Design:
    frame = table.frame
    numeric = [name for name in frame.columns if not isinstance(frame[name].dtype, pd.CategoricalDtype)]
    numeric = [name for name in numeric if pd.api.types.is_numeric_dtype(frame[name])]
    try:
        return Design(
            X=X,
            names=names,
            columns={str(name): frame[name].to_numpy(dtype=np.float64) for name in numeric},
            factors=factors_of(frame, tuple(map(str, frame.columns))),
            order=table.order,
            groups=table.groups,
            weights=table.weights,
        )
    except DesignError as error:
        raise DesignError(error.what, where="study.model", remedy=error.remedy) from error


def _saturation(design: Design, labels: tuple[str, ...]) -> list[str]:
    """What rows of leverage 1 do."""
    return [
        f"row {labels[row]} alone decides a coefficient (leverage 1): it has no residual, says nothing about the error SD, "
        "and HC2, HC3 and their kin are not defined"
        for row in design.saturated_rows
    ]


def _rows(design: Design, kind: str) -> Rows:
    if kind == "fixed":
        return FixedRows(design)
    if kind != "resampled":
        raise ScenarioError(f"rows is '{kind}'", where="study.rows", remedy="Known: fixed, resampled.")
    if design.order is not None and design.groups is None:
        raise ScenarioError(
            "rows of a series that are drawn with replacement would stand at the same place in the order",
            where="study.rows",
            remedy='Use rows = "fixed", or name groups whose series are drawn whole.',
        )
    return DrawnRows(design, design.n)


def _table_of(fitted: Any) -> tuple[pd.DataFrame, str]:
    """The table behind a fit and the formula that gives its model matrix."""
    formula = getattr(fitted, "formula", None)
    original = getattr(fitted.data, "frame", None)
    if formula is not None and original is not None:
        labels = fitted.data.row_labels
        return pd.DataFrame(original if labels is None else original.loc[labels]), str(formula)
    X, names = np.asarray(fitted.exog, dtype=np.float64), [str(name) for name in fitted.exog_names]
    constant = [place for place in range(X.shape[1]) if np.ptp(X[:, place]) == 0.0 and X[0, place] == 1.0]
    terms = [f"`{name}`" for place, name in enumerate(names) if place not in constant]
    response = str(fitted.endog_names)
    frame = pd.DataFrame({name: X[:, place] for place, name in enumerate(names) if place not in constant})
    frame.insert(0, response, np.asarray(fitted.endog, dtype=np.float64))
    return frame, f"`{response}` ~ {' + '.join([*terms, '1' if constant else '0'])}"
