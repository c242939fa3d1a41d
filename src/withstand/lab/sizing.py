"""How many rows: for each procedure the smallest n at which everything asked for is met in every world named."""

from __future__ import annotations

import math
from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd

from withstand.departures.world import World
from withstand.engine.executors import open_executor
from withstand.errors import InputError, ScenarioError
from withstand.judgement.sample_size import FoundSize, Reading, Requirement, SizePoint, Sizes, SizeSearch
from withstand.judgement.tolerance import Tolerance
from withstand.lab.frames import CellAnswers
from withstand.lab.progress import Progress, Silent
from withstand.lab.size_limit import Limit, large_sample_limits, passing_procedures
from withstand.lab.size_look import Look
from withstand.lab.size_plan import Condition, Effort, Targets, chosen_focus, requirements_of
from withstand.procedures.base import Procedure
from withstand.study.focus import Focus
from withstand.study.growth import Growth, growth_of
from withstand.study.study import Study

CURVE_COLUMNS = (
    "n", "analysed", "procedure", "focus", "world", "measure", "value", "mc_se", "low", "high", "needed_low", "needed_high",
    "method", "repetitions", "look",
)  # fmt: skip
"""`n` rows to collect, `analysed` rows left after losses; `look` is 'search' or 'confirmation'."""


@dataclass(frozen=True)
class ProcedureSize:
    """The answer for one procedure.

    Parameters
    ----------
    procedure : str
        Its identity.
    n : int or None
        Rows to collect; None where no number of rows will do, none up to the largest did, or the procedure does not apply.
    low, high : int or None
        Interval of n; the same as n where it is exact, None where there is none.
    bounded : bool
        Whether `high` is an end of the interval; False where the search ended first.
    method : str
        "exact" or "simulated".
    binding : str
        The requirement that asks for the most rows, or that fails.
    no_cure : bool
        Whether the large-sample limit itself is outside what is asked.
    limit : float or None
        The large-sample limit of the coverage in the worst world, where it is known.
    confirmed : float or None
        The binding measure at n in the second look, with fresh noise.
    confirmed_se : float or None
        Its Monte Carlo standard error.
    reason : str
        Why there is no n.
    instead : tuple of str
        Procedures whose limit is within what is asked, where this one's is not.
    """

    procedure: str
    n: int | None
    low: int | None = None
    high: int | None = None
    bounded: bool = True
    method: str = "exact"
    binding: str = ""
    no_cure: bool = False
    limit: float | None = None
    confirmed: float | None = None
    confirmed_se: float | None = None
    reason: str = ""
    instead: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class SizeAnswer:
    """What was found.

    Parameters
    ----------
    title, focus : str
        Of the study, and of the focal quantity.
    asked : tuple of str
        The requirements in words.
    sizes : tuple of ProcedureSize
        In the order asked for.
    curve : DataFrame
        CURVE_COLUMNS: everything that was looked at.
    growth : str
        How the rows grow, in a sentence.
    level : float
        Level of the interval of n.
    notices : tuple of str
        What the user should know about the study.
    """

    title: str
    focus: str
    asked: tuple[str, ...]
    sizes: tuple[ProcedureSize, ...]
    curve: pd.DataFrame
    growth: str
    level: float
    notices: tuple[str, ...] = ()

    @property
    def best(self) -> ProcedureSize | None:
        """The procedure that needs the fewest rows; of equals the one named first."""
        found = [size for size in self.sizes if size.n is not None]
        return min(found, key=lambda size: size.n or 0) if found else None

    @property
    def n(self) -> int | None:
        """Rows to collect with the procedure that needs the fewest."""
        return None if self.best is None else self.best.n

    @property
    def sentences(self) -> tuple[str, ...]:
        """The answer in words, the most important first."""
        return (*(_told(size, self) for size in self.sizes), *self._choice(), self.growth)

    def _choice(self) -> tuple[str, ...]:
        if len(self.sizes) < 2 or self.best is None:
            return ()
        return (f"The fewest rows: {self.best.procedure}, with {self.best.n}.",)

    def as_record(self) -> dict[str, Any]:
        """Everything as plain values, for machines."""
        return {
            "title": self.title,
            "focus": self.focus,
            "asked": list(self.asked),
            "n": self.n,
            "best": None if self.best is None else self.best.procedure,
            "level": self.level,
            "sizes": [{**size.__dict__, "instead": list(size.instead)} for size in self.sizes],
            "growth": self.growth,
            "notices": list(self.notices),
            "curve": [
                {str(key): None if isinstance(v, float) and not math.isfinite(v) else v for key, v in row.items()}
                for row in self.curve.to_dict("records")
            ],
        }


