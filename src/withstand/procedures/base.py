"""What a procedure is: an estimator with its interval and test, fitted to a whole block of replicates at once.

A procedure registers itself here; the command line, the lists, the documentation table and the contract tests read the
registry. Options are dataclass fields with defaults, so that `identity` can name every variant.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from enum import StrEnum
from typing import ClassVar

import numpy as np

from withstand import tails
from withstand.procedures.fit import Fit, WaldFit
from withstand.procedures.forms import ResidualForm, evaluate_all
from withstand.procedures.sample import Sample
from withstand.registry import Registry
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

Fitter = Callable[[Sample], list[Fit]]
"""Fits one block; the fits are in the order of the focal quantities the fitter was prepared for."""


class Answer(StrEnum):
    """What a procedure can give for a focal quantity."""

    ESTIMATE = "estimate"
    INTERVAL = "interval"
    """An interval, or a confidence region for a joint quantity."""
    TEST = "test"


@dataclass(frozen=True)
class Procedure(ABC):
    """An estimator with its interval and test."""

    name: ClassVar[str]
    family: ClassVar[str]
    title: ClassVar[str]
    formula: ClassVar[str]
    source: ClassVar[str]
    null: ClassVar[str] = "the focal quantity has the stated value"
    """Null hypothesis of its test, in words."""

    target: ClassVar[str] = "coefficients of the mean of the response"
    """What it estimates, in words."""

    equivariant: ClassVar[bool] = True
    """Whether adding X beta to the response adds beta to the estimate and scaling the response scales it, so that one block
    of errors gives coverage, size and power."""

    claims_variance: ClassVar[bool] = True
    """Whether it claims a variance of its estimate; some intervals come without one."""

    @property
    def identity(self) -> str:
        """Name, with every option that is not at its default."""
        changed = [f"{f.name}={getattr(self, f.name)}" for f in fields(self) if getattr(self, f.name) != f.default]
        return f"{self.name}({', '.join(changed)})" if changed else self.name

    @property
    def key(self) -> str:
        """What stored results are filed under: the identity, unless something behind it can change."""
        return self.identity

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """Why the procedure has no answer for this focus on this design, 'because' included; None if it has."""
        return None

    def answers(self, focus: Focus) -> frozenset[Answer]:
        """What the procedure gives for a focal quantity it applies to; measures of anything else are not reported."""
        if focus.kind is FocusKind.NEW:
            return frozenset({Answer.ESTIMATE, Answer.INTERVAL})
        if focus.kind is FocusKind.JOINT:
            return frozenset({Answer.INTERVAL, Answer.TEST})
        return frozenset(Answer)

    @abstractmethod
    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """Do once all that depends on the design alone.

        Parameters
        ----------
        design : Design
            The rows.
        foci : sequence of Focus
            Focal quantities to answer for, all applicable.
        level : float
            Confidence level; tests are at 1 - level.

        Returns
        -------
        callable
            Maps a Sample to one Fit a focus.
        """


@dataclass(frozen=True)
class LinearProcedure(Procedure):
    """An estimate linear in the response, with a variance estimate quadratic in the residuals.

    These are the procedures that have exact answers under normal errors.
    """

    weighted: ClassVar[bool] = False
    """Whether the fit uses the study's known weights."""

    @abstractmethod
    def form(self, design: Design, A: Floats) -> ResidualForm:
        """The variance estimate of A y, A (k, n), on the design actually fitted."""

    def degrees_of_freedom(self, design: Design, A: Floats) -> float:
        """Degrees of freedom of the reference distribution; n - p unless the procedure says otherwise."""
        return design.df

    def critical(self, design: Design, A: Floats, level: float) -> float:
        """Critical value: of |t| for k = 1, of the statistic divided by k otherwise."""
        k = A.shape[0]
        df = self.degrees_of_freedom(design, A)
        if k == 1:
            return float(tails.t_isf((1.0 - level) / 2.0, df))
        return float(tails.f_isf(1.0 - level, k, df))

    def fitted_design(self, design: Design) -> Design:
        """The design actually fitted: with known weights, the weighted one."""
        return design.weighted if self.weighted else design

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        used = self.fitted_design(design)
        estimators = [used.estimator(focus.L) for focus in foci]
        bases = [used.basis_rows(focus.L) for focus in foci]
        forms = [self.form(used, A) for A in estimators]
        criticals = [self.critical(used, A, level) for A in estimators]
        predicts = [focus.kind is FocusKind.NEW for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            seen = sample.weighted if self.weighted else sample
            fits: list[Fit] = []
            covariances = evaluate_all(forms, seen)
            for basis, covariance, critical, predict in zip(bases, covariances, criticals, predicts, strict=True):
                claimed = covariance + seen.residual_sum / used.df if predict else covariance
                fits.append(WaldFit(basis @ seen.projections, None, claimed, critical))
            return fits

        return fit


def pairwise(A: Floats) -> Floats:
    """Products a_i,t a_j,t of all pairs of rows of A (k, n), as (k, k, n)."""
    return np.asarray(A[:, None, :] * A[None, :, :])


REGISTRY = Registry(Procedure, "procedure", "procedures.use")
"""Every procedure by name, in the order of registration."""

register = REGISTRY.register
make_procedure = REGISTRY.make
