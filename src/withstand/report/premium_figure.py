"""Premium and protection: what each procedure costs when nothing is wrong beside what it keeps when something is."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from withstand.measures.names import ADJUSTED_POWER
from withstand.report import style
from withstand.report.view import Axis, View
from withstand.report.words import percent
from withstand.report.worry import width_ratio

FAILURES = style.COLOURS[4]

ROW = 0.27
"""Inches a procedure."""


def draw_premium(view: View, focus: str) -> Figure:
    """One row a procedure: width, power beside size, and coverage under every departure; failures are written beside it.

    Parameters
    ----------
    view : View
        What a run found; at least one procedure with coverage under a departure.
    focus : str
        Focal quantity.
    """
    names = [name for name in view.procedures if view.baseline(name, focus, "coverage") is not None]
    power = view.has("power", focus)
    figure = Figure(figsize=(style.WIDTH, 1.2 + ROW * len(names)))
    height = figure.get_figheight()
    grid = figure.add_gridspec(
        1, 3 if power else 2, width_ratios=[1.0, 1.0, 2.4] if power else [1.0, 2.4], left=0.16, right=0.75, wspace=0.17,
        top=1.0 - 0.62 / height, bottom=0.46 / height,
    )  # fmt: skip
    panels = [figure.add_subplot(grid[0, i]) for i in range(grid.ncols)]
    for panel in panels:
        panel.set_ylim(len(names) - 0.5, -0.5)
        panel.set_yticks(range(len(names)), [""] * len(names))
        panel.tick_params(axis="y", length=0)
        for row in range(len(names)):
            panel.axhline(row, color="#eceef1", linewidth=0.7, zorder=0)
    panels[0].set_yticks(range(len(names)), [style.drawable(name, 16) for name in names])
    _draw_width(panels[0], view, names, focus)
    if power:
        _draw_power(panels[1], view, names, focus)
    _draw_protection(panels[-1], view, names, focus)
    _add_legend(figure, view, focus, power)
    return figure


def _draw_width(panel: Axes, view: View, names: list[str], focus: str) -> None:
    changes = np.array([100.0 * (width_ratio(view, name, focus) - 1.0) for name in names])
    known = np.isfinite(changes)
    panel.axvline(0.0, color="#8a8f99", linewidth=0.7)
    rows = np.arange(len(names))
    panel.hlines(rows[known], 0.0, changes[known], color=style.COLOURS[0], linewidth=2.4)
    panel.plot(changes[known], rows[known], "o", color=style.COLOURS[0])
    panel.set_xlim(*style.padded([0.0, 5.0, *changes[known]], 0.15))
    panel.set_title("Premium")
    panel.set_xlabel(style.drawable(f"% wider than {view.reference}", 24))


def _draw_power(panel: Axes, view: View, names: list[str], focus: str) -> None:
    for row, name in enumerate(names):
        for measure, face in (("power", style.COLOURS[2]), ("size", "white")):
            reading = view.baseline(name, focus, measure)
            if reading is not None:
                panel.plot(100.0 * reading.value, row, "s", color=style.COLOURS[2], markerfacecolor=face)
        adjusted = view.baseline(name, focus, ADJUSTED_POWER)
        if adjusted is not None:
            panel.plot(100.0 * adjusted.value, row, "x", color=style.INK, markersize=4.8, zorder=5)
    panel.set_xlim(-4.0, 104.0)
    panel.set_xticks([0, 50, 100])
    panel.set_title("Power")
    panel.set_xlabel("% rejected")


def _draw_protection(panel: Axes, view: View, names: list[str], focus: str) -> None:
    shown: list[float] = [float(style.stretched(view.level))]
    if view.bounds is not None:
        edges = [float(style.stretched(bound)) for bound in view.bounds]
        panel.axvspan(edges[0], edges[1], color=style.ZONE, linewidth=0, zorder=0)
        shown += edges
    for row, name in enumerate(names):
        start = view.baseline(name, focus, "coverage")
        under = _under_departures(view, name, focus)
        if start is None or not under:
            continue
        places = [float(style.stretched(value)) for _, value in under]
        shown += [*places, float(style.stretched(start.value))]
        panel.hlines(row, min(places), max(places), color=style.COLOURS[1], linewidth=1.0, zorder=2)
        panel.plot(places, [row] * len(places), "|", color=style.COLOURS[1], markersize=7.0, markeredgewidth=1.1, zorder=3)
        worst, value = min(under, key=lambda one: one[1])
        panel.plot(float(style.stretched(value)), row, "D", color=style.COLOURS[1], zorder=4)
        panel.plot(float(style.stretched(start.value)), row, "o", color=style.INK, markerfacecolor="white", zorder=5)
        failures = view.most_failures(name, focus)
        told = f"{percent(value, view.bounds or ())} % {view.name(worst)}"
        _note(panel, row - (0.2 if failures else 0.0), style.drawable(told, 33, lines=1 if failures else 2), style.INK)
        if failures:
            _note(panel, row + 0.24, f"no answer in up to {percent(failures, decimals=2)} %", FAILURES)
    limits = style.padded(shown, 0.04)
    panel.set_xlim(*limits)
    panel.set_xticks(*style.stretched_ticks(*limits, 8))
    panel.set_title("Protection: coverage under each departure")
    panel.set_xlabel("coverage, %")


def _note(panel: Axes, row: float, text: str, colour: str) -> None:
    panel.annotate(
        text, (1.02, row), xycoords=panel.get_yaxis_transform(), va="center", fontsize=6.8, linespacing=1.0, color=colour
    )


def _under_departures(view: View, procedure: str, focus: str) -> list[tuple[Axis, float]]:
    """Coverage under each departure at the severity the procedures are compared at."""
    found = []
    for axis in view.ranked(focus):
        reading = view.reading(axis, view.worst(axis, focus), procedure, focus, "coverage")
        if reading is not None:
            found.append((axis, reading.value))
    return found


def _add_legend(figure: Figure, view: View, focus: str, power: bool) -> None:
    ink, colour = style.INK, style.COLOURS
    keys: list[Line2D | Patch] = [
        Line2D([], [], color=ink, linestyle="none", marker="o", markerfacecolor="white", label="nothing wrong"),
        Line2D([], [], color=colour[1], linestyle="none", marker="|", markersize=7.0, label="a departure"),
        Line2D([], [], color=colour[1], linestyle="none", marker="D", label="the worst, named"),
    ]
    if power:
        keys.append(Line2D([], [], color=colour[2], linestyle="none", marker="s", label="power"))
        keys.append(Line2D([], [], color=colour[2], linestyle="none", marker="s", markerfacecolor="white", label="size"))
    if any(view.baseline(name, focus, ADJUSTED_POWER) is not None for name in view.procedures):
        keys.append(Line2D([], [], color=ink, linestyle="none", marker="x", label="power, size-adjusted"))
    if view.bounds is not None:
        keys.append(Patch(facecolor=style.ZONE, edgecolor="#7f9a86", linewidth=0.5, label="tolerance"))
    figure.legend(
        handles=keys, loc="upper left", bbox_to_anchor=(0.0, 1.0), ncols=len(keys), columnspacing=1.0, handlelength=1.2
    )
