"""Text in Markdown, with everything that came from a user made harmless."""

from __future__ import annotations

import re
from collections.abc import Sequence

from withstand.report.tables import Table

_ACTIVE = re.compile(r"([\\`*\[\]<>|~#!&$])|(?<![^\W_])(_)|(_)(?![^\W_])")


def text(words: str) -> str:
    """Words on one line in which no sign is markup."""
    line = " ".join(words.split())
    line = _ACTIVE.sub(lambda found: f"\\{found[0]}", line)
    return re.sub(r"^([-+=]|\d+[.)])(?=\s|$)", r"\\\1", line)


def code(words: str) -> str:
    """Words as they are, in the typeface of code."""
    line = " ".join(words.split())
    longest = max((len(run) for run in re.findall(r"`+", line)), default=0)
    fence = "`" * (longest + 1)
    pad = " " if line.startswith("`") or line.endswith("`") else ""
    return f"{fence}{pad}{line}{pad}{fence}"


def table(shown: Table) -> str:
    """A table with its caption before and its note behind it."""
    lines = [f"**{text(shown.caption)}**", "", _row(shown.columns), _row(["---"] * len(shown.columns), plain=True)]
    lines += [_row([cell.text for cell in row]) for row in shown.rows]
    if shown.note:
        lines += ["", text(shown.note)]
    return "\n".join(lines)


def bullets(sentences: Sequence[str]) -> str:
    """One bullet a sentence."""
    return "\n".join(f"- {text(sentence)}" for sentence in sentences)


def _row(cells: Sequence[str], *, plain: bool = False) -> str:
    return f"| {' | '.join(cell if plain else text(cell) for cell in cells)} |"
