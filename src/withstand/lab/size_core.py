"""The number of rows at the inputs as they are: one search a procedure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import Executor

import pandas as pd

from withstand.errors import ScenarioError
from withstand.judgement.size_points import Requirement
from withstand.lab.observed import instead_of_observed_power
from withstand.lab.progress import Progress
from withstand.lab.size_answer import CURVE_COLUMNS, ProcedureSize, SizeAnswer
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
    sizes: list[ProcedureSize] = []
    frames: list[dict[str, object]] = []
    asked: list[Requirement] = []
    for procedure in question.procedures:
        requirements = question.requirements(procedure)
        asked += requirements
        one = ProcedureSearch(question, procedure, requirements, executor, progress)
        sizes.append(one.size())
        frames += one.rows
    return SizeAnswer(
        question.study.name,
        question.focus.name,
        tuple(dict.fromkeys(requirement.words for requirement in asked)),
        tuple(sizes),
        _curve(frames),
        question.growth.sentence,
        1.0 - question.effort.delta,
        question.study.notices,
        None if question.study.grow is not None else question.study.n,
        bounds=tuple(dict.fromkeys(requirement.bound for requirement in asked)),
        worlds=tuple(condition.name for condition in question.conditions),
    )


def _curve(rows: Sequence[Mapping[str, object]]) -> pd.DataFrame:
    frame = pd.DataFrame(rows, columns=list(CURVE_COLUMNS))
    # Nothing is looked at where the limit answers; the columns are of numbers all the same.
    frame = frame.astype(dict.fromkeys(["value", "mc_se", "low", "high", "needed_low", "needed_high"], float))
    return frame.sort_values(["procedure", "world", "measure", "n"], ignore_index=True)


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
