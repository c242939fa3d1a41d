"""Which measures make sense for a procedure and a focal quantity."""

from __future__ import annotations

from withstand.measures.compute import GIVEN_ANSWER, MEASURES
from withstand.procedures.base import Answer, Procedure
from withstand.study.focus import Focus

_NEEDS = {
    "bias": Answer.ESTIMATE,
    "bias_in_sd": Answer.ESTIMATE,
    "empirical_sd": Answer.ESTIMATE,
    "rmse": Answer.ESTIMATE,
    "claimed_sd": Answer.ESTIMATE,
    "se_ratio": Answer.ESTIMATE,
    "coverage": Answer.INTERVAL,
    "miss_below": Answer.INTERVAL,
    "miss_above": Answer.INTERVAL,
    "width": Answer.INTERVAL,
    "size": Answer.TEST,
    "power": Answer.TEST,
    "coverage_given_answer": Answer.INTERVAL,
    "size_given_answer": Answer.TEST,
}

ADJUSTED_POWER = "size_adjusted_power"
"""Power with the critical value at which the size is nominal; a quantile, which tallies cannot give."""

GIVEN_PASS = {
    "failure_rate": "pass_rate",
    "coverage_given_answer": "coverage_given_pass",
    "size_given_answer": "size_given_pass",
}
"""Measures of a rule where its check passed, by those of the rule looked at there alone; of the first it is one minus."""

_SINGLE = {"miss_below", "miss_above", "width"}
"""Measures of an interval, not of a joint region."""

_CLAIMS = {"claimed_sd", "se_ratio"}
"""Measures of the claimed variance."""


def applicable_measures(procedure: Procedure, focus: Focus) -> list[str]:
    """Names of the measures to report, in the order of the tables; those given an answer are in `conditional_measures`.

    Parameters
    ----------
    procedure : Procedure
        What is judged; measures follow from what it says it answers.
    focus : Focus
        Power needs a stated effect.
    """
    answers = procedure.answers(focus)
    names = []
    for name in MEASURES:
        need = _NEEDS.get(name)
        if name in GIVEN_ANSWER or (need is not None and need not in answers):
            continue
        if name in _SINGLE and not focus.scalar:
            continue
        if name == "power" and focus.effect is None:
            continue
        if name in _CLAIMS and not procedure.claims_variance:
            continue
        names.append(name)
    return names


def conditional_measures(procedure: Procedure, focus: Focus) -> list[str]:
    """Names of the measures among the replicates with an answer; worth reporting where there are others."""
    answers = procedure.answers(focus)
    return [name for name in GIVEN_ANSWER if _NEEDS[name] in answers]
