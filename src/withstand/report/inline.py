"""SVG figures made part of a page: described for screen readers, and with ids of their own."""

from __future__ import annotations

import re

from markupsafe import Markup, escape

from withstand.report.view import View
from withstand.report.words import SeverityWords, listing, percent

_PREFIXED = re.compile(r'(\bid="|url\(#|href="#)')


def inline_svg(svg: bytes, prefix: str, description: str) -> Markup:
    """The figure as an element of a page.

    Parameters
    ----------
    svg : bytes
        As `figures.as_svg` writes it; its text is escaped there.
    prefix : str
        Letters and digits, different for every figure of the page; ids in the SVG start with it.
    description : str
        What a screen reader says instead of the picture.
    """
    text = svg.decode()
    text = text[text.index("<svg ") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    # a rule for every element of the page would leak out of the figure
    text = re.sub(r"<style[^>]*>\*\{([^}]*)\}</style>", "", text)
    text = _PREFIXED.sub(lambda found: f"{found[1]}{prefix}-", text)
    said = escape(description)
    head = f'<svg role="img" aria-label="{said}" stroke-linejoin="round" stroke-linecap="butt" '
    return Markup(text.replace("<svg ", head, 1))  # escaped above and by the writer of the SVG


def describe(view: View, name: str, focus: str) -> str:
    """What the figure shows, for those who cannot see it; the numbers are in the tables."""
    first = view.procedures[0]
    departures = [view.name(axis) for axis in view.ranked(focus)]
    if name == "premium":
        return (
            f"For each of {listing(view.procedures)}: the width of the interval for {focus} when nothing is wrong, and its "
            f"coverage under {listing(departures)}.{_failing(view, focus)} The tables on premium and protection hold the "
            "numbers."
        )
    if name == "harm":
        return (
            f"Coverage of {focus} lost under each departure by {first}, against the chance of noticing it. The table on "
            "what to worry about first holds the numbers."
        )
    worst = _extreme(view, first, focus, name)
    return (
        f"{name.capitalize()} of {focus} against severity for {listing(view.procedures)}, one panel each for "
        f"{listing(departures)}. {worst} The verdict table holds the numbers."
    )


def _failing(view: View, focus: str) -> str:
    names = [name for name in view.procedures if view.most_failures(name, focus) > 0.0]
    return f" No answer in some replicates: {listing(names)}." if names else ""


def _extreme(view: View, procedure: str, focus: str, measure: str) -> str:
    found = []
    for axis, ladder in view.ladders.items():
        for severity, _ in ladder:
            reading = view.reading(axis, severity, procedure, focus, measure)
            if reading is not None:
                found.append((reading.value, f"{view.name(axis)}, {SeverityWords.of(ladder).label(severity)}"))
    if not found:
        return ""
    value, place = min(found) if measure == "coverage" else max(found)
    extreme = "lowest" if measure == "coverage" else "highest"
    return f"The {extreme} of {procedure} is {percent(value)} % under {place}."
