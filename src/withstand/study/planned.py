"""A plan: what will be collected, and what is thought to be true."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

from withstand.errors import ScenarioError
from withstand.study.columns import PlannedColumn
from withstand.study.layout import Layout
from withstand.study.pilot import Pilot

MOST_ROWS = 10_000_000
"""More rows are not laid out: their model matrix alone would fill the memory of a small machine."""

_LARGEST = 1e50
"""Numbers beyond, or below its reciprocal, have no square in double precision once they are scaled by each other."""


@dataclass(frozen=True)
class StudyPlan:
    """What will be collected, and what is thought to be true.

    Parameters
    ----------
    rows : int
        Rows to collect.
    columns : mapping of str to PlannedColumn
        The predictors, and columns that give order or groups.
    coefficients : mapping of str to float
        By name of the model column, in units of the response; those not named are 0.
    error_sd : float, optional
        SD of the errors, in the unit of the response.
    r_squared : float, optional
        Share of the variance of the response that the model explains, in place of `error_sd`.
    pilot : Pilot, optional
        A small table that gives the error SD, in its place; coefficients and columns not named are read off it.
    draw : {"fresh", "once"}
        Whether random columns are drawn anew in each block of replicates.
    attrition : float
        Share of the rows lost at random.
    seed : int
        Seed of the table that is shown, and of the only one where `draw` is "once".

    Raises
    ------
    ScenarioError
        If anything is impossible or missing.
    """

    rows: int
    columns: Mapping[str, PlannedColumn]
    coefficients: Mapping[str, float] = field(default_factory=dict)
    error_sd: float | None = None
    r_squared: float | None = None
    pilot: Pilot | None = None
    draw: Literal["fresh", "once"] = "fresh"
    attrition: float = 0.0
    seed: int = 1

    def __post_init__(self) -> None:
        if not 2 <= self.rows <= MOST_ROWS:
            raise ScenarioError(
                f"the plan has {self.rows} rows",
                where="study.plan.rows",
                remedy=f"Give a whole number from 2 to {MOST_ROWS:,}.",
            )
        given = [name for name in ("error_sd", "r_squared", "pilot") if getattr(self, name) is not None]
        if len(given) != 1:
            raise ScenarioError(
                f"the size of the errors is given by {' and '.join(given)}"
                if given
                else "nothing says how large the errors are",
                where="study.plan",
                remedy="Give one of error_sd, r_squared and pilot.",
            )
        if self.error_sd is not None and not 1.0 / _LARGEST <= self.error_sd <= _LARGEST:
            raise ScenarioError(
                f"error_sd is {self.error_sd:g}",
                where="study.plan.error_sd",
                remedy=f"Give a positive number, of a size between {1.0 / _LARGEST:g} and {_LARGEST:g}.",
            )
        if self.r_squared is not None and not 0.0 < self.r_squared < 1.0:
            raise ScenarioError(
                f"r_squared is {self.r_squared:g}", where="study.plan.r_squared", remedy="Give a share between 0 and 1."
            )
        if self.draw not in ("fresh", "once"):
            raise ScenarioError(f"draw is '{self.draw}'", where="study.plan.draw", remedy="Known: fresh, once.")
        for name, value in self.coefficients.items():
            if not abs(value) <= _LARGEST:
                raise ScenarioError(
                    f"the coefficient of '{name}' is {value:g}",
                    where="study.plan.coefficients",
                    remedy=f"Give a number within {_LARGEST:g} of 0.",
                )
        if self.columns or self.pilot is None:
            self.layout  # noqa: B018  # checks the columns

    @cached_property
    def layout(self) -> Layout:
        """The columns, ready to be laid out."""
        return Layout(self.columns, self.attrition)

    @property
    def fixed(self) -> bool:
        """Whether every block of replicates has the same table."""
        return self.draw == "once" or not self.layout.random

    @property
    def digest(self) -> str:
        """Hash of all that is stated."""
        told = [f"{name}={column!r}" for name, column in self.columns.items()]
        told += [f"{name}={value!r}" for name, value in sorted(self.coefficients.items())]
        told += [repr((self.rows, self.error_sd, self.r_squared, self.pilot, self.draw, self.attrition, self.seed))]
        return hashlib.sha256("|".join(told).encode()).hexdigest()
