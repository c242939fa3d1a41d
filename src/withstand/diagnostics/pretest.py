"""Look first, then choose: run a diagnostic, and fit one way or the other by its outcome. Judged as one procedure."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from withstand.diagnostics.base import REGISTRY as DIAGNOSTICS
from withstand.diagnostics.base import Diagnostic, Statistic, make_diagnostic
from withstand.diagnostics.critical import Critical
from withstand.errors import InputError, ScenarioError, nearest
from withstand.procedures.base import REGISTRY as PROCEDURES
from withstand.procedures.base import Answer, Fitter, Procedure, make_procedure, register
from withstand.procedures.fit import Fit, Flags
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus

SHORT = {"shapiro": "shapiro-wilk"}
"""Names in use for diagnostics that are registered under a longer one."""

BRANCHES = ("both", "passed", "failed")

_DRAWS = 9_999
_DOUBLES = 20_000_000
"""Random numbers spent on a critical value at most."""

_SEED = 271_828
"""Critical values are properties of a design: the same in every run, whatever its seed."""


@register
@dataclass(frozen=True)
class Pretest(Procedure):
    """A diagnostic decides between two procedures.

    Parameters
    ----------
    if_ : str
        The diagnostic; it 'fails' where its p-value is `alpha` or less.
    then : str
        The procedure where the diagnostic fails.
    otherwise : str
        The procedure where it passes.
    alpha : float
        Size of the diagnostic.
    branch : {"both", "passed", "failed"}
        "both" is the rule itself. "passed" and "failed" look at the replicates of one outcome alone: those of the other count
        as failures, so that coverage divided by one minus the failure rate is the coverage given that outcome.

    Notes
    -----
    p-values are the textbook ones; a diagnostic without (Durbin-Watson) is compared with critical values simulated under the
    ideal model, where its law depends on the design alone.
    """

    if_: str = "koenker"
    then: str = "hc3"
    otherwise: str = "ols"
    alpha: float = 0.05
    branch: str = "both"

    name = "pretest"
    family = "pretest"
    title = "test first, then choose"
    formula = "p of the diagnostic <= alpha: then; otherwise: the other"
    source = "common practice; against it Long & Ervin (2000), Zimmerman (2004)"

    def __post_init__(self) -> None:
        where = "procedures.use: pretest"
        if self.diagnostic_name not in DIAGNOSTICS:
            remedy = nearest(self.if_, [*DIAGNOSTICS, *SHORT])
            raise ScenarioError(f"unknown diagnostic '{self.if_}'", where=f"{where}.if", remedy=remedy)
        for key, name in (("then", self.then), ("else", self.otherwise)):
            if name not in PROCEDURES or name == self.name:
                remedy = nearest(name, [known for known in PROCEDURES if known != self.name])
                raise ScenarioError(f"unknown procedure '{name}'", where=f"{where}.{key}", remedy=remedy)
        if not 0.0 < self.alpha < 1.0:
            raise ScenarioError(
                f"alpha is {self.alpha:g}", where=f"{where}.alpha", remedy="Give the size of the diagnostic, such as 0.05."
            )
        if self.branch not in BRANCHES:
            raise ScenarioError(
                f"branch is '{self.branch}'", where=f"{where}.branch", remedy=f"Give one of {', '.join(BRANCHES)}."
            )

    @property
    def diagnostic_name(self) -> str:
        """Name of the diagnostic in its registry."""
        return SHORT.get(self.if_, self.if_)

    @property
    def identity(self) -> str:
        """The rule, as one would say it."""
        told = f"if {self.if_} then {self.then} else {self.otherwise}"
        told += "" if self.alpha == type(self).alpha else f" at {self.alpha:g}"
        return told if self.branch == "both" else f"{told}, where it {self.branch}"

    @property
    def given_passed(self) -> Pretest:
        """The same rule, looked at only where the diagnostic passed: what passing protects from."""
        return Pretest(self.if_, self.then, self.otherwise, self.alpha, "passed")

    @property
    def equivariant(self) -> bool:  # type: ignore[override]  # a rule is as equivariant as its parts, which differ by instance
        """Whether both branches are and the diagnostic looks at residuals alone."""
        return all(branch.equivariant for branch in self._branches) and self._diagnostic.needs != "response"

    @property
    def claims_variance(self) -> bool:  # type: ignore[override]  # as above
        """Whether both branches do."""
        return all(branch.claims_variance for branch in self._branches)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        try:
            reason = self._diagnostic.not_applicable(design)
        except InputError as refusal:
            return f"not applicable, because {refusal.what}"
        reasons = [reason, *(branch.not_applicable(design, focus) for branch in self._branches)]
        return next((reason for reason in reasons if reason is not None), None)

    def answers(self, focus: Focus) -> frozenset[Answer]:
        """See Procedure; what both branches give."""
        first, second = self._branches
        return first.answers(focus) & second.answers(focus)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        fails = detector(self._diagnostic, design, self.alpha)
        then, otherwise = (_fitter(branch, design, foci, level, self.equivariant) for branch in self._branches)

        def fit(sample: Sample) -> list[Fit]:
            failed = fails(sample)
            unseen = {"both": None, "passed": failed, "failed": ~failed}[self.branch]
            pairs = zip(then(sample), otherwise(sample), strict=True)
            return [chosen(failed, where, elsewhere, unseen) for where, elsewhere in pairs]

        return fit

    @property
    def _diagnostic(self) -> Diagnostic:
        return make_diagnostic(self.diagnostic_name)

    @property
    def _branches(self) -> tuple[Procedure, Procedure]:
        return make_procedure(self.then), make_procedure(self.otherwise)


def _fitter(branch: Procedure, design: Design, foci: Sequence[Focus], level: float, equivariant: bool) -> Fitter:
    """The fitter of a branch; in a rule that needs responses, an equivariant branch fits responses too, for one scale."""
    inner = branch.prepare(design, foci, level)
    if equivariant or not branch.equivariant:
        return inner
    return lambda sample: inner(Sample(design, sample.response, sample.noise))


def detector(diagnostic: Diagnostic, design: Design, alpha: float) -> Callable[[Sample], Flags]:
    """The test of size alpha: whether the diagnostic fails, (B,) for a Sample."""
    statistic = diagnostic.prepare(design)
    if diagnostic.p_values(design, np.empty(0)) is not None:

        def fails(values: Floats) -> Flags:
            return np.asarray(_known(diagnostic.p_values(design, values)) <= alpha)
    else:
        fails = Critical.of(_ideal_values(statistic, design), diagnostic.tail, alpha).rejects

    def detect(sample: Sample) -> Flags:
        # Without residuals there is nothing to see: the statistic is 0/0, and no check fails.
        with np.errstate(divide="ignore", invalid="ignore"):
            return fails(statistic(sample))

    return detect


def _known(p: Floats | None) -> Floats:
    if p is None:
        raise TypeError("a diagnostic has p-values for some values of its statistic and not for others")
    return p


def _ideal_values(statistic: Statistic, design: Design) -> Floats:
    """Values of a statistic under independent normal errors, up to 9,999 and fewer on very large designs."""
    draws = int(np.clip(_DOUBLES // design.n, 999, _DRAWS))
    generator = np.random.Generator(np.random.SFC64(np.random.SeedSequence(_SEED, spawn_key=(design.n,))))
    slab = max(1, 131_072 // design.n)
    values = []
    for start in range(0, draws, slab):
        errors = generator.standard_normal((design.n, min(slab, draws - start)))
        values.append(statistic(Sample(design, errors, _Quiet(), coefficients=np.zeros(design.p))))
    return np.concatenate(values)


class _Quiet:
    """The noise of a simulation that no procedure takes part in."""

    width = 0

    def procedure_generator(self, name: str) -> np.random.Generator:
        """Refuse."""
        raise TypeError(f"'{name}' asked for randomness, and a diagnostic has none")


def chosen(first: Flags, one: Fit, other: Fit, unseen: Flags | None) -> Fit:
    """The fit that is `one` where `first` (B,) is true and `other` elsewhere; replicates that are `unseen` count as failed."""
    flags = [] if unseen is None else [unseen]
    flags += [] if one.failed is None else [one.failed & first]
    flags += [] if other.failed is None else [other.failed & ~first]
    failed = np.logical_or.reduce(flags) if flags else None
    return ChosenFit(np.where(first, one.estimate, other.estimate), failed, first, one, other)


@dataclass(frozen=True, eq=False)
class ChosenFit(Fit):
    """In each replicate the fit of one of two procedures.

    Parameters
    ----------
    first : ndarray of bool, shape (B,)
        Where `one` counts; `other` elsewhere.
    one, other : Fit
        The two.
    """

    first: Flags
    one: Fit
    other: Fit

    @property
    def variance(self) -> Floats | None:
        """See Fit."""
        return self._pick(self.one.variance, self.other.variance)

    @property
    def width(self) -> Floats | None:
        """See Fit."""
        return self._pick(self.one.width, self.other.width)

    @property
    def dual(self) -> bool:
        """See Fit."""
        return self.one.dual and self.other.dual

    def misses(self, truth: Floats) -> tuple[Flags, Flags] | None:
        """See Fit."""
        one, other = self.one.misses(truth), self.other.misses(truth)
        if one is None or other is None:
            return None
        return np.where(self.first, one[0], other[0]), np.where(self.first, one[1], other[1])

    def rejects(self, value: Floats) -> Flags:
        """See Fit."""
        return np.where(self.first, self.one.rejects(value), self.other.rejects(value))

    def ratio(self, value: Floats) -> Floats | None:
        """See Fit."""
        return self._pick(self.one.ratio(value), self.other.ratio(value))

    def _pick(self, one: Floats | None, other: Floats | None) -> Floats | None:
        return None if one is None or other is None else np.where(self.first, one, other)
