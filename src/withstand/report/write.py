"""Everything a finished run leaves for people, in one folder."""

from __future__ import annotations

from pathlib import Path

from withstand.lab.outcome import Outcome
from withstand.report.figures import as_png, as_svg, figure, shown
from withstand.report.files import PAGE, write_files
from withstand.report.html import page
from withstand.report.statement import statement
from withstand.report.store import stored
from withstand.report.summary import summary
from withstand.report.view import view_of

SUMMARY = "summary.md"
STATEMENT = "statement.md"
FIGURES = "figures"


def write_report(outcome: Outcome, folder: Path) -> Path:
    """Write the page, the texts, the tables and the figures.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    folder : Path
        Made where it is missing; files of the same names are replaced, others stay.

    Returns
    -------
    Path
        Of the page.

    Raises
    ------
    InputError
        If the folder cannot be written to.
    """
    view = view_of(outcome)
    pictures: dict[tuple[str, str], bytes] = {}
    files: dict[str, bytes] = dict(stored(outcome))
    for place, focus in enumerate(view.foci, 1):
        for name in shown(view, focus):
            drawn = figure(outcome, name, focus)
            pictures[focus, name] = as_svg(drawn)
            base = f"{FIGURES}/{figure_file(name, place, focus)}"
            files |= {f"{base}.svg": pictures[focus, name], f"{base}.png": as_png(drawn)}
    files |= {
        SUMMARY: summary(outcome).encode(),
        STATEMENT: statement(outcome).encode(),
        PAGE: page(outcome, pictures).encode(),
    }
    write_files(folder, files)
    return folder / PAGE


def figure_file(name: str, place: int, focus: str) -> str:
    """Name of a figure's files without the ending: the figure, the place of the focal quantity, its name in plain letters."""
    plain = "".join(sign if sign.isascii() and sign.isalnum() else "-" for sign in focus)
    parts = [part for part in plain.split("-") if part]
    return "-".join([name, str(place), *parts])[:60].rstrip("-")
