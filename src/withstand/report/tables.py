"""The compact tables of the page, the summary and the statement, as values that any of them can lay out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from withstand.measures.names import ADJUSTED_POWER
from withstand.report.view import BASELINE, Axis, Reading, View
from withstand.report.words import SIGNS, percent, points, share, short_share
from withstand.report.worry import turning, width_ratio, worries

NO_VALUE = "–"


@dataclass(frozen=True)
class Cell:
    """One cell.

    Parameters
    ----------
    text : str
        What it shows.
    kind : str
        A verdict, 'wasteful', 'none' or empty; the page colours by it.
    said : str
        What a screen reader says before the text, because a sign or a colour says it to others.
    """

    text: str
    kind: str = ""
    said: str = ""


@dataclass(frozen=True)
class Table:
    """A table with a head row and one or more head columns.

    Parameters
    ----------
    caption : str
        What it shows.
    columns : tuple of str
        Head row.
    rows : tuple of tuple of Cell
        Each as long as `columns`.
    heads : int
        How many cells at the start of a row name it.
    note : str
        How to read it.
    """

    caption: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    heads: int = 1
    note: str = ""


def worry_table(view: View, procedure: str, focus: str) -> Table:
    """What to worry about first, one row a departure."""
    columns = (
        "If this is wrong", "the interval", "your data allow", "it then covers", "more rows", "instead",
        "a residual check notices it",
    )  # fmt: skip
    rows = []
    for worry in worries(view, procedure, focus):
        told = (worry.turns, worry.allowed, worry.covers, worry.rows, worry.instead, worry.noticed)
        cells = [Cell(text or NO_VALUE) for text in told]
        cells[2] = Cell(_signed(worry.verdict, worry.covers), worry.verdict, f"{worry.verdict}, " if worry.verdict else "")
        rows.append((Cell(worry.name), *cells))
    note = (
        "Coverage is that at the worst severity your data allow, or the last one tried where the data do not say; the "
        "sign is the verdict there. The last column is the chance that the usual 5 % check of the residuals notices the "
        "departure where the interval starts to give."
    )
    return Table(f"What to worry about first: {focus} by {procedure}", columns, tuple(rows), note=note)


def verdict_table(view: View, focus: str) -> Table:
    """Verdict and coverage of every procedure under every departure and severity, and when nothing is wrong."""
    first = [Cell("nothing wrong"), Cell(NO_VALUE)]
    rows = [(*first, *(_baseline_cell(view, procedure, focus) for procedure in view.procedures))]
    for axis in view.ranked(focus):
        for severity, label in view.ladders[axis]:
            cells = [_verdict_cell(view, axis, severity, procedure, focus) for procedure in view.procedures]
            rows.append((Cell(view.name(axis)), Cell(label), *cells))
    note = (
        f"{SIGNS['holds']} holds, {SIGNS['gives']} gives, {SIGNS['unsettled']} unsettled. Numbers are coverage in percent "
        "(size where there is no interval); without ± they are exact, ± is the half-width of the 95 % Monte Carlo "
        "interval. ↑ covers more than asked: wider than needed. Another measure is named where it decided."
    )
    return Table(f"Verdicts: {focus}", ("Departure", "severity", *view.procedures), tuple(rows), heads=2, note=note)


def turning_table(view: View, focus: str) -> Table:
    """Where each procedure starts to give, one row a departure."""
    rows = []
    for axis in view.ranked(focus):
        cells = []
        for procedure in view.procedures:
            told = turning(view, axis, procedure, focus)
            kind, _, rest = told.partition(" ")
            known = kind in SIGNS and rest
            cells.append(Cell(f"{SIGNS[kind]} {rest}", kind, f"{kind}, ") if known else Cell(told, "none"))
        rows.append((Cell(view.name(axis)), *cells))
    return Table(f"Where each procedure starts to give: {focus}", ("Departure", *view.procedures), tuple(rows))


def premium_table(view: View, focus: str) -> Table:
    """What each procedure costs when nothing is wrong: one row a procedure."""
    power = view.has("power", focus)
    detectable = view.has("detectable_effect", focus)
    columns = ["Procedure", "covers", "size", "width ratio"]
    adjusted = power and view.has(ADJUSTED_POWER, focus)
    columns += [*(["power"] if power else []), *(["power, size-adjusted"] if adjusted else [])]
    columns += [*(["detectable effect"] if detectable else []), "most failures"]
    rows = []
    for procedure in view.procedures:
        ratio = width_ratio(view, procedure, focus)
        cells = [_share_cell(view, view.baseline(procedure, focus, "coverage"), view.bounds)]
        cells.append(_share_cell(view, view.baseline(procedure, focus, "size"), _mirror(view.bounds)))
        cells.append(Cell(f"{ratio:.2f}" if ratio == ratio else NO_VALUE))
        if power:
            cells.append(_share_cell(view, view.baseline(procedure, focus, "power"), None))
        if adjusted:
            cells.append(_share_cell(view, view.baseline(procedure, focus, ADJUSTED_POWER), None))
        if detectable:
            found = view.baseline(procedure, focus, "detectable_effect")
            cells.append(Cell(NO_VALUE if found is None else f"{found.value:.3g}"))
        cells.append(_most_failures(view, procedure, focus))
        rows.append((Cell(procedure), *cells))
    note = (
        f"Width ratio is the mean width of the interval over that of {view.reference}. Read power beside size: a test that "
        "rejects too often when there is nothing has its power for free. Size-adjusted power has the critical value that makes "
        "the size nominal; it is given where the size is outside the tolerance. Most failures is the largest share of "
        "replicates without an answer in any world; a failure counts as neither covering nor rejecting."
    )
    return Table(f"Premium, when nothing is wrong: {focus}", tuple(columns), tuple(rows), note=note)


def protection_table(view: View, focus: str) -> Table:
    """Coverage that each procedure saves under each departure, in percentage points against the reference."""
    rows = []
    for axis in view.ranked(focus):
        severity = view.worst(axis, focus)
        label = dict(view.ladders[axis])[severity]
        base = view.reading(axis, severity, view.reference, focus, "coverage")
        cells = []
        for procedure in view.procedures:
            own = view.reading(axis, severity, procedure, focus, "coverage")
            if own is None or base is None:
                cells.append(Cell(NO_VALUE, "none"))
            elif procedure == view.reference:
                cells.append(Cell(f"{percent(own.value, view.bounds or ())} %", "none", "covers "))
            else:
                verdict = view.verdict(axis, severity, procedure, focus)
                cells.append(Cell(points(own.value - base.value), verdict[0] if verdict else "", _said(verdict)))
        rows.append((Cell(view.name(axis)), Cell(label), *cells))
    note = (
        f"Percentage points of coverage gained over {view.reference}, whose own coverage stands in its column, at the worst "
        "severity tried that your data allow (the last tried, where the data do not say). More is better only up to the stated "
        "level."
    )
    columns = ("Departure", "severity", *view.procedures)
    return Table(f"Protection, when something is wrong: {focus}", columns, tuple(rows), heads=2, note=note)


def failures_table(view: View) -> Table | None:
    """Worlds in which a procedure failed to answer; None if there are none."""
    rows = []
    for focus in view.foci:
        for axis, severity, label in _worlds(view):
            for procedure in view.procedures:
                rate = view.reading(axis, severity, procedure, focus, "failure_rate")
                if rate is not None and rate.failures > 0:
                    given = view.reading(axis, severity, procedure, focus, "coverage_given_answer")
                    covers = NO_VALUE if given is None else short_share(given, view.bounds or ())
                    told = (procedure, focus, view.name(axis), label, f"{rate.failures:,} of {rate.repetitions:,}", share(rate))
                    rows.append((*(Cell(text) for text in told), Cell(covers)))
    columns = ("Procedure", "focus", "departure", "severity", "failures", "share", "covers, where it answered")
    return Table("Replicates without an answer", columns, tuple(rows)) if rows else None


def _worlds(view: View) -> Iterator[tuple[Axis, float, str]]:
    yield BASELINE, 0.0, NO_VALUE
    for axis, ladder in view.ladders.items():
        for severity, label in ladder:
            yield axis, severity, label


def _signed(verdict: str, text: str) -> str:
    return f"{SIGNS[verdict]} {text}" if verdict in SIGNS else text


def _said(verdict: tuple[str, str, float] | None) -> str:
    return f"{verdict[0]}, " if verdict else ""


def _mirror(bounds: tuple[float, float] | None) -> tuple[float, float] | None:
    return None if bounds is None else (1.0 - bounds[1], 1.0 - bounds[0])


def _baseline_cell(view: View, procedure: str, focus: str) -> Cell:
    judged = view.verdict(BASELINE, 0.0, procedure, focus)
    if judged is not None:
        return _verdict_cell(view, BASELINE, 0.0, procedure, focus)
    return _share_cell(view, *_main_reading(view, BASELINE, 0.0, procedure, focus))


def _main_reading(
    view: View, axis: Axis, severity: float, procedure: str, focus: str
) -> tuple[Reading | None, tuple[float, float] | None]:
    """Coverage, or size where there is no interval, with its bounds."""
    coverage = view.reading(axis, severity, procedure, focus, "coverage")
    if coverage is not None:
        return coverage, view.bounds
    return view.reading(axis, severity, procedure, focus, "size"), _mirror(view.bounds)


def _share_cell(view: View, reading: Reading | None, bounds: tuple[float, float] | None) -> Cell:
    return Cell(NO_VALUE, "none") if reading is None else Cell(short_share(reading, bounds or ()))


def _verdict_cell(view: View, axis: Axis, severity: float, procedure: str, focus: str) -> Cell:
    verdict = view.verdict(axis, severity, procedure, focus)
    reading, bounds = _main_reading(view, axis, severity, procedure, focus)
    if verdict is None:
        return _share_cell(view, reading, bounds)
    told = "" if reading is None else short_share(reading, bounds or ())
    if verdict[1] not in ("coverage", "size") and verdict[0] != "holds":
        told = f"{told} {verdict[1].replace('_', ' ')} {verdict[2]:.2g}".strip()
    kind = verdict[0]
    covers = view.reading(axis, severity, procedure, focus, "coverage")
    if kind == "holds" and covers is not None and view.bounds is not None and covers.low > view.bounds[1]:
        return Cell(f"{SIGNS[kind]}↑ {told}", "wasteful", "holds, wider than needed, ")
    return Cell(f"{SIGNS.get(kind, '')} {told}".strip(), kind, _said(verdict))


def _most_failures(view: View, procedure: str, focus: str) -> Cell:
    worst = view.most_failures(procedure, focus)
    return Cell(f"{percent(worst, decimals=2)} %" if worst > 0.0 else "none")
