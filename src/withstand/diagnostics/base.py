"""What a diagnostic is: a statistic of the least-squares residuals, computed for a whole block of replicates at once.

A diagnostic registers itself here; the lists and the contract tests read the registry. Options are dataclass fields with
defaults, so that `identity` can name every variant.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, fields
from enum import StrEnum
from typing import ClassVar

import numpy as np

from withstand.procedures.sample import Sample
from withstand.registry import Registry
from withstand.study.design import Design, Floats

Statistic = Callable[[Sample], Floats]
"""Maps a sample of B replicates to B values, (B,)."""

_RANK = 1e-10
"""Smallest accepted singular value of scaled columns, relative to the largest."""


class Tail(StrEnum):
    """On which side a value counts against the null hypothesis."""

    UPPER = "upper"
    LOWER = "lower"
    BOTH = "both"


@dataclass(frozen=True)
class Diagnostic(ABC):
    """A statistic of the residuals with the hypothesis it tests.

    Every statistic is free of the scale of the errors and, unless `needs` says 'response', of the coefficients: under the
    ideal model its law depends on the design alone.
    """

    name: ClassVar[str]
    title: ClassVar[str]
    null: ClassVar[str]
    formula: ClassVar[str]
    source: ClassVar[str]
    needs: ClassVar[str] = ""
    """What it needs besides the residuals: 'order', 'groups', 'response', or nothing."""
    tail: ClassVar[Tail] = Tail.UPPER

    @property
    def identity(self) -> str:
        """Name, with every option that is not at its default."""
        changed = [f"{f.name}={getattr(self, f.name)}" for f in fields(self) if getattr(self, f.name) != f.default]
        return f"{self.name}({', '.join(changed)})" if changed else self.name

    def not_applicable(self, design: Design) -> str | None:
        """Why the statistic is not defined on the design, with the remedy; None if it is."""
        if self.needs == "order" and design.order is None:
            return f"not applicable, because '{self.name}' needs a time order; name the column: order = \"...\""
        if self.needs == "groups" and not 1 < design.group_count < design.n:
            return f"not applicable, because '{self.name}' needs two groups or more with several rows; name groups = \"...\""
        return None

    @abstractmethod
    def prepare(self, design: Design) -> Statistic:
        """Do once all that depends on the design alone.

        Parameters
        ----------
        design : Design
            The rows.

        Returns
        -------
        callable
            Maps a Sample of B replicates to the statistic, (B,), dimensionless.
        """

    def p_values(self, design: Design, values: Floats) -> Floats | None:
        """Textbook p-values of values of the statistic, (B,); None where practice has no formula.

        These are the ones a package would print, and only as good as its approximation; critical values by simulation are
        exact under the ideal model.
        """
        return None

    def statistic(self, sample: Sample) -> Floats:
        """The statistic of one sample, (B,)."""
        return self.prepare(sample.design)(sample)


class _Silent:
    """The noise of data: there is none to be had."""

    width = 1

    def procedure_generator(self, name: str) -> np.random.Generator:
        """Refuse."""
        raise TypeError(f"'{name}' asked for randomness, and observed data have none")


def observed(design: Design, response: Floats) -> Sample:
    """The sample of one observed response.

    Parameters
    ----------
    design : Design
        The rows.
    response : ndarray of shape (n,)
        In any unit, in the order of the design's rows.

    Returns
    -------
    Sample
        One replicate wide.
    """
    column = np.ascontiguousarray(response, dtype=np.float64).reshape(-1, 1)
    return Sample(design, column, _Silent(), coefficients=np.zeros(design.p))


def independent_columns(Z: Floats) -> Floats:
    """Orthonormal basis (n, q) of the columns of Z (n, m) after removal of their means; q is their rank.

    Columns are scaled first, so that units do not decide what counts as dependent.
    """
    centred = Z - Z.mean(axis=0)
    length = np.linalg.norm(centred, axis=0)
    varies = length > _RANK * np.maximum(np.linalg.norm(Z, axis=0), np.finfo(float).tiny)
    if not varies.any():
        return np.empty((len(Z), 0))
    U, s, _ = np.linalg.svd(centred[:, varies] / length[varies], full_matrices=False)
    return np.ascontiguousarray(U[:, s > _RANK * s[0]])


REGISTRY = Registry(Diagnostic, "diagnostic", "diagnostic")
"""Every diagnostic by name, in the order of registration."""

register = REGISTRY.register
make_diagnostic = REGISTRY.make
