"""How the rows of a study multiply when it is asked about more of them, or fewer: a rule that is always said aloud.

A plan makes its own tables. Data in hand know nothing of the rows that are not there; a rule supplies them.
"""

from __future__ import annotations

import re
from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np

from withstand.errors import ScenarioError, nearest
from withstand.study.design import Design, Ints
from withstand.study.rows import DrawnRows, FixedRows
from withstand.study.study import Study

COPIES = (
    "Copies share leverage out: c copies divide every leverage by c and bring no farther point, as real rows would from "
    "a predictor with long tails; where single far rows matter, compare with 'resample' or with a plan."
)
"""What to bear in mind where rows are copied."""


@dataclass(frozen=True, eq=False)
class Growth(ABC):
    """A rule that gives the study at any number of rows."""

    study: Study

    rule: ClassVar[str]

    @property
    @abstractmethod
    def sentence(self) -> str:
        """What the rule does, for people, with its trap."""

    @property
    def smallest(self) -> int:
        """The smallest number of rows: those there are. Fewer would be another design, without some of the far rows."""
        return self.study.n

    @property
    def step(self) -> int:
        """Numbers of rows go up by this."""
        return 1

    @abstractmethod
    def at(self, n: int) -> Study:
        """The study with n rows.

        Raises
        ------
        DesignError
            If n rows cannot carry the model.
        """

    def _with(self, design: Design, n: int) -> Study:
        return replace(
            self.study,
            design=design,
            rows=FixedRows(design),
            response=None,
            account=None,
            labels=(),
            digest=f"{self.study.digest}|{self.rule}|{n}",
        )


