"""What to worry about first: for one focal quantity and one procedure, one finding in words a departure."""

from __future__ import annotations

import math
from dataclasses import dataclass

from withstand.report.view import Axis, Reading, View
from withstand.report.words import SeverityWords, number, percent, share, short_share, times

CLOSE = 0.02
"""Two ends of a bracket that differ by less, relative to the larger, are one severity to a reader."""


@dataclass(frozen=True)
class Worry:
    """One departure, in words.

    Parameters
    ----------
    axis : Axis
        Which one.
    name : str
        As shown to people.
    verdict : str
        At the worst plausible severity (the last tried, where the data do not say); empty where there is none.
    turns : str
        Where the verdict turns.
    allowed : str
        Which severities the residuals are compatible with.
    covers : str
        Coverage at the worst plausible severity, with its error.
    rows : str
        What more rows do.
    instead : str
        Which procedure holds there, and its premium.
    noticed : str
        The chance that a check of the residuals notices the departure where the verdict turns.
    """

    axis: Axis
    name: str
    verdict: str
    turns: str
    allowed: str
    covers: str
    rows: str
    instead: str
    noticed: str


def worries(view: View, procedure: str, focus: str) -> list[Worry]:
    """One finding a departure, what to worry about first coming first."""
    found = []
    for axis in view.ranked(focus):
        words = SeverityWords.of(view.ladders[axis])
        row = view.rank(axis, procedure, focus)
        tipping = view.tipping(axis, procedure, focus)
        seen = math.nan if tipping is None else float(tipping.detectability_at_tipping)
        found.append(
            Worry(
                axis,
                view.name(axis),
                _verdict(view, axis, procedure, focus),
                turning(view, axis, procedure, focus),
                allowed(view, axis, procedure, focus) or "not known",
                _covers(view, axis, procedure, focus, words),
                _rows(row),
                _instead(view, axis, row, focus),
                "" if math.isnan(seen) else f"{percent(seen, decimals=0)} %",
            )
        )
    return found


def turning(view: View, axis: Axis, procedure: str, focus: str) -> str:
    """Where the verdict turns, from the tipping table or, without it, from the verdicts on the ladder."""
    ladder = view.ladders[axis]
    words = SeverityWords.of(ladder)
    verdicts = {severity: view.verdict(axis, severity, procedure, focus) for severity, _ in ladder}
    held = [severity for severity, verdict in verdicts.items() if verdict is not None and verdict[0] == "holds"]
    gave = [severity for severity, verdict in verdicts.items() if verdict is not None and verdict[0] == "gives"]
    tipping, last, first = math.nan, held[-1] if held else math.nan, gave[0] if gave else math.nan
    row = view.tipping(axis, procedure, focus)
    if row is not None:
        tipping, last, first = float(row.tipping), float(row.last_holds), float(row.first_gives)
    neutral = view.neutral(axis)
    if first == neutral and not axis.stack:
        return "gives even when nothing is wrong"
    # Below neutral the departure is turned round, and severities fall as it gets worse.
    turned = next((s for s in (first, tipping, last) if math.isfinite(s)), neutral) < neutral
    down = " down" if turned else ""
    if math.isfinite(first):
        if math.isfinite(last) and (last > first if turned else last < first) and abs(first - last) > CLOSE * abs(first):
            return f"gives between {words.label(last)} and {words.label(first)}"
        return f"gives from {words.label(tipping if math.isfinite(tipping) else first)}{down}"
    if math.isfinite(tipping):
        return f"gives from {words.label(tipping)}{down}"
    if not any(verdicts.values()) and not math.isfinite(last):
        return "not judged"
    if not math.isfinite(last):
        return "unsettled"
    if last == neutral and not axis.stack:
        return "unsettled from the least tried on"
    farthest = last <= ladder[0][0] if turned else last >= ladder[-1][0]
    return f"holds{down} to {words.label(last)}, {'the most tried' if farthest else 'unsettled beyond'}"