@dataclass(frozen=True, eq=False)
class SizeQuestion:
    """What is asked, ready to be answered.

    Parameters
    ----------
    study : Study
        Data or plan.
    procedures : sequence of Procedure
        To choose from.
    worlds : sequence of World
        The targets must be met in each of them; none named is the world in which nothing is wrong.
    targets : Targets
        What must be met.
    tolerance : Tolerance
        What the user can live with.
    focus : Focus
        The focal quantity.
    growth : Growth
        How rows multiply.
    effort : Effort
        How hard to look.
    """

    study: Study
    procedures: Sequence[Procedure]
    worlds: Sequence[World]
    targets: Targets
    tolerance: Tolerance
    focus: Focus
    growth: Growth
    effort: Effort = field(default_factory=Effort)

    @property
    def conditions(self) -> tuple[Condition, ...]:
        """The worlds, bound to the focal quantity."""
        return tuple(Condition(world).bound_to(self.focus) for world in self.worlds) or (Condition(),)

    def at(self, n: int) -> Study:
        """The study with n rows and its one focal quantity."""
        grown = self.growth.at(n)
        effect = None if self.focus.effect is None else self.focus.effect.tolist()
        return replace(grown, focus=(self.focus,), digest=f"{grown.digest}|{self.focus.name}|{effect}")

    def requirements(self, procedure: Procedure) -> tuple[Requirement, ...]:
        """Targets as bounds."""
        return requirements_of(self.targets, self.tolerance, self.study, procedure, self.focus, self.conditions)


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
    if not procedures:
        raise ScenarioError("no procedure to size", where="--procedure", remedy='Name at least one, such as "ols".')
    question = SizeQuestion(
        study,
        tuple(procedures),
        tuple(worlds),
        targets or Targets(),
        tolerance or Tolerance(),
        chosen_focus(study, focus, effect),
        growth_of(study, rule),
        effort or Effort(),
    )
    if executor is not None:
        return _answer(question, executor, progress or Silent())
    with open_executor(question.effort.workers) as opened:
        return _answer(question, opened, progress or Silent())


def _answer(question: SizeQuestion, executor: Executor, progress: Progress) -> SizeAnswer:
    _refuse_impossible(question)
    sizes, frames, asked = [], [], dict[str, None]()
    for procedure in question.procedures:
        requirements = question.requirements(procedure)
        asked |= dict.fromkeys(requirement.words for requirement in requirements)
        one = _OneProcedure(question, procedure, requirements, executor, progress)
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
    )


def _refuse_impossible(question: SizeQuestion) -> None:
    for condition in question.conditions:
        for departure, _ in condition.world.stack:
            reason = departure.not_applicable(question.study.design)
            if reason is not None:
                raise ScenarioError(f"'{departure.name}' is {reason}", where="--departure", remedy="Name another departure.")


