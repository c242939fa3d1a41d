"""Text in columns for a terminal."""

from __future__ import annotations

from collections.abc import Sequence


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
