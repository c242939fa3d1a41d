"""The page: one file with everything in it, for a screen, for paper and for a screen reader."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from withstand.lab.outcome import Outcome
from withstand.report import account, prose
from withstand.report.comparison import comparisons
from withstand.report.facts import fact_tables, provenance_facts, study_facts
from withstand.report.figures import FIGURES, as_svg, shown
from withstand.report.inline import describe, inline_svg
from withstand.report.style import own_style
from withstand.report.tables import (
    Table,
    failures_table,
    premium_table,
    protection_table,
    turning_table,
    verdict_table,
    worry_table,
)
from withstand.report.view import View, view_of

Pictures = Mapping[tuple[str, str], bytes]
"""SVG by focus and name of the figure."""


def draw_all(outcome: Outcome) -> dict[tuple[str, str], bytes]:
    """Every figure that is shown, as SVG, by focus and name."""
    view = view_of(outcome)
    pictures = {}
    for focus in view.foci:
        for name in shown(view, focus):
            with own_style():
                drawn = FIGURES[name](view, focus)
            pictures[focus, name] = as_svg(drawn)
    return pictures


def page(outcome: Outcome, pictures: Pictures | None = None) -> str:
    """The report as a page.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    pictures : mapping, optional
        From `draw_all`, if they are at hand already.
    """
    view = view_of(outcome)
    drawn = draw_all(outcome) if pictures is None else pictures
    return _environment().get_template("report.html.j2").render(
        title=outcome.title,
        headline=outcome.headline,
        opening=[f"{_name(outcome)}: {account.rows_sentence(view)}.", f"Tolerance: {account.tolerance_sentence(view)}"],
        formula=outcome.facts.get("formula", ""),
        effort=account.effort_sentence(view),
        foci=[_focus(view, focus, i, drawn) for i, focus in enumerate(view.foci, 1)],
        failures=failures_table(view),
        facts=study_facts(view),
        fact_tables=fact_tables(view),
        notices=outcome.notices,
        refusals=outcome.refusals,
        targets=outcome.provenance.get("targets", []),
        provenance=provenance_facts(view),
        prose=prose,
    )  # fmt: skip


def _environment() -> Environment:
    return Environment(
        loader=PackageLoader("withstand.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def fragment(outcome: Outcome) -> str:
    """What a notebook shows: the headline and the tables on what to worry about first."""
    view = view_of(outcome)
    tables = [worry_table(view, view.leading(focus), focus) for focus in view.foci if view.leading(focus)]
    return _environment().get_template("fragment.html.j2").render(title=outcome.title, headline=outcome.headline, tables=tables)


def _focus(view: View, focus: str, place: int, drawn: Pictures) -> dict[str, Any]:
    lead = view.leading(focus)
    figures = [
        {
            "title": prose.FIGURE_TITLES[name],
            "note": prose.FIGURE_NOTES[name],
            "svg": inline_svg(drawn[focus, name], f"f{place}{name}", describe(view, name, focus)),
        }
        for name in FIGURES
        if (focus, name) in drawn
    ]
    return {
        "name": focus,
        "place": place,
        "estimate": account.estimate_sentence(view, focus),
        "baseline": account.baseline_sentence(view, lead, focus) if lead else "",
        "lead": lead,
        "worry": worry_table(view, lead, focus) if lead else None,
        "figures": figures,
        "verdicts": [verdict_table(view, focus), turning_table(view, focus)] if lead and view.ladders else [],
        "procedures": _procedure_tables(view, focus) if lead else [],
    }


def _procedure_tables(view: View, focus: str) -> list[Table]:
    tables = [premium_table(view, focus), *comparisons(view, focus)]
    return [*tables[:1], protection_table(view, focus), *tables[1:]] if view.ladders and view.has("coverage", focus) else tables


def _name(outcome: Outcome) -> str:
    return str(outcome.facts.get("name") or outcome.title)
