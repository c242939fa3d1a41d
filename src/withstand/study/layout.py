"""Laying out the table of a plan: which columns, how many rows, what goes together, and what is lost on the way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import pandas as pd

from withstand.errors import ScenarioError, nearest
from withstand.study.balance import crossing, spread_evenly
from withstand.study.columns import (
    MOST_CELLS,
    Blocks,
    Drawn,
    InSequence,
    Levels,
    PlannedColumn,
    Shares,
)
from withstand.study.design import Floats, Ints


@dataclass(frozen=True)
class Layout:
    """The columns of a planned table.

    Parameters
    ----------
    columns : mapping of str to PlannedColumn
        By name, in order.
    attrition : float
        Share of the rows that are lost at random before the analysis, from 0 to below 1.

    Raises
    ------
    ScenarioError
        If a column cannot be laid out, or correlations contradict each other.

    Notes
    -----
    Level columns are crossed, and the rows go through the cells in an order of which every beginning is as balanced as can be.
    With attrition a, round(a n) of the n rows are lost, every set of them equally likely.
    """

    columns: Mapping[str, PlannedColumn] = field(default_factory=dict)
    attrition: float = 0.0

    def __post_init__(self) -> None:
        if not self.columns:
            raise ScenarioError(
                "the plan has no columns", where="study.plan.columns", remedy="Add one, as in dose = { levels = [0, 1, 2] }."
            )
        for name, column in self.columns.items():
            column.check(name)
        if not 0.0 <= self.attrition < 1.0:
            raise ScenarioError(
                f"attrition is {self.attrition:g}",
                where="study.plan.attrition",
                remedy="Give the share of rows lost, from 0 to below 1, such as 0.1.",
            )
        cells = int(np.prod([len(column.levels) for column in self._level_columns.values()], dtype=float))
        if cells > MOST_CELLS:
            raise ScenarioError(
                f"crossing {', '.join(self._level_columns)} makes {cells} cells",
                where="study.plan.columns",
                remedy=f"At most {MOST_CELLS} are crossed; use fewer levels, or shares for some of the columns.",
            )
        self._copula  # noqa: B018  # checks the correlations

    @property
    def _level_columns(self) -> dict[str, Levels]:
        return {name: column for name, column in self.columns.items() if isinstance(column, Levels)}

    @property
    def cells(self) -> int:
        """Cells of the crossing; 1 without level columns."""
        return len(self._cells)

    @property
    def random(self) -> bool:
        """Whether two tables differ."""
        return self.attrition > 0.0 or any(column.random for column in self.columns.values())

    def analysed(self, n: int) -> int:
        """Rows left of n."""
        return n - round(self.attrition * n)

    def table(self, n: int, generator: np.random.Generator) -> pd.DataFrame:
        """A table.

        Parameters
        ----------
        n : int
            Rows to collect; those lost are drawn among them.
        generator : numpy.random.Generator
            For random columns and for the loss.

        Returns
        -------
        DataFrame of `analysed(n)` rows
            Categorical columns are of pandas' category type with all their levels, whether or not they occur.
        """
        cells = self._cells[np.arange(n) % len(self._cells)]
        values: dict[str, object] = {}
        fixed: dict[str, Floats] = {}
        level_names = list(self._level_columns)
        for name, column in self.columns.items():
            match column:
                case Levels():
                    codes = cells[:, level_names.index(name)]
                    values[name] = _filled(codes, column.levels)
                case Blocks():
                    codes = np.arange(n) // column.size
                    values[name] = _filled(codes, tuple(f"b{i + 1}" for i in range(int(codes[-1]) + 1)))
                case InSequence():
                    values[name] = np.arange(1.0, n + 1.0)
                case Shares():
                    shares = column.probabilities
                    codes = spread_evenly(shares, n) if column.by_count else generator.choice(len(shares), n, p=shares)
                    values[name] = _filled(np.asarray(codes), tuple(column.shares))
                case Drawn():
                    values[name] = None  # keeps the order of the columns
            if column.numeric and not column.random:
                fixed[name] = np.asarray(values[name], dtype=float)
        for name, drawn in self._drawn(n, fixed, generator).items():
            values[name] = drawn
        frame = pd.DataFrame(values)
        if self.attrition == 0.0:
            return frame
        kept = np.sort(generator.permutation(n)[: self.analysed(n)])
        return frame.iloc[kept].reset_index(drop=True)

    @cached_property
    def _cells(self) -> Ints:
        return crossing([len(column.levels) for column in self._level_columns.values()] or [1])

    @cached_property
    def _copula(self) -> tuple[list[str], list[str], Floats]:
        """Names of drawn columns, names of the fixed ones they go with, and all correlations but those among the latter."""
        drawn = {name: column for name, column in self.columns.items() if isinstance(column, Drawn)}
        others = [name for name, column in self.columns.items() if column.numeric and not column.random]
        partners = dict.fromkeys(other for column in drawn.values() for other in column.correlated if other in others)
        names = [*drawn, *partners]
        R = np.eye(len(names))
        for name, column in drawn.items():
            for other, correlation in column.correlated.items():
                where = f"study.plan.columns.{name}.correlated"
                if other not in names or other == name:
                    known = [*(one for one in drawn if one != name), *others]
                    what = f"'{name}' is to go with '{other}', which is no other numeric column of the plan"
                    raise ScenarioError(what, where=where, remedy=nearest(other, known) if known else "Add one.")
                if not -1.0 < correlation < 1.0:
                    raise ScenarioError(
                        f"the correlation of '{name}' with '{other}' is {correlation:g}",
                        where=where,
                        remedy="Give a number between -1 and 1.",
                    )
                i, j = names.index(name), names.index(other)
                if R[i, j] not in (0.0, correlation):
                    raise ScenarioError(
                        f"the correlation of '{name}' and '{other}' is given twice, as {R[i, j]:g} and as {correlation:g}",
                        where=where,
                        remedy="Keep one of them.",
                    )
                R[i, j] = R[j, i] = correlation
        _root(R[: len(drawn), : len(drawn)], "these correlations among drawn columns cannot all hold")
        return list(drawn), list(partners), R

    def _drawn(self, n: int, fixed: Mapping[str, Floats], generator: np.random.Generator) -> dict[str, Floats]:
        names, partners, R = self._copula
        if not names:
            return {}
        k = len(names)
        among, across = R[:k, :k], R[:k, k:]
        scores = generator.standard_normal((n, k))
        mean = np.zeros((n, k))
        if partners:
            S = np.column_stack([_standardised(fixed[name], name) for name in partners])
            # Correlations among the fixed columns are what the layout makes them.
            B = np.linalg.lstsq(S.T @ S / n, across.T, rcond=None)[0]
            mean, among = S @ B, among - across @ B
        root = _root(among, f"the correlations with {', '.join(partners)} cannot all hold")
        scores = mean + scores @ root.T
        columns = {name: column for name, column in self.columns.items() if isinstance(column, Drawn)}
        return {name: columns[name].values(scores[:, j]) for j, name in enumerate(names)}


def _standardised(values: Floats, name: str) -> Floats:
    spread = float(np.std(values))
    if spread == 0.0:
        raise ScenarioError(
            f"'{name}' is the same in every row, and nothing goes with it",
            where="study.plan.rows",
            remedy="Ask for more rows, or leave out the correlation.",
        )
    return np.asarray((values - values.mean()) / spread)


def _root(R: Floats, complaint: str) -> Floats:
    """A matrix with root root' = R.

    Raises
    ------
    ScenarioError
        If R is no covariance.
    """
    values, vectors = np.linalg.eigh(R)
    if values.size and values[0] < -1e-9:
        raise ScenarioError(
            complaint,
            where="study.plan.columns",
            remedy="Make them weaker: columns that both go closely with a third must go with each other.",
        )
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def _filled(codes: Ints, levels: tuple[float, ...] | tuple[str, ...]) -> object:
    if isinstance(levels[0], str):
        return pd.Categorical.from_codes(codes, categories=pd.Index([str(level) for level in levels]))
    return np.asarray(levels, dtype=float)[codes]
