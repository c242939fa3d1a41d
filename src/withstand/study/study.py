"""What the user has: a design, a focus, and a reference fit that gives the size of things."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from withstand.study.design import Design, Floats
from withstand.study.focus import Focus


class Rows(Protocol):
    """Where the rows of a replicate come from."""

    @property
    def fixed(self) -> bool:
        """True when every block has the study's own design."""

    def draw(self, generator: np.random.Generator) -> Design:
        """A design for one block."""


@dataclass(frozen=True, eq=False)
class FixedRows:
    """The rows as they are, in every block: conclusions are conditional on them."""

    design: Design
    fixed: bool = True

    def draw(self, generator: np.random.Generator) -> Design:
        """The study's own design; nothing is drawn."""
        return self.design


@dataclass(frozen=True)
class Account:
    """Where the rows of the table went.

    Parameters
    ----------
    read : int
        Data rows in the table.
    dropped : mapping of str to int
        Rows dropped for a missing value, by the first column that lacks one.
    """

    read: int
    dropped: Mapping[str, int] = field(default_factory=dict)

    @property
    def used(self) -> int:
        """Rows in the analysis."""
        return self.read - sum(self.dropped.values())


@dataclass(frozen=True, eq=False)
class Study:
    """Data or plan, model formula and focus.

    Parameters
    ----------
    name : str
        Title of the study, shown to people.
    formula : str
        Model formula, as written.
    design : Design
        The rows as they are; of a plan, one draw of it.
    focus : tuple of Focus
        At least one.
    coefficients : ndarray of shape (p,)
        Reference coefficients: fitted to the data, or stated in the plan.
    error_sd : float
        Reference error SD, in the unit of the response.
    rows : Rows
        Fixed, resampled or drawn afresh.
    response : ndarray of shape (n,), optional
        Observed response in the order of the design's rows; None for a plan.
    level : float
        Confidence level; tests are at 1 - level.
    account : Account, optional
        What was read and dropped.
    notices : tuple of str
        What the user should know about how the table was read.
    digest : str
        Hash of everything above that can change a result.
    grow : callable, optional
        Makes the study at another number of rows to collect; a plan has it, data grow by a rule (see `growth`).
    """

    name: str
    formula: str
    design: Design
    focus: tuple[Focus, ...]
    coefficients: Floats
    error_sd: float
    rows: Rows
    response: Floats | None = None
    level: float = 0.95
    account: Account | None = None
    notices: tuple[str, ...] = ()
    digest: str = ""
    grow: Callable[[int], Study] | None = None

    @property
    def n(self) -> int:
        """Number of rows in a replicate."""
        return self.design.n

    @property
    def alpha(self) -> float:
        """Nominal test size."""
        return 1.0 - self.level

    @property
    def residuals(self) -> Floats | None:
        """Residuals of the reference fit, (n,), in the unit of the response."""
        if self.response is None:
            return None
        return np.asarray(self.response - self.design.X @ self.coefficients)
