"""Where the rows of a table went, and where those of a replicate come from."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np

from withstand.errors import DesignError, ScenarioError
from withstand.study.design import Design, Ints


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
class DrawnRows:
    """N rows drawn with replacement from a design, in every block others.

    Parameters
    ----------
    design : Design
        Where they come from.
    n : int
        How many.
    """

    design: Design
    n: int
    fixed: bool = False

    def draw(self, generator: np.random.Generator) -> Design:
        """Rows, or whole groups until there are n rows; draws that cannot carry the model are drawn again."""
        return full_rank_draw(lambda: self._draw(generator))

    def _draw(self, generator: np.random.Generator) -> Design:
        groups = self.design.groups
        if groups is None:
            return self.design.rows(np.sort(generator.integers(0, self.design.n, self.n)))
        members = [np.flatnonzero(groups == group) for group in range(self.design.group_count)]
        index: list[Ints] = []
        labels: list[Ints] = []
        while sum(map(len, index)) < self.n:
            chosen = members[int(generator.integers(0, len(members)))]
            labels.append(np.full(len(chosen), len(index)))
            index.append(chosen)
        drawn = self.design.rows(np.concatenate(index)[: self.n])
        return replace(drawn, groups=np.concatenate(labels)[: self.n].astype(np.int64))


ATTEMPTS = 100
"""Draws of a design before giving up on one that carries the model."""


def full_rank_draw(draw: Callable[[], Design]) -> Design:
    """The first of several draws that carries the model.

    Raises
    ------
    ScenarioError
        If none of ATTEMPTS does.
    """
    for _ in range(ATTEMPTS):
        try:
            return draw()
        except DesignError as error:
            last = error
    raise ScenarioError(
        f"in {ATTEMPTS} draws no table carried the model; the last time, {last.what}",
        where="rows",
        remedy="Ask for more rows, or drop terms whose levels are rare.",
    )
