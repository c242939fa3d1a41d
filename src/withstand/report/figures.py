"""The figures by name, and the files they are kept in."""

from __future__ import annotations

import io
import math
from collections.abc import Callable

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure

from withstand.errors import InputError, nearest
from withstand.lab.outcome import Outcome
from withstand.report.harm_figure import draw_harm, harm_points
from withstand.report.ladder_figure import draw_ladders
from withstand.report.premium_figure import draw_premium
from withstand.report.style import own_style
from withstand.report.view import View, view_of

FIGURES: dict[str, Callable[[View, str], Figure]] = {
    "coverage": lambda view, focus: draw_ladders(view, focus, "coverage"),
    "size": lambda view, focus: draw_ladders(view, focus, "size"),
    "premium": draw_premium,
    "harm": draw_harm,
}
"""Every figure by name, in the order of the report."""

SAME = 1e-9
"""Shares closer than this are one."""

DOTS = 160
"""Dots an inch of the PNG files."""


def available(view: View, focus: str) -> list[str]:
    """Names of the figures that there are numbers for."""
    if not view.procedures or not view.ladders:
        return []
    found = [measure for measure in ("coverage", "size") if _tried(view, focus, measure)]
    if "coverage" in found and view.has("coverage", focus):
        found.append("premium")
    return [*found, "harm"] if harm_points(view, focus) else found


def shown(view: View, focus: str) -> list[str]:
    """Names of the figures that a report shows: those available, without one that repeats another."""
    return [name for name in available(view, focus) if not (name == "size" and _mirrors(view, focus))]


def _mirrors(view: View, focus: str) -> bool:
    """Whether size is 1 - coverage throughout, so that a second figure would show the same."""
    for axis, ladder in view.ladders.items():
        for severity, _ in ladder:
            for procedure in view.procedures:
                size = view.reading(axis, severity, procedure, focus, "size")
                coverage = view.reading(axis, severity, procedure, focus, "coverage")
                if size is not None and (coverage is None or abs(size.value + coverage.value - 1.0) > SAME):
                    return False
    return True


def _tried(view: View, focus: str, measure: str) -> bool:
    return any(
        reading is not None and math.isfinite(reading.value)
        for axis, ladder in view.ladders.items()
        for severity, _ in ladder
        for procedure in view.procedures
        for reading in [view.reading(axis, severity, procedure, focus, measure)]
    )


def figure(outcome: Outcome, name: str = "coverage", focus: str | None = None) -> Figure:
    """One figure of an outcome.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    name : {"coverage", "size", "premium", "harm"}
        Which.
    focus : str, optional
        Focal quantity by its name; the first one if left out.

    Raises
    ------
    InputError
        If the figure or the focal quantity is unknown, or the outcome has no numbers for it.
    """
    view = view_of(outcome)
    if name not in FIGURES:
        raise InputError(f"unknown figure '{name}'", where="figure", remedy=nearest(name, FIGURES))
    if focus is not None and focus not in view.foci:
        raise InputError(f"unknown focus '{focus}'", where="figure", remedy=nearest(focus, view.foci))
    if focus is None:
        focus = view.foci[0] if view.foci else ""
    known = available(view, focus)
    if name not in known:
        remedy = f"There is: {', '.join(known)}." if known else "Run it with at least one departure that makes sense here."
        raise InputError(f"this outcome has no numbers for the figure '{name}' of '{focus}'", where="figure", remedy=remedy)
    with own_style():
        return FIGURES[name](view, focus)


def as_svg(drawn: Figure) -> bytes:
    """The figure as SVG, the same bytes whenever and wherever it is written."""
    out = io.BytesIO()
    with own_style():
        FigureCanvasSVG(drawn)
        drawn.savefig(out, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    return out.getvalue()


def as_png(drawn: Figure) -> bytes:
    """The figure as PNG with DOTS an inch."""
    out = io.BytesIO()
    with own_style():
        FigureCanvasAgg(drawn)
        drawn.savefig(out, format="png", dpi=DOTS, metadata={"Software": None})
    return out.getvalue()
