"""What a plan leaves to be worked out: columns and coefficients from a pilot, the error SD from a pilot or from R squared."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
import pandas as pd

from withstand.errors import DesignError, ScenarioError, TableError, nearest
from withstand.study.build import reference_fit
from withstand.study.columns import PlannedColumn
from withstand.study.design import Design
from withstand.study.focus import FocusKind
from withstand.study.focusing import Effect, FocusEntry
from withstand.study.formula import Formula, parse_formula
from withstand.study.model import Model
from withstand.study.pilot import Pilot
from withstand.study.planned import StudyPlan
from withstand.study.planning import Planner, matrix_of, prepared
from withstand.study.study import Study

_TABLES = 100
"""Tables over which the variance of the mean is averaged where R squared is given."""

_VARIANCE_STREAM = 3001


def planned_study(
    plan: StudyPlan,
    formula: str,
    *,
    focus: FocusEntry | Sequence[FocusEntry] = (),
    order: str | None = None,
    groups: str | None = None,
    weights: str | None = None,
    level: float = 0.95,
    effect: Mapping[str, Effect] | None = None,
    name: str = "",
) -> Study:
    """A study that is still to be done.

    Parameters
    ----------
    plan : StudyPlan
        What will be collected, and what is thought to be true.
    formula : str
        Model; its left side is one name, which is no column of the plan.
    focus, order, groups, weights, level, effect, name
        As for `Study.from_frame`. Without an effect, power for a coefficient or contrast is judged at the coefficients stated
        in the plan, which is said in the notices; coefficients fitted to a pilot are never used so.

    Returns
    -------
    Study
        Its `grow` makes the study at any other number of rows.

    Raises
    ------
    InputError
        If the plan, the formula or the focus cannot be used; the message says where and how to mend it.
    """
    if not 0.0 < level < 1.0:
        raise ScenarioError(f"the level is {level:g}", where="study.level", remedy="Give a number between 0 and 1, as in 0.95.")
    roles = {role: col for role, col in (("order", order), ("groups", groups), ("weights", weights)) if col is not None}
    pilot = plan.pilot
    known = list(dict.fromkeys([*plan.columns, *([] if pilot is None else map(str, pilot.frame.columns))]))
    parsed = parse_formula(formula, known, planned=True)
    if parsed.response in plan.columns:
        raise ScenarioError(
            f"the response '{parsed.response}' is a column of the plan",
            where="study.model",
            remedy="The plan describes the predictors; the response is what the study will measure.",
        )
    plan = replace(plan, columns=_columns(plan, parsed, roles, known))
    _check_roles(plan, roles)
    entries = (focus,) if isinstance(focus, str | Mapping) else tuple(focus)
    # An error SD of 1 stands in until it is worked out: no design depends on it.
    draft = replace(plan, error_sd=1.0, r_squared=None, pilot=None)
    planner = Planner(draft, parsed, entries, roles, level, dict(effect or {}), name)
    stated = dict(plan.coefficients)
    if pilot is not None:
        planner = _from_pilot(planner, pilot)
    elif plan.r_squared is not None:
        planner = replace(planner, plan=replace(draft, error_sd=_sd_from_share(planner, plan.r_squared)))
    else:
        planner = replace(planner, plan=replace(draft, error_sd=plan.error_sd))
    study = planner(plan.rows)
    supplied = _effects_of_coefficients(study, stated)
    if not supplied:
        return study
    told = tuple(
        f"power for '{focal}' is judged at {value:g}, from the stated coefficients, as no effect is given"
        for focal, value in supplied.items()
    )
    return replace(planner, effect={**planner.effect, **supplied}, notices=(*planner.notices, *told))(plan.rows)


def _columns(plan: StudyPlan, formula: Formula, roles: Mapping[str, str], known: Sequence[str]) -> dict[str, PlannedColumn]:
    """Columns of the plan, and from the pilot those that it does not describe."""
    needed = list(dict.fromkeys([*formula.columns, *roles.values()]))
    missing = [name for name in needed if name not in plan.columns]
    for name in missing:
        if name not in known:
            raise ScenarioError(f"the plan has no column '{name}'", where="study.plan.columns", remedy=nearest(name, known))
    if not missing or plan.pilot is None:
        return dict(plan.columns)
    return {**plan.columns, **plan.pilot.columns(missing)}


def _check_roles(plan: StudyPlan, roles: Mapping[str, str]) -> None:
    for role in ("order", "weights"):
        if role in roles and not plan.columns[roles[role]].numeric:
            raise ScenarioError(
                f"'{roles[role]}' holds labels, and {role} needs numbers", where=f"study.{role}", remedy="Name another column."
            )
    if "weights" in roles:
        table = plan.layout.table(plan.rows, np.random.default_rng([plan.seed, _VARIANCE_STREAM]))
        least = float(table[roles["weights"]].min())
        if least <= 0.0:
            raise ScenarioError(
                f"weights drawn from '{roles['weights']}' go down to {least:.4g}",
                where="study.weights",
                remedy="Weights are positive: use levels, uniform or lognormal.",
            )


def _sd_from_share(planner: Planner, r_squared: float) -> float:
    """Sd = sqrt(V (1 - R^2) / R^2), V the variance of the mean over the rows."""
    plan = planner.plan
    generator = np.random.default_rng([plan.seed, _VARIANCE_STREAM])
    designs = [planner(plan.rows).design]
    if plan.layout.random and not plan.fixed:
        rows = planner(plan.rows).rows
        designs = [rows.draw(generator) for _ in range(_TABLES)]
    variances = [0.0 if design.fitted is None else float(np.var(design.fitted)) for design in designs]
    variance = float(np.mean(variances))
    if variance == 0.0:
        raise ScenarioError(
            f"r_squared is {r_squared:g}, and the coefficients explain nothing",
            where="study.plan.r_squared",
            remedy="State coefficients, or give error_sd.",
        )
    return math.sqrt(variance * (1.0 - r_squared) / r_squared)


def _from_pilot(planner: Planner, pilot: Pilot) -> Planner:
    """Coefficients not stated, and the error SD with its range, from the fit to the pilot."""
    plan, response = planner.plan, planner.formula.response_columns[0]
    table = _pilot_table(planner, pilot, response)
    model = Model.of(planner.formula, planner.frame(plan.rows, np.random.default_rng(plan.seed)))[0]
    frame = prepared(plan, planner.formula, table, {})
    try:
        design = Design(matrix_of(model, frame), model.names)
    except DesignError as error:
        raise DesignError(
            f"the pilot cannot carry the model: {error.what}",
            where="study.plan.pilot",
            remedy="State error_sd and the coefficients, or fit a smaller model.",
        ) from error
    fitted, error_sd = reference_fit(design, frame[response].to_numpy(dtype=float), response)
    coefficients = {**dict(zip(model.names, map(float, fitted), strict=True)), **plan.coefficients}
    return replace(
        planner,
        plan=replace(plan, error_sd=error_sd, coefficients=coefficients),
        notices=(*planner.notices, pilot.warning(error_sd, design.df)),
        sd_range=pilot.sd_range(error_sd, design.df),
    )


def _pilot_table(planner: Planner, pilot: Pilot, response: str) -> pd.DataFrame:
    """Response and predictors of the pilot, with the levels of the plan."""
    if response not in pilot.frame.columns or not pd.api.types.is_numeric_dtype(pilot.frame[response]):
        raise TableError(
            f"the pilot has no column of numbers for the response '{response}'",
            where="study.plan.pilot",
            remedy=nearest(response, map(str, pilot.frame.columns)),
        )
    table = pd.DataFrame({response: pilot.frame[response].to_numpy(dtype=float)})
    shown = planner.plan.layout.table(planner.plan.rows, np.random.default_rng(planner.plan.seed))
    for name in planner.formula.columns:
        if name not in pilot.frame.columns:
            raise TableError(
                f"the pilot has no column '{name}', which the model uses",
                where="study.plan.pilot",
                remedy="Add it, or state error_sd and the coefficients.",
            )
        column = pilot.frame[name]
        if not isinstance(shown[name].dtype, pd.CategoricalDtype):
            if not pd.api.types.is_numeric_dtype(column):
                raise TableError(
                    f"'{name}' is text in the pilot and a number in the plan",
                    where="study.plan.pilot",
                    remedy="Make them agree.",
                )
            table[name] = column.to_numpy(dtype=float)
            continue
        levels = [str(level) for level in shown[name].cat.categories]
        strange = sorted(set(column.astype(str)) - set(levels))
        if strange:
            raise TableError(
                f"the pilot has '{name}' = '{strange[0]}', and the plan has not",
                where="study.plan.pilot",
                remedy=nearest(strange[0], levels),
            )
        table[name] = pd.Categorical(column.astype(str), categories=levels)
    return table


def _effects_of_coefficients(study: Study, stated: Mapping[str, float]) -> dict[str, float]:
    """What the stated coefficients make of each focal coefficient or contrast that has no effect of its own."""
    found = {}
    for focus in study.focus:
        if focus.effect is not None or focus.kind not in (FocusKind.COEFFICIENT, FocusKind.CONTRAST):
            continue
        touched = [name for name, weight in zip(study.design.names, focus.L[0], strict=True) if weight != 0.0]
        value = float((focus.L @ study.coefficients - focus.null)[0])
        if value != 0.0 and all(name in stated for name in touched):
            found[focus.name] = value
    return found