@dataclass(frozen=True, eq=False)
class Stack(Growth):
    """Whole copies of the rows, then a balanced remainder."""

    rule = "stack"

    @property
    def sentence(self) -> str:
        """See Growth."""
        unit = "groups" if self.study.design.groups is not None else "rows"
        return (
            f"More rows are whole copies of the {self.study.n} there are, then a remainder of {unit} taken evenly over the "
            f"cells and the range of the fitted mean. {COPIES}"
        )

    def at(self, n: int) -> Study:
        """See Growth."""
        design = self.study.design
        copies, rest = divmod(n, design.n)
        index = np.concatenate([np.tile(np.arange(design.n), copies), self._remainder(rest)]).astype(np.int64)
        grown = design.rows(index)
        if design.groups is not None:
            # Copies of a group are new groups, not more rows of the old one.
            labels = design.groups[index] + design.group_count * (np.arange(n) // design.n)
            grown = replace(grown, groups=np.unique(labels, return_inverse=True)[1].astype(np.int64))
        if design.order is not None:
            if design.groups is None:
                raise ScenarioError(
                    "copied rows would stand at the same place in the order",
                    where="growth",
                    remedy="A series grows by 'extend', or name groups whose series are copied whole.",
                )
            grown = grown.rows(np.argsort(design.order[index], kind="stable").astype(np.int64))
        return self._with(grown, n)

    def _remainder(self, rest: int) -> Ints:
        design = self.study.design
        fitted = design.X @ self.study.coefficients
        if design.groups is not None:
            means = np.bincount(design.groups, weights=fitted) / np.bincount(design.groups)
            whole = _spread_out(np.argsort(means, kind="stable"))
            rows = np.concatenate([np.flatnonzero(design.groups == group) for group in whole])
            return np.asarray(rows[:rest])
        cells = [factor.codes for factor in design.factors.values()]
        ranked = np.lexsort([fitted, *cells])
        return np.sort(_evenly(ranked, rest))


@dataclass(frozen=True, eq=False)
class Resample(Growth):
    """Rows drawn with replacement, a fresh set in every block."""

    rule = "resample"

    @property
    def sentence(self) -> str:
        """See Growth."""
        unit = "groups" if self.study.design.groups is not None else "rows"
        return (
            f"The rows of each block of replicates are drawn anew, whole {unit} with replacement from the {self.study.n} there "
            "are. No value is new, so the farthest row stays the farthest however many are drawn."
        )

    def at(self, n: int) -> Study:
        """See Growth."""
        if self.study.design.order is not None:
            raise ScenarioError(
                "rows drawn with replacement would stand at the same place in the order",
                where="growth",
                remedy="A series grows by 'extend'.",
            )
        rows = DrawnRows(self.study.design, n)
        # The design shown is a balanced one of that length; only the blocks are drawn.
        shown = Stack(self.study).at(n).design
        return replace(self._with(shown, n), rows=rows)


@dataclass(frozen=True, eq=False)
class Extend(Growth):
    """A longer series: the predictors come round again in their order, and the order goes on."""

    rule = "extend"

    @property
    def sentence(self) -> str:
        """See Growth."""
        return (
            f"A longer series repeats the {self.study.n} rows of predictors from the first on, while the order column goes on "
            f"with its own spacing; a shorter one is the beginning. {COPIES}"
        )

    def at(self, n: int) -> Study:
        """See Growth."""
        design = self.study.design
        if design.order is None:
            raise ScenarioError(
                "'extend' lengthens a series, and the study names no order column",
                where="growth",
                remedy="Name it with order = \"...\", or use 'stack'.",
            )
        if design.groups is not None:
            raise ScenarioError(
                "'extend' lengthens one series, and the rows are in groups", where="growth", remedy="Use 'stack': more groups."
            )
        index = np.arange(n) % design.n
        gaps = np.diff(design.order)
        turn = float(design.order[-1] - design.order[0] + np.median(gaps))
        ahead = turn * (np.arange(n) // design.n)
        grown = design.rows(index)
        X = grown.X.copy()
        columns = dict(grown.columns)
        for name, values in design.columns.items():
            if not np.array_equal(values, design.order):
                continue
            columns[name] = columns[name] + ahead
            for j, column in enumerate(design.names):
                if np.array_equal(design.X[:, j], values):
                    X[:, j] += ahead
                elif re.search(rf"(?<!\w){re.escape(name)}(?!\w)", column) and n > design.n:
                    raise ScenarioError(
                        f"the model column '{column}' is computed from the order column, and the rows to come would need it",
                        where="growth",
                        remedy="Use the order column itself in the model, or describe the longer series as a plan.",
                    )
        fitted = None if design.fitted is None else X @ self.study.coefficients
        grown = replace(grown, X=X, columns=columns, order=design.order[index] + ahead, fitted=fitted)
        return self._with(grown, n)


@dataclass(frozen=True, eq=False)
class Planned(Growth):
    """A plan's own generator."""

    rule = "plan"

    @property
    def sentence(self) -> str:
        """See Growth."""
        if self.study.rows.fixed:
            return "The plan lays out its columns anew for every number of rows; they are the same in every replicate."
        return (
            "The plan lays out its columns anew for every number of rows, and draws its random columns afresh in each block of "
            "replicates; tables that cannot carry the model are drawn again."
        )

    @property
    def step(self) -> int:
        """See Growth: whole sets of the cells of a crossing."""
        return int(getattr(self.study.grow, "step", 1))

    @property
    def smallest(self) -> int:
        """See Growth: one residual degree of freedom."""
        least = self.study.design.p + 1
        return -(-least // self.step) * self.step

    def at(self, n: int) -> Study:
        """See Growth."""
        if self.study.grow is None:
            raise ScenarioError("this study is no plan", where="growth", remedy=f"Use one of: {', '.join(RULES)}.")
        return self.study.grow(n)


RULES: dict[str, type[Growth]] = {rule.rule: rule for rule in (Stack, Resample, Extend)}
"""Rules for data in hand, by name."""


def growth_of(study: Study, rule: str | None = None) -> Growth:
    """The rule by which a study grows.

    Parameters
    ----------
    study : Study
        Data or plan.
    rule : {"stack", "resample", "extend"}, optional
        For data. Left out: `extend` for one series in time order, `resample` where the rows are drawn anew in each block,
        `stack` otherwise.

    Raises
    ------
    ScenarioError
        If the rule is unknown, given for a plan, or does not suit the study.
    """
    if study.grow is not None:
        if rule is not None:
            raise ScenarioError(
                f"growth '{rule}' is for data, and this study is a plan",
                where="growth",
                remedy="Leave it out: a plan lays out as many rows as it is asked for.",
            )
        return Planned(study)
    asked = rule is not None
    if rule is None:
        series = study.design.order is not None and study.design.groups is None
        rule = Extend.rule if series else Stack.rule if study.rows.fixed else Resample.rule
    if rule not in RULES:
        raise ScenarioError(f"unknown growth '{rule}'", where="growth", remedy=nearest(rule, RULES))
    growth = RULES[rule](study)
    if asked:
        # Refused here, before anything is computed, if it does not suit the study.
        growth.at(study.n + 1)
    return growth


def _evenly(ranked: Ints, count: int) -> Ints:
    """`count` members of a ranking, evenly spaced, the middle ones first."""
    return np.asarray(ranked[np.floor((np.arange(count) + 0.5) * len(ranked) / max(count, 1)).astype(np.int64)])


def _spread_out(ranked: Ints) -> Ints:
    """A ranking in an order of which every beginning is spread over all of it (van der Corput 1935, base 2)."""
    places = np.arange(1, len(ranked) + 1)
    fractions, digit = np.zeros(len(ranked)), 0.5
    while places.any():
        fractions += digit * (places % 2)
        places, digit = places // 2, digit / 2.0
    # The fractions point at ranks; each rank is taken by the first that comes nearest.
    order = np.empty(len(ranked), dtype=np.int64)
    order[np.argsort(fractions, kind="stable")] = ranked
    return order