class _OneProcedure:
    """The search for one procedure."""

    def __init__(
        self,
        question: SizeQuestion,
        procedure: Procedure,
        requirements: Sequence[Requirement],
        executor: Executor,
        progress: Progress,
    ) -> None:
        self.question = question
        self.procedure = procedure
        self.requirements = requirements
        self.rows: list[dict[str, object]] = []
        self._look = Look(procedure, question.conditions, requirements, question.effort, executor, progress)
        self._simulated = False

    def size(self) -> ProcedureSize:
        """Limit first, then the search."""
        name = self.procedure.identity
        limits = large_sample_limits(self.question.growth, self.procedure, self.question.focus, self.question.conditions)
        known = [limit for limit in limits if limit is not None]
        worst = min(known, key=lambda limit: limit.coverage) if known else None
        failing = self._failing(limits)
        if failing is not None:
            requirement, limit = failing
            instead = passing_procedures(self.question.growth, self.question.focus, self.question.conditions, self.requirements)
            return ProcedureSize(
                name, None, binding=requirement.words, no_cure=True, limit=limit.coverage,
                reason=f"no sample size cures this: {limit.words}", instead=instead,
            )  # fmt: skip
        start, reason = self._smallest()
        if start is None:
            return ProcedureSize(name, None, reason=reason)
        sizes = Sizes(start, max(self.question.effort.largest, start), self.question.growth.step)
        found = SizeSearch(self.requirements, self._judge, self._confirm, sizes, self.question.effort.delta).run()
        return self._told(found, worst)

    def _failing(self, limits: Sequence[Limit | None]) -> tuple[Requirement, Limit] | None:
        for requirement in self.requirements:
            limit = limits[int(requirement.key.partition("|")[0])]
            if limit is not None and limit.fails(requirement):
                return requirement, limit
        return None

    def _told(self, found: FoundSize, worst: Limit | None) -> ProcedureSize:
        binding = next(r for r in self.requirements if r.key == found.binding)
        second = [p.readings[found.binding] for p in found.confirmed if p.n == found.n]
        size = ProcedureSize(
            self.procedure.identity,
            found.n,
            found.low if found.n is not None else None,
            found.high if found.n is not None else None,
            found.bounded,
            "simulated" if self._simulated else "exact",
            binding.words,
            limit=None if worst is None else worst.coverage,
            confirmed=second[0].value if second else None,
            confirmed_se=second[0].se if second else None,
        )
        if found.n is not None:
            return size
        last = found.points[-1]
        return replace(
            size,
            reason=f"not met up to {last.n} rows, where {binding.measure.replace('_', ' ')} is "
            f"{last.readings[binding.key].value:.4g}; ask for more with --largest",
        )

    def _smallest(self) -> tuple[int | None, str]:
        """The first n that carries the model and to which the procedure applies."""
        growth, n, reason = self.question.growth, self.question.growth.smallest, ""
        tried = 0
        while n <= self.question.effort.largest:
            refused = self._refused(n)
            if refused is None:
                return n, ""
            reason, tried = refused, tried + 1
            # Near by at first, then in ever longer steps: most designs are in order after a few rows.
            n += growth.step * max(1, tried // 16)
        return None, f"does not apply to any number of rows up to {self.question.effort.largest}: {reason}"

    def _refused(self, n: int) -> str | None:
        try:
            study = self.question.at(n)
        except InputError as error:
            return str(error)
        reason = self.procedure.not_applicable(study.design, self.question.focus)
        if reason is not None:
            return reason
        for condition in self.question.conditions:
            for departure, _ in condition.world.stack:
                if (obstacle := departure.not_applicable(study.design)) is not None:
                    return f"'{departure.name}' is {obstacle}"
        return None

    def _judge(self, n: int) -> SizePoint:
        return self._point(n, "search", 0)

    def _confirm(self, n: int) -> SizePoint:
        return self._point(n, "confirmation", 1)

    def _point(self, n: int, look: str, turn: int) -> SizePoint:
        if self._refused(n) is not None:
            return SizePoint(n, {r.key: _no_answer(r) for r in self.requirements})
        study = self.question.at(n)
        readings, answers = self._look.readings(study, noise_seed(self.question.effort.seed, n, turn), turn > 0)
        self._simulated |= any(not reading.exact for reading in readings.values())
        self.rows += self._curve_rows(n, study.n, look, answers)
        return SizePoint(n, readings)

    def _curve_rows(self, n: int, analysed: int, look: str, answers: dict[int, CellAnswers]) -> list[dict[str, object]]:
        rows = []
        needed = {requirement.key: requirement for requirement in self.requirements}
        for i, condition in enumerate(self.question.conditions):
            shown = dict(answers[i])
            if "width" in shown:
                width = shown["width"]
                e = width.estimate
                half = replace(e, value=e.value / 2, mc_se=e.mc_se / 2, low=e.low / 2, high=e.high / 2)
                shown["half_width"] = replace(width, estimate=half)
            for name, answer in shown.items():
                bound = needed.get(f"{i}|{name}")
                estimate = answer.estimate
                rows.append(
                    {
                        "n": n,
                        "analysed": analysed,
                        "procedure": self.procedure.identity,
                        "focus": self.question.focus.name,
                        "world": condition.name,
                        "measure": name,
                        "value": estimate.value,
                        "mc_se": estimate.mc_se,
                        "low": estimate.low,
                        "high": estimate.high,
                        "needed_low": -math.inf if bound is None else bound.low,
                        "needed_high": math.inf if bound is None else bound.high,
                        "method": answer.method,
                        "repetitions": answer.repetitions,
                        "look": look,
                    }
                )
        return rows


def noise_seed(seed: int, n: int, turn: int) -> int:
    """The seed of the noise at n: other rows, other noise, and the second look shares none with the first."""
    return int(np.random.SeedSequence([seed, n, turn]).generate_state(1, np.uint64)[0] >> np.uint64(1))


def _no_answer(requirement: Requirement) -> Reading:
    """A reading well outside: these rows cannot carry the model or the procedure."""
    if math.isfinite(requirement.low):
        return Reading(requirement.low - max(1.0, abs(requirement.low)))
    return Reading(requirement.high + max(1.0, abs(requirement.high)))


def _told(size: ProcedureSize, answer: SizeAnswer) -> str:
    if size.n is None:
        told = f"{size.procedure}: {size.reason}."
        if size.no_cure:
            told += f" With ever more rows it covers {100 * size.limit:.1f} %." if size.limit is not None else ""
            told += (
                f" These hold: {', '.join(size.instead)}."
                if size.instead
                else " None of the procedures with a known limit holds."
            )
        return told
    span = (
        "exactly"
        if size.low == size.high == size.n and size.method == "exact"
        else (f"{100 * answer.level:g} % interval {size.low} to {size.high}{'' if size.bounded else ' or more'}")
    )
    told = f"{size.procedure}: {size.n} rows ({span}), for {size.binding}."
    if size.confirmed is not None:
        told += f" Looked at again with fresh noise at {size.n} rows: {size.confirmed:.4f} +- {1.96 * (size.confirmed_se or 0.0):.4f}."
    return told
