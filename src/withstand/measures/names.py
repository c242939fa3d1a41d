"""Which measures make sense for a procedure and a focal quantity."""

from __future__ import annotations

from withstand.measures.compute import MEASURES
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
}

_SINGLE = {"miss_below", "miss_above", "width"}
"""Measures of an interval, not of a joint region."""

_CLAIMS = {"claimed_sd", "se_ratio"}
"""Measures of the claimed variance."""


def applicable_measures(procedure: Procedure, focus: Focus) -> list[str]:
    """Names of the measures to report, in the order of the tables.

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
        if need is not None and need not in answers:
            continue
        if name in _SINGLE and not focus.scalar:
            continue
        if name == "power" and focus.effect is None:
            continue
        if name in _CLAIMS and not procedure.claims_variance:
            continue
        names.append(name)
    return names
