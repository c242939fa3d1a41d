"""How the figures look: colours that differ in lightness too, a marker for every colour, no trace of the user's settings."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from functools import cache
from typing import Any

import matplotlib.style
import numpy as np
from matplotlib import font_manager, ft2font

from withstand.report.view import View
from withstand.study.design import Floats

INK = "#20242c"
FAINT = "#c3c6cd"
"""Procedures in the background."""
ZONE = "#e3efe6"
"""The tolerance."""
ALLOWED = "#5c6470"
"""The severities that the residuals allow."""

COLOURS = ("#17264d", "#c8501b", "#1f8f86", "#dba800", "#8b3a7e", "#6aaee0")
MARKERS = ("o", "s", "^", "D", "v", "P")
HIGHLIGHTED = len(COLOURS)
"""Procedures drawn in colour; the others are pale."""

WIDTH = 7.2
"""Inches: the text width of an A4 page."""

SETTINGS: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 8.0,
    "text.parse_math": False,  # names of columns are text, whatever signs they hold
    "text.color": INK,
    "axes.edgecolor": "#8a8f99",
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": 8.0,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "legend.frameon": False,
    "legend.fontsize": 7.5,
    "lines.linewidth": 1.3,
    "lines.markersize": 4.2,
    "svg.fonttype": "none",
    "svg.hashsalt": "withstand",
}


@contextmanager
def own_style() -> Iterator[None]:
    """The library's defaults with SETTINGS, whatever the user has set."""
    with matplotlib.style.context(["default", SETTINGS]):
        yield


def highlighted(view: View, focus: str) -> dict[str, int]:
    """Which procedures get a colour, with its number: the first named, then those that hold somewhere, then as named."""
    holding = [row.holding_procedure for row in view.outcome.ranking.itertuples() if row.focus == focus]
    order = dict.fromkeys([view.procedures[0], *(name for name in holding if name in view.procedures), *view.procedures])
    chosen = set(list(order)[:HIGHLIGHTED])
    return {name: i for i, name in enumerate(name for name in view.procedures if name in chosen)}


@cache
def _drawable_signs() -> frozenset[int]:
    font = ft2font.FT2Font(font_manager.findfont("DejaVu Sans"))
    return frozenset(font.get_charmap())


def drawable(text: str, width: int, lines: int = 1) -> str:
    """Text for a figure: on a few lines of `width` letters, with a box for each sign that the font of the figures lacks."""
    known = _drawable_signs()
    signs = "".join(sign if ord(sign) in known or sign.isspace() else "\u25a1" for sign in text)
    folded = textwrap.wrap(signs, width)
    if len(folded) > lines:
        rest = signs[len(" ".join(folded[: lines - 1])) :].strip()
        folded = [*folded[: lines - 1], f"{rest[: width - 1].rstrip()}…"]
    return "\n".join(folded)


LEAST, MOST = 0.005, 0.995
"""Shares beyond are drawn at these ends of the stretched scale."""

_TICKS = (0.5, 0.8, 0.9, 0.99, 0.98, 0.65, 0.94, 0.96, 0.93, 0.97)
"""Shares that make good ticks, the more welcome ones first; each stands for its mirror image too."""


def stretched(share: float | Floats) -> Floats:
    """Where a share stands on a scale that is stretched near 0 and 1: its log odds."""
    held = np.clip(np.asarray(share, dtype=float), LEAST, MOST)
    return np.log(held / (1.0 - held))


def stretched_ticks(low: float, high: float, most: int = 6) -> tuple[list[float], list[str]]:
    """Places and labels of ticks between two places of the stretched scale, at most so many, far enough apart."""
    gap = (high - low) / most
    kept: list[float] = []
    for one in (0.95, *_TICKS):
        for share in (one, 1.0 - one):
            place = float(stretched(share))
            if low <= place <= high and all(abs(place - float(stretched(other))) >= gap for other in kept):
                kept.append(share)
    return [float(stretched(share)) for share in sorted(kept)], [f"{100.0 * share:.3g}" for share in sorted(kept)]


def stretched_limits(shares: Sequence[float], nominal: float) -> tuple[float, float]:
    """Limits around shares and a range around the nominal one, with room for a bar at the low end."""
    span = [1.0 - 1.5 * (1.0 - nominal), 1.0 - 0.65 * (1.0 - nominal)] if nominal > 0.5 else [0.65 * nominal, 1.5 * nominal]
    places = [float(stretched(share)) for share in (*shares, *span)]
    length = max(places) - min(places)
    return min(places) - 0.16 * length, max(places) + 0.07 * length


def padded(values: Sequence[float], by: float = 0.07) -> tuple[float, float]:
    """Limits around values, with some room."""
    low, high = min(values), max(values)
    room = by * (high - low) or 0.2
    return low - room, high + room
