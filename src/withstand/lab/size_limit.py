"""Whether any number of rows can do: what is asked, against what ever more rows lead to."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from withstand import tails
from withstand.judgement.findings import Aspect
from withstand.judgement.limit import Limit, limit_of
from withstand.judgement.size_points import Requirement
from withstand.lab.size_plan import Condition
from withstand.lab.size_question import SizeQuestion
from withstand.procedures.base import REGISTRY, Procedure, make_procedure
from withstand.study.focus import FocusKind
from withstand.study.growth import Extend, Stack
from withstand.study.study import Study

_DRAWN = 0.002
"""A limit read off drawn tables counts as outside by more than this: however large, they have a little spread of their own."""


@dataclass(frozen=True)
class Obstacle:
    """A requirement that no number of rows meets.

    Parameters
    ----------
    requirement : Requirement
        What is asked.
    coverage : float or None
        Where the coverage goes.
    words : str
        What stands in the way, for people.
    """

    requirement: Requirement
    coverage: float | None
    words: str


class Limits:
    """The large-sample limits of one procedure in some worlds.

    Parameters
    ----------
    question : SizeQuestion
        The study with its doublings, the focal quantity and the worlds.
    procedure : Procedure
        Only procedures linear in the response have known limits.
    """

    def __init__(self, question: SizeQuestion, procedure: Procedure) -> None:
        self._study = question.study
        self._focus = question.focus
        self._slack = 0.0 if isinstance(question.growth, Stack | Extend) else _DRAWN
        # The tolerance is in the requirements; the limit itself does not depend on it.
        anything = Aspect("coverage", 0.0, math.inf, -math.inf, math.inf, question.study.level, "")
        studies = question.doublings
        # Blocks in the model make columns as rows are added: no limit is known for those.
        same = {study.design.names for study in studies} == {question.study.design.names}
        self._known = [
            limit_of(studies, procedure, question.focus, condition.world, anything)
            if same and _buildable(condition, studies)
            else None
            for condition in question.conditions
        ]

    @property
    def all_known(self) -> bool:
        """Whether every world has a limit that the stages looked at have come close to."""
        return all(limit is not None and not math.isnan(limit.coverage) for limit in self._known)

    @property
    def worst_coverage(self) -> float | None:
        """The smallest of the known limits of coverage."""
        return min((limit.coverage for limit in self._known if limit is not None and limit.coverage >= 0.0), default=None)

    def obstacle(self, requirements: Sequence[Requirement]) -> Obstacle | None:
        """The first requirement that no number of rows meets; None where there is none, or none is known."""
        for requirement in requirements:
            limit = self._known[requirement.condition]
            if limit is not None and (words := self._against(requirement, limit)):
                return Obstacle(requirement, None if math.isnan(limit.coverage) else limit.coverage, words)
        return None

    def _against(self, requirement: Requirement, limit: Limit) -> str:
        match requirement.measure:
            case "coverage" | "size" if not math.isnan(limit.coverage):
                value = limit.coverage if requirement.measure == "coverage" else 1.0 - limit.coverage
                if requirement.margin(value) >= -self._slack:
                    return ""
                if limit.bias_stays:
                    return "the bias stays while the standard error shrinks"
                if self._focus.kind is FocusKind.NEW:
                    return "the interval for a new response takes the spread and the shape of its error for granted"
                return f"the standard error claimed stays {limit.ratio:.2f} times the true one"
            case "bias" | "bias_in_sd" if limit.bias_stays:
                return "the bias stays while the standard error shrinks" if requirement.measure == "bias_in_sd" else ""
            case "half_width" if self._focus.kind is FocusKind.NEW:
                # What is left when the fit itself is known: the error of the new response.
                least = float(tails.normal_isf((1.0 - self._study.level) / 2.0)) * self._study.error_sd
                return (
                    f"a new response has its own error, and its half width stays above {least:.4g}"
                    if (requirement.margin(least) < 0.0)
                    else ""
                )
        return ""


def _buildable(condition: Condition, studies: Sequence[Study]) -> bool:
    departures = [departure for departure, _ in condition.world.stack]
    return not any(departure.not_applicable(study.design) for departure in departures for study in studies)


def passing_procedures(question: SizeQuestion, requirements: Sequence[Requirement]) -> tuple[str, ...]:
    """Registered procedures whose limits are known and all within what is asked."""
    passing = []
    for name in REGISTRY:
        limits = Limits(question, make_procedure(name))
        if limits.all_known and limits.obstacle(requirements) is None:
            passing.append(name)
    return tuple(passing)
