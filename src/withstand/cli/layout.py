"""Text in columns for a terminal."""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence


def visible(text: str) -> str:
    """Text that is safe for a terminal: signs that would steer it, such as an escape in a column name, are spelt out."""
    return "".join(sign.encode("unicode_escape").decode("ascii") if sign != "\n" and _steers(sign) else sign for sign in text)


def _steers(sign: str) -> bool:
    """Controls, changes of the writing direction, and halves of signs, which cannot be printed."""
    turns = unicodedata.bidirectional(sign) in ("LRE", "RLE", "LRO", "RLO", "PDF", "LRI", "RLI", "FSI", "PDI")
    return turns or unicodedata.category(sign) in ("Cc", "Cs")


def columns(rows: Sequence[Sequence[str]], left: Sequence[int] = (0,)) -> list[str]:
    """Lines with aligned cells, indented by two.

    Parameters
    ----------
    rows : sequence of sequence of str
        All of the same length; the head row first.
    left : sequence of int
        Columns that are aligned to the left; numbers read better to the right.
    """
    widths = [max(len(row[place]) for row in rows) for place in range(len(rows[0]))]
    return [
        "  ".join(["", *(row[i].ljust(width) if i in left else row[i].rjust(width) for i, width in enumerate(widths))]).rstrip()
        for row in rows
    ]
