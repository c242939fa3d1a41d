"""A commented scenario for the user's own table, to be edited."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from dataclasses import fields
from typing import Any

from withstand.departures import Departure, HeavyTails
from withstand.judgement.tolerance import CRITERIA
from withstand.lab.plan import Plan
from withstand.procedures.base import REGISTRY as PROCEDURES
from withstand.scenario.options import FROM_FOCUS
from withstand.scenario.schema import SimulationPart
from withstand.scenario.toml_text import toml_key, toml_value
from withstand.study.study import Study

_STUDY_COMMENTS = {
    "data": "relative to this file",
    "model": "",
    "focus": 'coefficients, terms, contrasts such as "g[a] - g[b]", or { at = { x = 1 }, of = "mean" }',
    "order": "order in time; gaps are taken for what they are",
    "groups": "rows of one group may share part of their error",
    "weights": "known weights, reciprocals of the error variance",
    "decimal": "decimal sign of the table",
    "rows": '"fixed" as they are, or "resampled" with replacement',
    "level": "of intervals; tests are at 1 - level",
    "effect": "the smallest effect that matters; power is judged at it",
}
"""What is said of each key of [study], in this order."""


def scaffold(study: Study, plan: Plan, written: Mapping[str, Any]) -> str:
    """A scenario that says in full what would be tried if it were left out.

    Parameters
    ----------
    study : Study
        What the user has.
    plan : Plan
        What would be tried.
    written : mapping
        The [study] table as the user gave it.

    Returns
    -------
    str
        TOML with comments; loads back to the same study and plan.
    """
    parts = [
        f"# A scenario for `withstand run`. {study.n} rows, {study.design.p} model columns. Lines after # are comments.",
        "",
        f"title = {toml_value(study.name)}",
        "",
        "[study]",
        *_study_lines(study, written),
        "",
        *_comment(
            "Departures to try, one table each, along a ladder of severities. Remove what you need not fear, change the "
            "ladders, or remove all of them to have the choice made for you. `withstand list departures` shows every kind "
            "with its unit. A line such as "
            'with = [{ kind = "skew", severity = 1 }] adds departures that act at the same time.'
        ),
        *(line for axis in plan.axes for line in _departure_lines(axis.departure)),
        "",
        "[procedures]",
        *_comment(f"The first is your own. Known: {', '.join(PROCEDURES)}."),
        f"use = {toml_value([procedure.name for procedure in plan.procedures])}",
        "",
        "[tolerance]",
        f"size = {toml_value(plan.tolerance.size)}",
        *_comment(f"Known: {', '.join(CRITERIA)}; or the accepted range of the size, such as [0.03, 0.07]."),
        f"bias = {toml_value(plan.tolerance.bias or False)}   # in SDs of the estimate",
        "",
        "[simulation]",
        f"seed = {plan.seed}",
        f"repetitions = {plan.repetitions}   # at least",
        f"most = {plan.most}   # in the search for a verdict",
        f"wrong_verdict = {plan.wrong_verdict}   # {SimulationPart.model_fields['wrong_verdict'].description}",
    ]
    return "\n".join(parts) + "\n"


def _study_lines(study: Study, written: Mapping[str, Any]) -> list[str]:
    lines = []
    for key, comment in _STUDY_COMMENTS.items():
        value = written.get(key)
        if key == "focus" and not value:
            value = [focus.name for focus in study.focus]
        if key == "level":
            value = study.level
        if key == "effect" and not value:
            scalar = next((focus.name for focus in study.focus if focus.scalar), None)
            if scalar is not None:
                lines.append(f"# effect = {{ {toml_key(scalar)} = 1.0 }}   # {comment}; replace 1.0")
        elif value:
            lines.append(f"{key} = {toml_value(value)}" + (f"   # {comment}" if comment else ""))
        elif key in ("order", "groups"):
            lines.append(f'# {key} = "..."   # {comment}')
    return lines


def _departure_lines(departure: Departure) -> list[str]:
    """One table, with the options that are not at their defaults."""
    options = {
        option.name: getattr(departure, option.name)
        for option in fields(departure)
        if option.name not in FROM_FOCUS | {"severity"}
        and (option.name == "along" or getattr(departure, option.name) != option.default)
    }
    lines = ["", "[[departure]]", f"kind = {toml_value(departure.kind)}   # {departure.title}"]
    lines += [f"{name} = {toml_value(value)}" for name, value in options.items()]
    if isinstance(departure, HeavyTails) and min(departure.ladder) > 0.0:
        freedom = [float(f"{1.0 / severity:.12g}") for severity in departure.ladder]
        return [*lines, f"df = {toml_value(freedom)}   # degrees of freedom of Student's t; fewer are heavier"]
    lines.append(f"severity = {toml_value(departure.ladder)}   # {departure.unit}")
    return lines


def _comment(text: str) -> list[str]:
    return [f"# {line}" for line in textwrap.wrap(text, 118, break_on_hyphens=False)]
