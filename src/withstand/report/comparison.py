"""Tables that compare procedures beyond coverage: power where something is wrong, and rules where their check passes."""

from __future__ import annotations

from collections.abc import Iterator

from withstand.measures.names import ADJUSTED_POWER
from withstand.report.tables import NO_VALUE, Cell, Table
from withstand.report.view import BASELINE, Axis, View
from withstand.report.words import percent, short_share


def comparisons(view: View, focus: str) -> list[Table]:
    """Those of the tables that have something to show."""
    tables = (power_table(view, focus), rules_table(view, focus))
    return [table for table in tables if table is not None] if view.ladders else []


def power_table(view: View, focus: str) -> Table | None:
    """Power at the stated effect beside size, and size-adjusted where sizes differ; None where no effect is stated."""
    if not view.has("power", focus):
        return None
    rows = [
        (Cell(view.name(axis)), Cell(label), *(_power_cell(view, axis, severity, name, focus) for name in view.procedures))
        for axis, severity, label in _compared(view, focus)
    ]
    note = (
        "Percent of tests that reject at the smallest effect that matters, at the size (percent rejected without any effect) "
        f"named after it; the nominal size is {percent(1.0 - view.level, decimals=0)} %. After the arrow: size-adjusted power, "
        "with the critical value that makes the size nominal in that very world. It is given where the size is outside the "
        "tolerance and the test has a critical value that can be moved; nobody has it in practice, but it is what tests of "
        "different size can be compared by."
    )
    return Table(f"Power, beside size: {focus}", ("Departure", "severity", *view.procedures), tuple(rows), heads=2, note=note)


def _power_cell(view: View, axis: Axis, severity: float, procedure: str, focus: str) -> Cell:
    power, size, adjusted = (
        view.reading(axis, severity, procedure, focus, measure) for measure in ("power", "size", ADJUSTED_POWER)
    )
    if power is None or size is None:
        return Cell(NO_VALUE, "none")
    bounds = () if view.bounds is None else tuple(1.0 - bound for bound in view.bounds)
    told = f"{short_share(power)} at {percent(size.value, bounds)}"
    return Cell(told if adjusted is None else f"{told} → {short_share(adjusted)}")


def rules_table(view: View, focus: str) -> Table | None:
    """How rules that check first do where the check passed; None where there is no rule."""
    rows = []
    for rule in view.procedures:
        for axis, severity, label in _compared(view, focus):
            told = [view.reading(axis, severity, rule, focus, name) for name in _GIVEN]
            if told[0] is not None:
                bounds = ((), view.bounds or (), view.bounds or ())
                shares = [NO_VALUE if one is None else short_share(one, near) for one, near in zip(told, bounds, strict=True)]
                rows.append(tuple(Cell(text) for text in (rule, view.name(axis), label, *shares)))
    columns = ("Rule", "departure", "severity", "check passes", "covers, where it passed", "covers, as a rule")
    note = (
        "A check that passes does not show that its assumption holds: compare what the interval covers where the check passed "
        "with what was promised. Percent; ± as elsewhere."
    )
    return Table(f"Where the check passed: {focus}", columns, tuple(rows), note=note) if rows else None


_GIVEN = ("pass_rate", "coverage_given_pass", "coverage")


def _compared(view: View, focus: str) -> Iterator[tuple[Axis, float, str]]:
    """The baseline, and the severity of every departure that procedures are compared at."""
    yield BASELINE, 0.0, NO_VALUE
    for axis in view.ranked(focus):
        severity = view.worst(axis, focus)
        row = view.rank(axis, view.leading(focus), focus)
        if row is None or axis.stack or float(row.worst_severity) != view.neutral(axis):
            yield axis, severity, dict(view.ladders[axis])[severity]
