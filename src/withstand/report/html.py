"""The page: one file with everything in it, for a screen, for paper and for a screen reader."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from withstand.lab.outcome import Outcome
from withstand.report import account, prose
from withstand.report.figures import FIGURES, as_svg, shown
from withstand.report.inline import describe, inline_svg
from withstand.report.style import own_style
from withstand.report.tables import (
    Cell,
    Table,
    failures_table,
    premium_table,
    protection_table,
    turning_table,
    verdict_table,
    worry_table,
)
from withstand.report.view import View, view_of
from withstand.report.words import count, listing, number, plural

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
    tables = [premium_table(view, focus)]
    return [*tables, protection_table(view, focus)] if view.ladders and view.has("coverage", focus) else tables


def _name(outcome: Outcome) -> str:
    return str(outcome.facts.get("name") or outcome.title)


def study_facts(view: View) -> list[tuple[str, str]]:
    """Names and values of what is known about the study; what is not known is left out."""
    facts = view.outcome.facts
    rows = {"fixed": "as they are, in every replicate", "resampled": "drawn with replacement in every block"}
    known = [
        ("Rows used", count(view.n) if view.n is not None else ""),
        ("Rows read", _known(facts.get("rows_read"))),
        ("Model columns", _known(facts.get("p"))),
        ("Residual degrees of freedom", _known(facts.get("df"))),
        ("Confidence level", f"{number(100.0 * view.level)} %"),
        ("Rows in a replicate", rows.get(str(facts.get("rows_mode")), str(facts.get("rows_mode") or ""))),
        ("Largest leverage", _known(facts.get("leverage_max"))),
        ("Rows of high leverage", listing([_row(row) for row in facts.get("leverage_rows") or []])),
        ("Order", str(facts.get("order") or "")),
        ("Groups", str(facts.get("groups") or "")),
        ("Known weights", str(facts.get("weights") or "")),
        ("Error SD", _known(facts.get("error_sd"))),
        ("R squared", _known(facts.get("r_squared"))),
        ("Skewness of the residuals", _known(facts.get("skewness"))),
        ("Kurtosis of the residuals", _known(facts.get("kurtosis"))),
    ]
    return [(name, value) for name, value in known if value]


def fact_tables(view: View) -> list[Table]:
    """Coefficients, variance inflation and dropped rows, where they are known."""
    facts = view.outcome.facts
    tables = []
    if facts.get("coefficients"):
        rows = tuple(
            (Cell(str(one["name"])), Cell(number(one["estimate"], 4)), Cell(number(one["se"], 4)))
            for one in facts["coefficients"]
        )
        tables.append(Table("Coefficients of the reference fit", ("Term", "estimate", "standard error"), rows))
    if facts.get("vif"):
        rows2 = tuple((Cell(str(name)), Cell(number(float(value)))) for name, value in facts["vif"].items())
        tables.append(Table("Variance inflation factors", ("Term", "factor"), rows2))
    if facts.get("dropped"):
        rows2 = tuple((Cell(str(name)), Cell(count(lost))) for name, lost in facts["dropped"].items())
        tables.append(Table("Rows dropped for a missing value", ("First column that lacks one", "rows"), rows2))
    return tables


def provenance_facts(view: View) -> list[tuple[str, str]]:
    """What is needed to repeat the run."""
    run = view.outcome.provenance
    known = [
        ("Seed", str(run.get("seed", ""))),
        ("Study digest", str(run.get("study_digest", ""))),
        ("Plan digest", str(run.get("plan_digest", ""))),
        ("Started", str(run.get("started", ""))),
        ("Took", f"{number(float(run['seconds']))} s" if run.get("seconds") is not None else ""),
        ("Workers", str(run.get("workers", ""))),
        *((f"Version of {name}", str(version)) for name, version in (run.get("versions") or {}).items()),
    ]
    if view.other_sizes:
        told = listing([plural(size, "row") for size in view.other_sizes])
        known.append(("Other sample sizes in measures.csv", told))
    return [(name, value) for name, value in known if value]


def _known(value: Any) -> str:
    return "" if value is None or math.isnan(float(value)) else number(float(value))


def _row(row: Any) -> str:
    if not isinstance(row, Mapping):
        return str(row)
    return ", ".join(f"{name} {number(value) if isinstance(value, float) else value}" for name, value in row.items())
