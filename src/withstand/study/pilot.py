"""A pilot: a few rows that say how large the errors are and what the columns look like, with all their uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pandas as pd

from withstand import tails
from withstand.errors import TableError
from withstand.study.columns import Drawn, Levels, PlannedColumn, Shares
from withstand.study.design import Floats

FEWEST, MOST = 5, 20
"""Rows of a pilot. With fewer there is next to nothing to go by; with more it is a study, to be given as data."""

_FEW_VALUES = 5
"""A numeric column with at most so many values, each seen twice on average, is taken for one with fixed levels."""


@dataclass(frozen=True, eq=False)
class Pilot:
    """A pilot table.

    Parameters
    ----------
    frame : DataFrame
        5 to 20 complete rows.
    level : float
        Level of the range of the error SD.

    Raises
    ------
    TableError
        If it has too few or too many rows, or blank cells.
    """

    frame: pd.DataFrame
    level: float = 0.9

    def __post_init__(self) -> None:
        if not FEWEST <= len(self.frame) <= MOST:
            remedy = (
                'Give it as the data of the study: data = "...".'
                if len(self.frame) > MOST
                else "State error_sd and its range instead."
            )
            raise TableError(
                f"a pilot has {FEWEST} to {MOST} rows, and this one has {len(self.frame)}", where="pilot", remedy=remedy
            )
        blank = self.frame.isna().any(axis=1).to_numpy()
        if blank.any():
            raise TableError(
                f"row {int(np.argmax(blank)) + 1} of the pilot has a blank cell",
                where="pilot",
                remedy="Fill it or leave the row out.",
            )

    def __repr__(self) -> str:
        return f"Pilot({self.frame.to_csv(index=False)!r}, {self.level!r})"

    def columns(self, names: list[str]) -> dict[str, PlannedColumn]:
        """Laws read off the pilot: normal with its means, SDs and correlations; text by its shares; few values as levels.

        Parameters
        ----------
        names : list of str
            Which columns.
        """
        found: dict[str, PlannedColumn] = {}
        drawn: list[str] = []
        for name in names:
            column = self.frame[name]
            if not pd.api.types.is_numeric_dtype(column) or pd.api.types.is_bool_dtype(column):
                # In the order in which a table of data has its levels.
                shares = column.astype(str).value_counts(normalize=True).sort_index()
                found[name] = Shares({str(level): float(share) for level, share in shares.items()})
                continue
            values = np.asarray(column, dtype=float)
            distinct = np.unique(values)
            if 2 <= distinct.size <= min(_FEW_VALUES, len(values) // 2):
                found[name] = Levels(tuple(float(value) for value in distinct))
            elif distinct.size == 1:
                raise TableError(
                    f"'{name}' is the same in every row of the pilot", where="pilot", remedy="Describe this column in the plan."
                )
            else:
                together = {other: self._correlation(other, values) for other in drawn}
                drawn.append(name)
                found[name] = Drawn("normal", mean=float(values.mean()), sd=float(values.std(ddof=1)), correlated=together)
        return found

    def _correlation(self, other: str, values: Floats) -> float:
        r = float(np.corrcoef(np.asarray(self.frame[other], dtype=float), values)[0, 1])
        return min(max(r, -0.999), 0.999)

    def sd_range(self, error_sd: float, df: int) -> tuple[float, float]:
        """Interval for the error SD: error_sd sqrt(df / chi-square quantile).

        Parameters
        ----------
        error_sd : float
            Residual SD of the pilot.
        df : int
            Its residual degrees of freedom.

        Notes
        -----
        Exact under normal errors; Student's era, textbook.
        """
        tail = (1.0 - self.level) / 2.0
        low = error_sd * math.sqrt(df / float(tails.chi2_isf(tail, df)))
        return low, error_sd * math.sqrt(df / float(tails.chi2_ppf(tail, df)))

    def warning(self, error_sd: float, df: int) -> str:
        """What a reader must know about an error SD that rests on so few rows."""
        low, high = self.sd_range(error_sd, df)
        return (
            f"the error SD {error_sd:.4g} rests on a pilot of {len(self.frame)} rows ({df} degrees of freedom): "
            f"{100 * self.level:g} % interval {low:.4g} to {high:.4g}. The number of rows goes with its square, "
            f"by a factor of {(low / error_sd) ** 2:.2f} to {(high / error_sd) ** 2:.2f}"
        )
