"""The number of rows at the inputs as they are: one search a procedure."""

from __future__ import annotations

from concurrent.futures import Executor

import pandas as pd

from withstand.errors import ScenarioError
from withstand.lab.observed import instead_of_observed_power
from withstand.lab.progress import Progress
from withstand.lab.size_answer import CURVE_COLUMNS, SizeAnswer
from withstand.lab.size_plan import NO_EFFECT
from withstand.lab.size_question import SizeQuestion
from withstand.lab.size_search import ProcedureSearch


def size_once(question: SizeQuestion, executor: Executor, progress: Progress) -> SizeAnswer:
    """One size a procedure, with the whole curve.

    Raises
    ------
    InputError
        If something asked for cannot be answered; the message says how to mend it.
    """
    _refuse_impossible(question)
    _refuse_observed_power(question)
    sizes, frames, asked = [], [], dict[str, None]()
    for procedure in question.procedures:
        requirements = question.requirements(procedure)
        asked |= dict.fromkeys(requirement.words for requirement in requirements)
        one = ProcedureSearch(question, procedure, requirements, executor, progress)
        sizes.append(one.size())
        frames += one.rows
    return SizeAnswer(
        question.study.name,
        question.focus.name,
        tuple(asked),
        tuple(sizes),
        pd.DataFrame(frames, columns=list(CURVE_COLUMNS)).sort_values(
            ["procedure", "world", "measure", "n"], ignore_index=True
        ),
        question.growth.sentence,
        1.0 - question.effort.delta,
        question.study.notices,
        None if question.study.grow is not None else question.study.n,
    )


def _refuse_observed_power(question: SizeQuestion) -> None:
    if question.targets.power is None or question.focus.effect is not None:
        return
    what = f"power for '{question.focus.name}' is asked for without an effect"
    told: tuple[str, ...] = (NO_EFFECT,)
    if question.study.residuals is not None and question.focus.scalar:
        told = instead_of_observed_power(question.study, question.procedures[0], question.focus.name, question.effort).sentences
    raise ScenarioError(what, where="study.effect", remedy=" ".join(told))


def _refuse_impossible(question: SizeQuestion) -> None:
    for condition in question.conditions:
        for departure, _ in condition.world.stack:
            reason = departure.not_applicable(question.study.design)
            if reason is not None:
                raise ScenarioError(f"'{departure.name}' is {reason}", where="--departure", remedy="Name another departure.")
