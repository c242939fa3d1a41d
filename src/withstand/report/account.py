"""Sentences about the study and the run that the screen, the page and the texts share."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from withstand.report.view import View
from withstand.report.words import count, listing, number, percent, plural


def rows_sentence(view: View) -> str:
    """How many rows were read, dropped and used; the planned number where nothing was read."""
    facts = view.outcome.facts
    used = "an unknown number of rows" if view.n is None else plural(view.n, "row")
    if facts.get("rows_read") is None:
        return f"{used}, planned or as given"
    dropped: Mapping[str, int] = facts.get("dropped") or {}
    lost = sum(dropped.values())
    if not lost:
        return f"{used}, none dropped"
    causes = listing([f"{count(lacking)} without {column}" for column, lacking in dropped.items()])
    return f"{used} used of {count(facts['rows_read'])} read; {count(lost)} dropped ({causes})"


def tolerance_sentence(view: View) -> str:
    """What the user can live with, and who set it."""
    tolerance = view.outcome.provenance.get("tolerance") or {}
    parts = []
    if view.bounds is not None:
        low, high = (number(100.0 * bound) for bound in view.bounds)
        by = f", following {tolerance['source']}" if tolerance.get("source") else ""
        parts.append(f"a {percent(view.level, decimals=0)} % interval should cover {low} to {high} %{by}")
    if tolerance.get("bias") is not None:
        parts.append(f"bias may be at most {number(float(tolerance['bias']))} SD of the estimate")
    return f"{'; '.join(parts)}." if parts else "none was stated."


def effort_sentence(view: View) -> str:
    """How sure the numbers are."""
    run = view.outcome.provenance
    if run.get("simulated_cells") == 0 and run.get("exact_cells") is not None:
        return f"{plural(int(run['exact_cells']), 'cell')} exact, none simulated."
    parts = []
    if run.get("exact_cells") is not None and run.get("simulated_cells") is not None:
        parts.append(f"{plural(int(run['exact_cells']), 'cell')} exact, {count(run['simulated_cells'])} simulated")
    if run.get("repetitions") is not None:
        most = f" to {count(run['most'])}" if run.get("most") is not None and run["most"] != run["repetitions"] else ""
        parts.append(f"{count(run['repetitions'])}{most} replicates each")
    told = " with ".join(parts)
    if run.get("wrong_verdict") is not None:
        chance = f"each simulated verdict is wrong with a chance of at most {number(100.0 * run['wrong_verdict'])} %"
        told = f"{told}; {chance}" if told else chance
    return f"{told[0].upper()}{told[1:]}." if told else ""


def baseline_sentence(view: View, procedure: str, focus: str) -> str:
    """What a procedure does when nothing is wrong."""
    from_measure = {"coverage": "covers", "size": "rejects a true null hypothesis in"}
    for measure, verb in from_measure.items():
        reading = view.baseline(procedure, focus, measure)
        if reading is not None:
            told = f"{percent(reading.value, view.bounds or () if measure == 'coverage' else ())}"
            error = "exact" if reading.exact else f"± {number(100.0 * reading.reach, 1)}"
            return f"When nothing is wrong it {verb} {told} % ({error})."
    return ""


def finding(view: View, focus: str) -> dict[str, Any]:
    """What the fit says about a focal quantity: the mapping of the facts; empty for a plan."""
    return next((dict(told) for told in view.outcome.facts.get("focus", []) if told["name"] == focus), {})


def estimate_sentence(view: View, focus: str) -> str:
    """The estimate with its interval, and the effect that power is judged at; empty where neither is known."""
    told = finding(view, focus)
    parts = []
    if _known(told.get("estimate")):
        span = ""
        if _known(told.get("low")) and _known(told.get("high")):
            span = f" ({percent(view.level, decimals=0)} % interval {number(told['low'])} to {number(told['high'])})"
        parts.append(f"estimate {number(told['estimate'])}{span}")
    if _known(told.get("effect")):
        parts.append(f"smallest effect that matters {number(told['effect'])}")
    return "; ".join(parts)


def _known(value: object) -> bool:
    return isinstance(value, (int, float)) and not math.isnan(value)
