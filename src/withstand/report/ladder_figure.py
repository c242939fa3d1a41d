"""Coverage or size against severity: one panel a departure, one line a procedure."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from withstand.report import style
from withstand.report.view import Axis, Reading, View
from withstand.report.words import SeverityWords

COLUMNS = 3
LEGEND_ROW = 0.17
"""Inches."""
PANEL, GAP = 1.22, 0.74
"""Inches: height of a panel, and what its title and the labels of the one above need."""


def draw_ladders(view: View, focus: str, measure: str) -> Figure:
    """The figure of one measure that is a share.

    Parameters
    ----------
    view : View
        What a run found; at least one departure with the measure.
    focus : str
        Focal quantity.
    measure : {"coverage", "size"}
        What to draw.
    """
    axes = [axis for axis in view.ranked(focus) if _series_of_any(view, axis, focus, measure)]
    colours = style.highlighted(view, focus)
    columns = min(COLUMNS, max(len(axes), 1))
    rows = math.ceil(len(axes) / columns)
    lines = _procedure_keys(view, colours)
    head = 0.75 + LEGEND_ROW * math.ceil(len(lines) / _legend_columns(lines))
    height = head + PANEL * rows + GAP * (rows - 1) + 0.42
    figure = Figure(figsize=(style.WIDTH, height))
    grid = figure.add_gridspec(
        rows, columns, left=0.075, right=0.985, top=1.0 - head / height, bottom=0.42 / height, hspace=GAP / PANEL, wspace=0.13
    )
    bounds = _bounds(view, measure)
    limits = _limits(view, axes, focus, measure, colours, bounds)
    for place, axis in enumerate(axes):
        panel = figure.add_subplot(grid[place // columns, place % columns])
        _draw_panel(panel, view, axis, focus, measure, colours, bounds)
        panel.set_ylim(*limits)
        ticks, labels = style.stretched_ticks(*limits)
        panel.set_yticks(ticks, labels if place % columns == 0 else [""] * len(ticks))
        if place % columns == 0:
            panel.set_ylabel(f"{measure}, %")
    _add_legend(figure, view, lines, bounds is not None)
    return figure


def _bounds(view: View, measure: str) -> tuple[float, float] | None:
    if view.bounds is None or measure == "coverage":
        return view.bounds
    return 1.0 - view.bounds[1], 1.0 - view.bounds[0]


def _series(view: View, axis: Axis, procedure: str, focus: str, measure: str) -> list[tuple[float, Reading]]:
    """Readings along the ladder by place; the baseline stands where nothing is wrong."""
    found = []
    for place, severity in enumerate(_rungs(view, axis)):
        reading = view.reading(axis, severity, procedure, focus, measure)
        if reading is None and severity == view.neutral(axis) and not axis.stack:
            reading = view.baseline(procedure, focus, measure)
        if reading is not None:
            found.append((float(place), reading))
    return found if len(found) > 1 else []


def _rungs(view: View, axis: Axis) -> list[float]:
    """Severities tried, and neutral, in increasing order."""
    return sorted({view.neutral(axis), *(severity for severity, _ in view.ladders[axis])})


def _series_of_any(view: View, axis: Axis, focus: str, measure: str) -> bool:
    return any(_series(view, axis, procedure, focus, measure) for procedure in view.procedures)


def _limits(
    view: View, axes: list[Axis], focus: str, measure: str, shown: dict[str, int], bounds: tuple[float, float] | None
) -> tuple[float, float]:
    readings = [reading for axis in axes for name in shown for _, reading in _series(view, axis, name, focus, measure)]
    ends = [end for reading in readings for end in (reading.value - reading.reach, reading.value + reading.reach)]
    return style.stretched_limits([*ends, *(bounds or ())], _nominal(view, measure))


def _nominal(view: View, measure: str) -> float:
    return view.level if measure == "coverage" else 1.0 - view.level


def _draw_panel(
    panel: Axes, view: View, axis: Axis, focus: str, measure: str, colours: dict[str, int], bounds: tuple[float, float] | None
) -> None:
    rungs, neutral = _rungs(view, axis), view.neutral(axis)
    words = SeverityWords.of(view.ladders[axis])
    last = len(rungs) - 1
    if bounds is not None:
        panel.axhspan(*(float(style.stretched(bound)) for bound in bounds), color=style.ZONE, linewidth=0, zorder=0)
    panel.axhline(float(style.stretched(_nominal(view, measure))), color="#7f9a86", linewidth=0.6, zorder=1)
    # pale ones first, the user's own procedure last and so on top
    for procedure in sorted(view.procedures, key=lambda name: -colours.get(name, style.HIGHLIGHTED)):
        series = _series(view, axis, procedure, focus, measure)
        places = np.array([place for place, _ in series])
        heights = style.stretched(np.array([reading.value for _, reading in series]))
        if procedure not in colours:
            panel.plot(places, heights, color=style.FAINT, linewidth=0.8, zorder=2)
            continue
        _draw_line(panel, places, heights, [reading for _, reading in series], colours[procedure])
    _mark_allowed(panel, view, axis, focus)
    panel.set_xlim(-0.2, last + 0.25)
    panel.set_xticks(
        range(last + 1), ["none" if severity == neutral and not axis.stack else words.figure(severity) for severity in rungs]
    )
    panel.set_xlabel(style.drawable(words.axis, 40), labelpad=1.5)
    panel.set_title(style.drawable(view.name(axis), 31, 2), pad=6.0)


def _draw_line(panel: Axes, places: np.ndarray, heights: np.ndarray, readings: list[Reading], number: int) -> None:
    colour, marker = style.COLOURS[number], style.MARKERS[number]
    low = style.stretched(np.array([reading.value if reading.exact else reading.low for reading in readings]))
    high = style.stretched(np.array([reading.value if reading.exact else reading.high for reading in readings]))
    panel.fill_between(places, low, high, color=colour, alpha=0.16, linewidth=0, zorder=3)
    depth = 5 + style.HIGHLIGHTED - number
    panel.plot(places, heights, color=colour, zorder=depth)
    for exact in (True, False):
        chosen = np.array([reading.exact is exact for reading in readings], dtype=bool)
        face = colour if exact else "white"
        panel.plot(
            places[chosen], heights[chosen], marker, color=colour, markerfacecolor=face, markeredgewidth=1.0, zorder=depth
        )


def _mark_allowed(panel: Axes, view: View, axis: Axis, focus: str) -> None:
    """A bar along the severities that the residuals allow."""
    row = next((found for name in view.procedures if (found := view.tipping(axis, name, focus)) is not None), None)
    if row is None or math.isnan(row.plausible_low) or math.isnan(row.plausible_high):
        return
    severities = _rungs(view, axis)
    low, high = (
        float(place) for place in np.interp([row.plausible_low, row.plausible_high], severities, range(len(severities)))
    )
    panel.plot(
        [low, high], [0.035, 0.035], transform=panel.get_xaxis_transform(), color=style.ALLOWED, linewidth=3.0,
        solid_capstyle="butt" if high > low else "round", zorder=4,
    )  # fmt: skip


def _procedure_keys(view: View, colours: dict[str, int]) -> list[Line2D]:
    lines = [
        Line2D([], [], color=style.COLOURS[i], marker=style.MARKERS[i], label=style.drawable(name, 24))
        for name, i in colours.items()
    ]
    if len(colours) < len(view.procedures):
        others = len(view.procedures) - len(colours)
        lines.append(Line2D([], [], color=style.FAINT, label=f"{others} other{'s' if others > 1 else ''}"))
    return lines


def _legend_columns(lines: list[Line2D]) -> int:
    """As many as fit on a line, by the longest label."""
    longest = max(len(str(line.get_label())) for line in lines)
    return min(len(lines), max(2, int(style.WIDTH / (0.55 + 0.075 * longest))))


def _add_legend(figure: Figure, view: View, lines: list[Line2D], zone: bool) -> None:
    """Two rows of keys: who is who, then what the signs mean."""
    columns = _legend_columns(lines)
    figure.legend(handles=lines, loc="upper left", bbox_to_anchor=(0.06, 1.0), ncols=columns, handlelength=2.2)
    ink = style.INK
    keys: list[Line2D | Patch] = [
        Line2D([], [], color=ink, linestyle="none", marker="o", label="exact"),
        Line2D([], [], color=ink, linestyle="none", marker="o", markerfacecolor="white", label="simulated, band 95 %"),
    ]
    if zone:
        keys.append(Patch(facecolor=style.ZONE, edgecolor="#7f9a86", linewidth=0.5, label="tolerance"))
    if view.outcome.tipping["plausible_high"].notna().any():
        keys.append(Line2D([], [], color=style.ALLOWED, linewidth=3.0, label="your data allow"))
    below = 1.0 - (0.09 + LEGEND_ROW * math.ceil(len(lines) / columns)) / figure.get_figheight()
    figure.legend(handles=keys, loc="upper left", bbox_to_anchor=(0.06, below), ncols=4, handlelength=1.6)
