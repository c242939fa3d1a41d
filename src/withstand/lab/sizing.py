"""How many rows: for each procedure the smallest n at which everything asked for is met in every world named."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import replace

from withstand.departures.world import World
from withstand.engine.executors import open_executor
from withstand.judgement.tolerance import Tolerance
from withstand.lab.progress import Progress, Silent
from withstand.lab.size_answer import SizeAnswer
from withstand.lab.size_core import size_once
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.size_question import SizeQuestion, question_of
from withstand.lab.size_ranges import corners_of, pilot_range
from withstand.procedures.base import Procedure
from withstand.study.study import Study


def size_study(
    study: Study,
    procedures: Sequence[Procedure],
    worlds: Sequence[World] = (),
    *,
    targets: Targets | None = None,
    tolerance: Tolerance | None = None,
    focus: str | None = None,
    effect: float | None = None,
    rule: str | None = None,
    effort: Effort | None = None,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> SizeAnswer:
    """Find the smallest number of rows.

    Parameters
    ----------
    study : Study
        Data or plan.
    procedures : sequence of Procedure
        One, or several to choose from.
    worlds : sequence of World
        Every target must be met in each; none is the world in which nothing is wrong.
    targets : Targets, optional
        Left out: within tolerance.
    tolerance : Tolerance, optional
        Left out: the default one.
    focus : str, optional
        Focal quantity by name; the first if left out.
    effect : float, optional
        The smallest effect that matters, in place of the study's.
    rule : str, optional
        How data grow; see `growth_of`.
    effort : Effort, optional
        How hard to look.
    executor : Executor, optional
        Where to compute, instead of `effort.workers`.
    progress : Progress, optional
        Who is told.

    Returns
    -------
    SizeAnswer
        One size a procedure, with the whole curve.

    Raises
    ------
    InputError
        If something asked for cannot be answered; the message says how to mend it.
    """
    question = question_of(
        study, procedures, worlds, targets=targets, tolerance=tolerance, focus=focus, effect=effect, rule=rule, effort=effort
    )
    watched = progress or Silent()
    if executor is not None:
        return _answer(question, executor, watched)
    with open_executor(question.effort.workers) as opened:
        return _answer(question, opened, watched)


def _answer(question: SizeQuestion, executor: Executor, progress: Progress) -> SizeAnswer:
    """The answer, and the same at the ends of the range of an error SD that rests on a pilot."""
    answer = size_once(question, executor, progress)
    span = pilot_range(question.study)
    if span is None or question.targets.scale_free:
        return answer
    corners = corners_of(question, {"error_sd": span}, executor, progress)
    told = tuple(f"Over the range of the error SD that the pilot leaves open, {sentence}" for sentence in corners.sentences)
    return replace(answer, range_sentences=told, range_record=tuple(corners.as_record()))