def allowed(view: View, axis: Axis, procedure: str, focus: str) -> str:
    """The plausible severities; empty where the residuals do not say."""
    row = view.tipping(axis, procedure, focus)
    if row is None or math.isnan(row.observed):
        return ""
    low, high = float(row.plausible_low), float(row.plausible_high)
    words = SeverityWords.of(view.ladders[axis])
    if math.isnan(low) or math.isnan(high):
        return "none that was tried"
    if math.isinf(low) and math.isinf(high):
        return "any that was tried"
    if math.isinf(low):
        return f"{words.label(high)} or less"
    # A label with the reciprocal, such as degrees of freedom, falls as the severity rises.
    return f"{words.label(low)} or {'fewer' if words.inverse else 'more'}" if math.isinf(high) else words.span(low, high)


def _verdict(view: View, axis: Axis, procedure: str, focus: str) -> str:
    row = view.rank(axis, procedure, focus)
    if row is not None:
        return str(row.verdict_there)
    judged = view.verdict(axis, view.worst(axis, focus), procedure, focus)
    return "" if judged is None else judged[0]


def _covers(view: View, axis: Axis, procedure: str, focus: str, words: SeverityWords) -> str:
    row = view.rank(axis, procedure, focus)
    severity = view.worst(axis, focus) if row is None else float(row.worst_severity)
    label = words.label(severity) if row is None else str(row.worst_label)
    bounds = view.bounds or ()
    where = "with nothing wrong" if severity == view.neutral(axis) and not axis.stack else f"at {label}"
    reading = _reading(view, axis, severity, procedure, focus, "coverage")
    if reading is not None:
        judged = view.verdict(axis, severity, procedure, focus)
        besides = ""
        if judged is not None and judged[0] != "holds" and judged[1] not in ("coverage", "size"):
            besides = f"; {_besides(judged[1], judged[2])}"
        return f"{short_share(reading, bounds)} % {where}{' (exact)' if reading.exact else ''}{besides}"
    if row is None or math.isnan(row.coverage_there):
        size = _reading(view, axis, severity, procedure, focus, "size")
        return "takes simulation" if size is None else f"size {share(size)} {where}"
    return f"{percent(float(row.coverage_there), bounds)} % {where}{' (exact)' if row.method == 'exact' else ''}"


def _besides(measure: str, value: float) -> str:
    """The measure that decided, where coverage did not."""
    return f"bias {number(value, 2)} SD" if measure == "bias_in_sd" else f"{measure.replace('_', ' ')} {number(value, 2)}"


def _reading(view: View, axis: Axis, severity: float, procedure: str, focus: str, measure: str) -> Reading | None:
    if severity == view.neutral(axis) and not axis.stack:
        return view.baseline(procedure, focus, measure)
    return view.reading(axis, severity, procedure, focus, measure)


def _rows(row: object) -> str:
    cure = getattr(row, "cure", None)
    told = cure if isinstance(cure, str) else ""
    limit = float(getattr(row, "limit", math.nan))
    return f"{told} (covers {percent(limit)} % in the limit)" if told and math.isfinite(limit) else told


def _instead(view: View, axis: Axis, row: object, focus: str) -> str:
    holding = getattr(row, "holding_procedure", None)
    there = axis, float(getattr(row, "worst_severity", math.nan))
    if row is None or getattr(row, "verdict_there", "") == "holds":
        return ""
    if not isinstance(holding, str) or not holding:
        unjudged = [name for name in view.planned_procedures(focus) if view.verdict(*there, name, focus) is None]
        return f"none of the procedures {'judged so far' if unjudged else 'tried'} holds there"
    if holding == getattr(row, "procedure", ""):
        return ""
    ratio = width_ratio(view, holding, focus)
    return f"{holding} holds" + ("" if math.isnan(ratio) else f", {times(ratio)} when nothing is wrong")


def width_ratio(view: View, procedure: str, focus: str) -> float:
    """Mean width of the interval over that of the reference procedure, when nothing is wrong; nan where there is none."""
    own, base = (view.baseline(name, focus, "width") for name in (procedure, view.reference))
    return math.nan if own is None or base is None or not base.value > 0.0 else own.value / base.value
