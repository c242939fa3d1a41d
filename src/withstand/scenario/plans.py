"""From the planned study of a scenario to a study."""

from __future__ import annotations

from typing import Any

from withstand.errors import ScenarioError
from withstand.scenario.planned import ColumnPart, PlanPart
from withstand.scenario.schema import StudyPart
from withstand.scenario.source import Source
from withstand.study.columns import Blocks, Drawn, InSequence, Levels, PlannedColumn, Shares
from withstand.study.pilot import Pilot
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study
from withstand.study.study import Study
from withstand.study.table import read_table


def study_of_plan(part: StudyPart, plan: PlanPart, title: str, source: Source, seed: int) -> Study:
    """The study that a scenario plans.

    Parameters
    ----------
    part : StudyPart
        Model, focus, roles, level and effects.
    plan : PlanPart
        Rows, columns, coefficients and the size of the errors.
    title : str
        What people see.
    source : Source
        Where the scenario was read from; a pilot is looked for beside it.
    seed : int
        Seed of the table that is shown, and of the only one where columns are drawn once.

    Raises
    ------
    InputError
        If the plan cannot be carried out.
    """
    if part.rows != "fixed":
        raise ScenarioError(
            f"rows is '{part.rows}', and a plan has no rows to draw from",
            where="study.rows",
            remedy='Leave it out; draw = "fresh" in the plan draws its columns anew in each block.',
        )
    if part.decimal is not None and plan.pilot is None:
        raise ScenarioError("decimal is for a table, and this plan reads none", where="study.decimal", remedy="Leave it out.")
    pilot = None if plan.pilot is None else Pilot(read_table(source.folder / plan.pilot, decimal=part.decimal))
    made = StudyPlan(
        rows=plan.rows,
        columns={name: column_of(column) for name, column in plan.columns.items()},
        coefficients=plan.coefficients,
        error_sd=plan.error_sd,
        r_squared=plan.r_squared,
        pilot=pilot,
        draw=plan.draw,
        attrition=plan.attrition,
        seed=seed,
    )
    entries = [part.focus] if isinstance(part.focus, str) else part.focus
    return planned_study(
        made,
        part.model,
        focus=[entry if isinstance(entry, str) else {"at": entry.at, "of": entry.of} for entry in entries],
        order=part.order,
        groups=part.groups,
        weights=part.weights,
        level=part.level,
        effect=part.effect,
        name=title,
    )


def column_of(part: ColumnPart) -> PlannedColumn:
    """A column of the plan from what the scenario says of it."""
    match part.way:
        case "levels":
            levels: list[Any] = list(part.levels or ())
            return Levels(tuple(levels))
        case "law":
            return Drawn(str(part.law), part.mean, part.sd, part.low, part.high, part.correlated or {})
        case "shares":
            return Shares(part.shares or {}, bool(part.by_count))
        case "blocks_of":
            return Blocks(part.blocks_of or 0)
        case _:
            return InSequence()
