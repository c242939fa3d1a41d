"""An outcome that can show itself. What draws is loaded when something is drawn: an inspection ends before."""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING

from withstand.lab.outcome import Outcome

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True, eq=False)
class Result(Outcome):
    """What a run found, with its figures and its report.

    The parameters are those of Outcome; `Result.of` takes them from one.
    """

    @classmethod
    def of(cls, outcome: Outcome) -> Result:
        """The same findings."""
        return cls(**{field.name: getattr(outcome, field.name) for field in fields(Outcome)})

    def figure(self, name: str = "coverage", focus: str | None = None) -> Figure:
        """One figure.

        Parameters
        ----------
        name : {"coverage", "size", "premium", "harm"}
            Which.
        focus : str, optional
            Focal quantity by its name; the first one if left out.

        Raises
        ------
        InputError
            If the figure or the focal quantity is unknown, or there are no numbers for it.
        """
        from withstand.report.figures import figure

        return figure(self, name, focus)

    def report(self, folder: str | Path) -> Path:
        """Write the page, the texts, the tables and the figures to a folder, and return the path of the page.

        Raises
        ------
        InputError
            If the folder cannot be written to.
        """
        from withstand.report.write import write_report

        return write_report(self, Path(folder))

    def _repr_html_(self) -> str:
        """The headline and what to worry about first, for a notebook."""
        from withstand.report.html import fragment

        return fragment(self)
