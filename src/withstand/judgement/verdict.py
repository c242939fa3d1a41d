"""Verdicts: whether a procedure keeps within tolerance in a world.

A simulated cell is looked at after doubling numbers of replicates. Look j spends delta * 6 / (pi^2 j^2) of the accepted chance
of a wrong verdict, shared among the measures judged; the sum over all looks is at most delta. A proportion of
independent replicates has the Clopper-Pearson interval, everything else a normal interval, or Student's t over blocks where
every block has a design of its own. An exact cell is settled at once.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from enum import StrEnum

from withstand import tails
from withstand.engine.tally import Tally
from withstand.judgement.aspects import judged
from withstand.judgement.findings import Aspect, Finding, Kind
from withstand.measures.compute import COUNTED, Estimate, clopper_pearson, measure

_SMALL_SHARE = 0.1
"""Share of the spending that goes to bias, which is known to a hundredth of an SD when shares are still open."""


class Verdict(StrEnum):
    """Whether a procedure keeps within tolerance."""

    HOLDS = "holds"
    GIVES = "gives"
    UNSETTLED = "unsettled"


@dataclass(frozen=True)
class Judgement:
    """A verdict with what it rests on.

    Parameters
    ----------
    verdict : Verdict
        `gives` if any measure is outside its tolerance, `holds` if all are within.
    findings : tuple of Finding
        One a measure.
    exact : bool
        Whether the values are exact.
    replicates : int
        Replicates behind it; 0 for exact values.
    """

    verdict: Verdict
    findings: tuple[Finding, ...]
    exact: bool
    replicates: int

    @property
    def settled(self) -> bool:
        """Whether more replicates are not needed."""
        return self.verdict is not Verdict.UNSETTLED

    @property
    def deciding(self) -> Finding:
        """The finding the verdict hangs on: the worst offender, or of those that decide, the one nearest to its bound.

        Where all hold and several have spent nothing of what they may, it is the first of them: coverage, or size.
        """
        if self.verdict is Verdict.HOLDS:
            return min(self.findings, key=lambda f: f.spare)
        kind = Kind.OUTSIDE if self.verdict is Verdict.GIVES else Kind.OPEN
        return min((f for f in self.findings if f.kind is kind), key=lambda f: f.margin)

    @property
    def wasteful(self) -> bool:
        """Whether it holds at a cost: covers more, or rejects less, than the tolerance asks for."""
        return self.verdict is Verdict.HOLDS and any(f.kind is Kind.WASTEFUL for f in self.findings)

    @property
    def margin(self) -> float:
        """The smallest margin of any measure: positive inside the tolerance, negative outside, 1 at best."""
        return min(f.margin for f in self.findings)


def spending(delta: float, look: int) -> float:
    """The chance of a wrong verdict that look 1, 2, ... may spend; the sum over all looks is delta."""
    return delta * 6.0 / (math.pi * look) ** 2


def judge_exact(values: Mapping[str, float], aspects: Mapping[str, Aspect]) -> Judgement:
    """Judge a cell with exact answers.

    Parameters
    ----------
    values : mapping of str to float
        Exact measures; those the tolerance does not speak about are ignored. At least one must be judged. Give size only
        where the test is not the interval turned round.
    aspects : mapping of str to Aspect
        What is accepted.
    """
    findings = tuple(Finding.of(aspect, values[m], values[m], values[m]) for m, aspect in aspects.items() if m in values)
    return Judgement(_combine(findings), findings, exact=True, replicates=0)


def judge(tally: Tally, aspects: Mapping[str, Aspect], delta: float, look: int, unit: float = 1.0) -> Judgement:
    """Judge a simulated cell at a look.

    Parameters
    ----------
    tally : Tally
        Sums over at least two units.
    aspects : mapping of str to Aspect
        What is accepted.
    delta : float
        Accepted chance that the verdict of this cell is wrong at any look.
    look : int
        1 for the first.
    unit : float
        Error SD in the unit of the response, for an absolute tolerance on bias.
    """
    names = judged(aspects, tally)
    spent = spending(delta, look)
    findings = []
    for name, estimate in measure(tally, names, unit).items():
        low, high = _interval(name, estimate, tally, 1.0 - spent * _share(name, names))
        findings.append(Finding.of(aspects[name], estimate.value, low, high))
    return Judgement(_combine(tuple(findings)), tuple(findings), exact=False, replicates=tally.replicates)


def _share(name: str, names: Collection[str]) -> float:
    """The share of the spending that goes to one measure; all shares add up to 1."""
    shares = sum(other in COUNTED for other in names)
    if shares == 0 or shares == len(names):
        return 1.0 / len(names)
    return (1.0 - _SMALL_SHARE) / shares if name in COUNTED else _SMALL_SHARE / (len(names) - shares)


def _interval(name: str, estimate: Estimate, tally: Tally, level: float) -> tuple[float, float]:
    value = estimate.value
    independent = tally.units == tally.replicates
    if name in COUNTED and independent:
        return clopper_pearson(round(value * tally.replicates), tally.replicates, level)
    tail = (1.0 - level) / 2.0
    reach = float(tails.normal_isf(tail) if independent else tails.t_isf(tail, tally.units - 1)) * estimate.mc_se
    bounds = (0.0, 1.0) if name in COUNTED else (-math.inf, math.inf)
    return max(value - reach, bounds[0]), min(value + reach, bounds[1])


def _combine(findings: tuple[Finding, ...]) -> Verdict:
    if not findings:
        raise ValueError("a verdict needs at least one measure that the tolerance speaks about")
    kinds = {finding.kind for finding in findings}
    if Kind.OUTSIDE in kinds:
        return Verdict.GIVES
    return Verdict.UNSETTLED if Kind.OPEN in kinds else Verdict.HOLDS
