"""The first screen: what to worry about first, for a terminal of 100 columns."""

from __future__ import annotations

import math
import textwrap
import unicodedata
from collections.abc import Sequence
from itertools import zip_longest
from pathlib import Path

from withstand.lab.outcome import Outcome
from withstand.report.account import baseline_sentence, effort_sentence, rows_sentence, tolerance_sentence
from withstand.report.view import View, view_of
from withstand.report.words import percent
from withstand.report.worry import Worry, worries

WIDTH = 100
SHOWN = 3
"""Sentences of the headline on the screen; the page has them all."""

COLUMNS = (("", 2), ("if this is wrong", 23), ("the interval", 24), ("your data allow", 17), ("it then covers", 26))
GAP = "  "

LINES = 3
"""A name is cut after as many lines; the page has it whole."""


def screen(outcome: Outcome, page: Path | None = None) -> str:
    """The findings as text.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    page : Path, optional
        Where the full page is.

    Returns
    -------
    str
        Lines of at most WIDTH columns, ended by a newline.
    """
    view = view_of(outcome)
    lines = [*_wrapped(f"{_one_line(str(outcome.facts.get('name') or outcome.title))}: {rows_sentence(view)}.")]
    if outcome.facts.get("formula"):
        lines += _wrapped(f"Model: {outcome.facts['formula']}")
    lines += _wrapped(f"Tolerance: {tolerance_sentence(view)}")
    lines += [line for sentence in outcome.headline[:SHOWN] for line in _wrapped(f"* {sentence}", "  ")]
    for focus in view.foci:
        lines += ["", *_focus_block(view, focus)]
    lines += ["", *_closing(view, page)]
    return "\n".join(lines) + "\n"


def _focus_block(view: View, focus: str) -> list[str]:
    # a focal quantity the first procedure cannot answer is judged by the first one that can
    lead = view.leading(focus)
    if not lead:
        return _wrapped(f"{focus}: no procedure applies; the page says why.")
    name = textwrap.shorten(_one_line(focus), WIDTH // 2, placeholder=" …")
    level = percent(view.level, decimals=0)
    title = f"{name}, {level} % interval by {_one_line(lead)}. {baseline_sentence(view, lead, focus)}"
    told = worries(view, lead, focus)
    lines = _wrapped(title)
    if not told:
        return [*lines, "  No departure was tried."]
    pressing = [worry for worry in told if worry.verdict != "holds"]
    if pressing:
        lines += _table_row([name.upper() for name, _ in COLUMNS])
    for rank, worry in enumerate(pressing, 1):
        lines += _table_row([str(rank), worry.name, worry.turns, worry.allowed, worry.covers])
        lines += [f"    {line}" for line in _fold(_help(worry), WIDTH - 4, "   ") if line]
    calm = [worry for worry in told if worry.verdict == "holds"]
    return [*lines, *_calm(view, calm)] if calm else lines


def _calm(view: View, worries: Sequence[Worry]) -> list[str]:
    """What holds, in a few lines: the worst severity to be feared and the coverage there."""
    planned = not any(math.isfinite(float(row.observed)) for row in view.tipping_rows)
    reach = "as far as it was tried" if planned else "at the worst your data allow (where they do not say, the most tried)"
    told = "; ".join(f"{one.name}, {one.covers.removesuffix(' (exact)')}" for one in worries)
    return _wrapped(f"It holds {reach}: {told}.", "    ")


def _help(worry: Worry) -> str:
    """What to do about it; nothing where nothing needs doing."""
    if worry.verdict == "holds":
        return ""
    parts = [worry.instead, f"more rows: {worry.rows}" if worry.rows else ""]
    told = "; ".join(part for part in parts if part)
    return f"-> {told}" if told else ""


def _table_row(cells: Sequence[str]) -> list[str]:
    columns = [_fold(cell, width, lines=LINES) for cell, (_, width) in zip(cells, COLUMNS, strict=True)]
    return [
        GAP.join(_pad(part, width) for part, (_, width) in zip(parts, COLUMNS, strict=True)).rstrip()
        for parts in zip_longest(*columns, fillvalue="")
    ]


def _closing(view: View, page: Path | None) -> list[str]:
    outcome = view.outcome
    lines = _wrapped(effort_sentence(view)) if effort_sentence(view) else []
    failing = outcome.measures.loc[outcome.measures["failures"] > 0, "procedure"]
    if len(failing):
        lines += _wrapped(f"Gave no answer in some replicates (counted as not covering): {', '.join(sorted(set(failing)))}.")
    lines += [line for notice in outcome.notices for line in _wrapped(f"Note: {notice}", "  ")]
    if outcome.refusals:
        if page is not None:
            names = ", ".join(dict.fromkeys(procedure for procedure, _, _ in outcome.refusals))
            lines += _wrapped(f"Not applicable here: {names}; the page says why.")
        for procedure, focus, reason in outcome.refusals if page is None else ():
            why = reason.removeprefix("not applicable, because ")
            lines += _wrapped(f"Not applicable here: {procedure} for {focus}, because {why}.", "  ")
    if page is not None:
        lines.append(f"Full page: {page}")
    return lines


def _wrapped(text: str, indent: str = "") -> list[str]:
    return _fold(text, WIDTH, indent)


def _fold(text: str, width: int, indent: str = "", lines: int | None = None) -> list[str]:
    """Lines no wider than `width` terminal cells; East Asian wide characters take two."""
    fitted = width // 2 if any(_cell_width(sign) > 1 for sign in text) else width
    return textwrap.wrap(
        _one_line(text), fitted, subsequent_indent=indent, break_on_hyphens=False, max_lines=lines, placeholder=" …"
    ) or [""]


def _one_line(text: str) -> str:
    """Without control characters, which would move the cursor of the terminal."""
    return "".join(sign if unicodedata.category(sign)[0] != "C" else " " for sign in text)


def _pad(text: str, width: int) -> str:
    return text + " " * (width - sum(map(_cell_width, text)))


def _cell_width(sign: str) -> int:
    return 2 if unicodedata.east_asian_width(sign) in "WF" else 1
