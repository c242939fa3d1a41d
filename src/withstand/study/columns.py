"""Columns of a study without data: level columns that are balanced and crossed, blocks, sequences, and columns with a law.

Rows are laid out so that a longer layout begins with the shorter one: adding rows never changes those that are there.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from withstand import tails
from withstand.errors import ScenarioError, nearest
from withstand.study.design import Floats

MOST_CELLS = 2000
"""Largest number of cells of a factorial crossing."""


@dataclass(frozen=True)
class PlannedColumn(ABC):
    """A column of a planned table."""

    @property
    @abstractmethod
    def random(self) -> bool:
        """Whether it is drawn, so that a fresh table has other values."""

    @property
    def numeric(self) -> bool:
        """Whether its values are numbers."""
        return True

    @abstractmethod
    def check(self, name: str) -> None:
        """Raise ScenarioError if the column cannot be laid out; `name` is its name, for the message."""


@dataclass(frozen=True)
class Levels(PlannedColumn):
    """Fixed levels in turn; several such columns are crossed.

    Parameters
    ----------
    levels : tuple of float or of str
        At least two, all different, all numbers or all text.
    """

    levels: tuple[float, ...] | tuple[str, ...]

    @property
    def random(self) -> bool:
        """See PlannedColumn."""
        return False

    @property
    def numeric(self) -> bool:
        """See PlannedColumn."""
        return not isinstance(self.levels[0], str)

    def check(self, name: str) -> None:
        """See PlannedColumn."""
        where = _where(name, "levels")
        if len(self.levels) < 2 or len(set(self.levels)) < len(self.levels):
            raise ScenarioError(
                f"levels {list(self.levels)} of '{name}' are not two or more different values",
                where=where,
                remedy="Name each level once, as in levels = [0, 1, 2].",
            )
        if len({isinstance(level, str) for level in self.levels}) > 1:
            raise ScenarioError(
                f"levels {list(self.levels)} of '{name}' mix numbers and text", where=where, remedy="Use one or the other."
            )


@dataclass(frozen=True)
class Blocks(PlannedColumn):
    """Runs of `size` rows in one block, b1, b2, ...: more rows make more blocks.

    Parameters
    ----------
    size : int
        Rows of a block, at least 2. With the number of cells of the crossing, every block has each cell once.
    """

    size: int

    @property
    def random(self) -> bool:
        """See PlannedColumn."""
        return False

    @property
    def numeric(self) -> bool:
        """See PlannedColumn."""
        return False

    def check(self, name: str) -> None:
        """See PlannedColumn."""
        if self.size < 2:
            raise ScenarioError(
                f"blocks of {self.size} rows in '{name}'", where=_where(name, "blocks_of"), remedy="Give 2 rows or more."
            )


@dataclass(frozen=True)
class InSequence(PlannedColumn):
    """1, 2, 3, ... down the rows, such as weeks."""

    @property
    def random(self) -> bool:
        """See PlannedColumn."""
        return False

    def check(self, name: str) -> None:
        """See PlannedColumn: always possible."""


@dataclass(frozen=True)
class Shares(PlannedColumn):
    """A categorical column with a share for every level.

    Parameters
    ----------
    shares : mapping of str to float
        Positive, with sum 1.
    by_count : bool
        False draws every row by chance, as a survey does. True fixes the counts, as an experiment does: the levels are spread
        evenly down the rows, and every n has its counts as near to the shares as can be.
    """

    shares: Mapping[str, float]
    by_count: bool = False

    @property
    def random(self) -> bool:
        """See PlannedColumn."""
        return not self.by_count

    @property
    def numeric(self) -> bool:
        """See PlannedColumn."""
        return False

    def check(self, name: str) -> None:
        """See PlannedColumn."""
        given = ", ".join(f"{level} = {share:g}" for level, share in self.shares.items())
        if len(self.shares) < 2 or min(self.shares.values()) <= 0.0 or abs(sum(self.shares.values()) - 1.0) > 1e-6:
            raise ScenarioError(
                f"shares ({given}) of '{name}' are not two or more positive numbers with sum 1",
                where=_where(name, "shares"),
                remedy="Give shares such as { south = 0.7, north = 0.3 }.",
            )

    @property
    def probabilities(self) -> Floats:
        """Shares in order, with sum 1 exactly."""
        values = np.array(list(self.shares.values()), dtype=float)
        return np.asarray(values / values.sum())


_PARAMETERS = {
    "normal": ("mean", "sd"),
    "lognormal": ("mean", "sd"),
    "uniform": ("low", "high"),
    "integers": ("low", "high"),
}


@dataclass(frozen=True)
class Drawn(PlannedColumn):
    """A numeric column drawn from a law.

    Parameters
    ----------
    law : {"normal", "lognormal", "uniform", "integers"}
        The law; integers are the whole numbers from low to high, equally likely.
    mean, sd : float
        Of the column itself, in its own unit: normal and lognormal.
    low, high : float
        Ends of the range, both included: uniform and integers.
    correlated : mapping of str to float
        Correlation with other numeric columns. Between drawn columns it is that of the normal scores behind them (a Gaussian
        copula): exact for two normal columns, slightly weaker for other laws. With levels or a sequence it is the correlation
        of the normal score with the value of that column.
    """

    law: str
    mean: float | None = None
    sd: float | None = None
    low: float | None = None
    high: float | None = None
    correlated: Mapping[str, float] = field(default_factory=dict)

    @property
    def random(self) -> bool:
        """See PlannedColumn."""
        return True

    def check(self, name: str) -> None:
        """See PlannedColumn."""
        if self.law not in _PARAMETERS:
            raise ScenarioError(
                f"unknown law '{self.law}' of '{name}'", where=_where(name, "law"), remedy=nearest(self.law, _PARAMETERS)
            )
        needed = _PARAMETERS[self.law]
        for parameter in ("mean", "sd", "low", "high"):
            given = getattr(self, parameter)
            if (given is not None) != (parameter in needed) or (given is not None and not np.isfinite(given)):
                state = "is missing" if given is None else f"= {given:g} does not belong to it or is not finite"
                raise ScenarioError(
                    f"column '{name}' has the law '{self.law}', and {parameter} {state}",
                    where=_where(name, parameter),
                    remedy=f"This law takes {needed[0]} and {needed[1]}.",
                )
        if self.sd is not None and self.sd <= 0.0:
            raise ScenarioError(f"sd of '{name}' is {self.sd:g}", where=_where(name, "sd"), remedy="Give a positive number.")
        if self.law == "lognormal" and self.mean is not None and self.mean <= 0.0:
            raise ScenarioError(
                f"mean of the lognormal column '{name}' is {self.mean:g}",
                where=_where(name, "mean"),
                remedy="Give the mean of the column itself, a positive number.",
            )
        if self.low is not None and self.high is not None:
            whole = self.law != "integers" or (self.low == int(self.low) and self.high == int(self.high))
            if not self.low < self.high or not whole:
                raise ScenarioError(
                    f"the range of '{name}' is {self.low:g} to {self.high:g}",
                    where=_where(name, "low"),
                    remedy="Give low below high" + (", both whole numbers." if self.law == "integers" else "."),
                )

    def values(self, scores: Floats) -> Floats:
        """The column from standard normal scores (n,)."""
        if self.mean is not None and self.sd is not None:
            if self.law == "normal":
                return self.mean + self.sd * scores
            log_variance = np.log1p((self.sd / self.mean) ** 2)
            return np.exp(np.log(self.mean) - log_variance / 2.0 + np.sqrt(log_variance) * scores)
        if self.low is None or self.high is None:
            raise TypeError("a column is checked before it is drawn")
        places = tails.normal_cdf(scores)
        if self.law == "integers":
            count = self.high - self.low + 1.0
            return np.asarray(self.low + np.minimum(np.floor(places * count), count - 1.0))
        return np.asarray(self.low + (self.high - self.low) * places)


def _where(name: str, key: str) -> str:
    return f"study.plan.columns.{name}.{key}"


_MOST_LABELS = 10_000
"""A factor with more levels would need more rows than a plan has any use for."""


def labels_of(name: str, column: PlannedColumn) -> tuple[str, ...]:
    """The labels of a numeric column that stands in C(): all values it can take.

    Raises
    ------
    ScenarioError
        If there is no list of them.
    """
    if isinstance(column, Levels):
        values = sorted(float(level) for level in column.levels)
    elif isinstance(column, Drawn) and column.law == "integers" and column.low is not None and column.high is not None:
        if column.high - column.low >= _MOST_LABELS:
            raise ScenarioError(
                f"'{name}' stands in C() and can take {column.high - column.low + 1.0:.6g} values",
                where="study.model",
                remedy="Take it out of C(), or narrow its range.",
            )
        values = [float(value) for value in range(int(column.low), int(column.high) + 1)]
    else:
        raise ScenarioError(
            f"'{name}' stands in C() and has no fixed values", where="study.model", remedy="Give it levels, integers or shares."
        )
    return tuple(f"{value:.15g}" for value in values)
