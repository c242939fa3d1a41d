"""What is known about the study and the run, as names with values and as small tables."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from withstand.report.tables import Cell, Table
from withstand.report.view import View
from withstand.report.words import count, listing, number, plural


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
