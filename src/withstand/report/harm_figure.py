"""Harm against detectability: tells 'harmful and hard to see' from 'harmful, but you would notice'."""

from __future__ import annotations

import math

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from withstand.report import style
from withstand.report.view import View

LABEL_GAP = 0.062
"""Least distance of two labels, as a share of the height of the panel."""

_LEFT = 0.65
"""Points up to here have their names on the right, where there is room; the others on the left."""


def harm_points(view: View, focus: str) -> list[tuple[str, float, float, str]]:
    """Name, detectability where the interval starts to give, coverage lost in points, and verdict; by departure.

    The procedure is the first named. Departures whose detectability is not known are left out.
    """
    procedure = view.procedures[0]
    found = []
    for axis in view.ranked(focus):
        tipping = view.tipping(axis, procedure, focus)
        row = view.rank(axis, procedure, focus)
        if tipping is None or row is None:
            continue
        seen, lost = float(tipping.detectability_at_tipping), -100.0 * float(row.shift_there)
        if math.isfinite(seen) and math.isfinite(lost):
            found.append((view.name(axis), seen, lost, str(row.verdict_there)))
    return found


def draw_harm(view: View, focus: str) -> Figure:
    """The map of departures.

    Parameters
    ----------
    view : View
        What a run found; `harm_points` is not empty.
    focus : str
        Focal quantity.
    """
    points = harm_points(view, focus)
    figure = Figure(figsize=(style.WIDTH, 3.7))
    panel = figure.add_axes((0.085, 0.13, 0.9, 0.73))
    lost = [point[2] for point in points]
    low, high = style.padded([0.0, *lost], 0.1)
    panel.set_xlim(-3.0, 103.0)
    panel.set_ylim(low, high)
    panel.axvline(50.0, color="#8a8f99", linewidth=0.7, linestyle=(0, (4, 3)))
    panel.axhline(0.0, color="#8a8f99", linewidth=0.7)
    for _, seen, harm, verdict in points:
        face = style.COLOURS[1] if verdict == "gives" else "white"
        marker = {"gives": "D", "unsettled": "s"}.get(verdict, "o")
        panel.plot(100.0 * seen, harm, marker, color=style.COLOURS[1], markerfacecolor=face, markersize=6.0, zorder=4)
    _label(panel, points, low, high)
    panel.set_xlabel("chance that the usual check of the residuals notices it where the interval starts to give, %")
    panel.set_ylabel("coverage lost, percentage points")
    for place, align, told in ((0.0, "left", "hard to see"), (1.0, "right", "you would notice")):
        panel.text(place, 1.03, told, transform=panel.transAxes, ha=align, fontweight="bold")
    _add_legend(figure)
    return figure


def _label(panel: Axes, points: list[tuple[str, float, float, str]], low: float, high: float) -> None:
    """Names beside their points, pushed apart where they would overlap, with a line to the point."""
    for left in (True, False):
        side = sorted((point for point in points if (point[1] <= _LEFT) is left), key=lambda point: point[2])
        heights = _apart([(harm - low) / (high - low) for _, _, harm, _ in side])
        for (name, seen, harm, _), height in zip(side, heights, strict=True):
            away = 4.0 if left else -4.0
            panel.annotate(
                style.drawable(name, 40), (100.0 * seen, harm), (100.0 * seen + away, low + height * (high - low)),
                ha="left" if left else "right", va="center", fontsize=7.5,
                arrowprops={
                    "arrowstyle": "-", "color": "#8a8f99", "linewidth": 0.5, "shrinkA": 1.0, "shrinkB": 3.0,
                    "relpos": (0.0 if left else 1.0, 0.5),
                },
            )  # fmt: skip


def _apart(wanted: list[float]) -> list[float]:
    """Heights in the same order, at least LABEL_GAP apart, inside the panel and near where they were wanted."""
    heights: list[float] = []
    for height in wanted:
        heights.append(max(height, heights[-1] + LABEL_GAP) if heights else height)
    if not heights:
        return []
    lift = sum(heights) / len(heights) - sum(wanted) / len(wanted)
    lift = max(lift, heights[-1] - 0.98)
    return [height - min(lift, max(heights[0] - 0.03, heights[-1] - 0.98)) for height in heights]


def _add_legend(figure: Figure) -> None:
    colour = style.COLOURS[1]
    keys = [
        Line2D([], [], color=colour, linestyle="none", marker="D", label="gives at the worst your data allow"),
        Line2D([], [], color=colour, linestyle="none", marker="s", markerfacecolor="white", label="unsettled there"),
        Line2D([], [], color=colour, linestyle="none", marker="o", markerfacecolor="white", label="holds there"),
    ]
    figure.legend(handles=keys, loc="upper left", bbox_to_anchor=(0.07, 1.0), ncols=3, handlelength=1.2)
