"""What `inspect` prints: the design and the fit, then what is known without simulation."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from typing import Any

from withstand.cli.layout import columns
from withstand.lab.outcome import Outcome
from withstand.report.account import estimate_sentence
from withstand.report.facts import fact_tables, study_facts
from withstand.report.screen import WIDTH, screen
from withstand.report.view import View
from withstand.report.words import number


def inspection(outcome: Outcome) -> list[str]:
    """Lines for a terminal.

    Parameters
    ----------
    outcome : Outcome
        Of a run without simulation.
    """
    view = View(outcome)
    lines = ["Design and fit", *_pairs(study_facts(view))]
    for table in fact_tables(view):
        lines += ["", table.caption, *columns([table.columns, *([cell.text for cell in row] for row in table.rows)])]
    if outcome.facts["widening"]:
        lines += ["", "What collinearity costs", *_collinearity(outcome.facts)]
    told = [(focus, sentence) for focus in view.foci if (sentence := estimate_sentence(view, focus))]
    lines += ["", "Focus", *_pairs(told)] if told else []
    return [*lines, "", *screen(outcome).splitlines()]


def _collinearity(facts: Mapping[str, Any]) -> list[str]:
    """The factor by which each focal interval is wider than it would be with uncorrelated columns."""
    told = [
        f"The interval for {name} is {number(factor)} times as wide as it would be with uncorrelated columns."
        for name, factor in facts["widening"].items()
    ]
    return [line for one in told for line in textwrap.wrap(one, WIDTH, initial_indent="  ", subsequent_indent="    ")]


def _pairs(pairs: Sequence[tuple[str, str]]) -> list[str]:
    width = max((len(name) for name, _ in pairs), default=0)
    lines = []
    for name, value in pairs:
        indent = " " * (width + 4)
        lines += textwrap.wrap(f"  {name.ljust(width)}  {value}", max(WIDTH, width + 40), subsequent_indent=indent)
    return lines
