"""The search for the number of rows that one procedure needs."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import replace

from withstand.errors import InputError
from withstand.judgement.sample_size import SizeSearch, clear_from
from withstand.judgement.size_points import LOOKS, FoundSize, Reading, Requirement, SizePoint, Sizes
from withstand.lab.frames import CellAnswers
from withstand.lab.progress import Progress
from withstand.lab.size_answer import ProcedureSize
from withstand.lab.size_limit import Limits, passing_procedures
from withstand.lab.size_look import Look
from withstand.lab.size_question import SizeQuestion, noise_seed
from withstand.procedures.base import Procedure


class ProcedureSearch:
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
        self._suspect: int | None = None
        self._look = Look(procedure, question.conditions, requirements, question.effort, executor, progress)

    def size(self) -> ProcedureSize:
        """Limit first, then the search."""
        name = self.procedure.identity
        question = self.question
        limits = Limits(question, self.procedure)
        obstacle = limits.obstacle(self.requirements)
        if obstacle is not None:
            return ProcedureSize(
                name,
                None,
                binding=obstacle.requirement.words,
                no_cure=True,
                limit=obstacle.coverage,
                reason=f"no number of rows cures this: {obstacle.words} however many there are",
                instead=passing_procedures(question, self.requirements),
            )
        start, reason = self._smallest()
        if start is None:
            return ProcedureSize(name, None, reason=reason)
        sizes = Sizes(start, max(self.question.effort.largest, start), self.question.growth.step)
        found = SizeSearch(self.requirements, self._judge, self._confirm, sizes, self.question.effort.delta).run()
        return self._told(found, start, limits.worst_coverage)

    def _told(self, found: FoundSize, smallest: int, limit: float | None) -> ProcedureSize:
        binding = next(r for r in self.requirements if r.key == found.binding)
        # The last second look is the one nearest to the answer.
        second = found.confirmed[-1] if found.confirmed and found.n is not None else None
        size = ProcedureSize(
            self.procedure.identity,
            found.n,
            found.low if found.n is not None else None,
            found.high if found.n is not None else None,
            found.n == smallest,
            found.bounded,
            "exact" if found.exact else "simulated",
            binding.words,
            limit=limit,
            confirmed_at=None if second is None else second.n,
            confirmed=None if second is None else second.readings[found.binding].value,
            confirmed_se=None if second is None else second.readings[found.binding].se,
        )
        if found.n is not None:
            return size
        last = next(point for point in reversed(found.points) if binding.key in point.readings)
        return replace(
            size,
            reason=f"not met up to {last.n} rows: {binding.words} is asked, and there it is "
            f"{last.readings[binding.key].value:.4g}; ask for more with --largest",
        )

    def _smallest(self) -> tuple[int | None, str]:
        """The first n that carries the model and to which the procedure applies."""
        growth, n, reason = self.question.growth, self.question.growth.smallest, ""
        tried = 0
        most = max(self.question.effort.largest, n)
        while n <= most:
            refused = self._refused(n)
            if refused is None:
                return n, ""
            reason, tried = refused, tried + 1
            # Near by at first, then in ever longer steps: most designs are in order after a few rows.
            n += growth.step * max(1, tried // 16)
        return None, f"has no answer at any number of rows up to {most}: {reason.rstrip('.')}"

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
        study, seed = self.question.at(n), noise_seed(self.question.effort.seed, n, turn)
        worlds = set(range(len(self.question.conditions)))
        if turn > 0 or self._suspect is None or len(worlds) == 1:
            readings, answers = self._look.readings(study, seed, turn > 0)
        else:
            # Where the world that failed last fails again, the others need not be looked at.
            readings, answers = self._look.only({self._suspect}).readings(study, seed)
            if not self._fails(readings):
                more, others = self._look.only(worlds - {self._suspect}).readings(study, seed)
                readings, answers = readings | more, answers | others
        worst = min((r for r in self.requirements if r.key in readings), key=lambda r: r.margin(readings[r.key].value))
        if self._fails(readings):
            self._suspect = worst.condition
        self.rows += self._curve_rows(n, study.n, look, answers)
        return SizePoint(n, readings)

    def _fails(self, readings: Mapping[str, Reading]) -> bool:
        """Whether something clearly is not met."""
        z = clear_from(self.question.effort.delta, LOOKS, len(self.requirements))
        seen = [(r, readings[r.key]) for r in self.requirements if r.key in readings]
        return any(requirement.margin(found.value) + z * found.se < 0.0 for requirement, found in seen)

    def _curve_rows(self, n: int, analysed: int, look: str, answers: dict[int, CellAnswers]) -> list[dict[str, object]]:
        rows = []
        needed = {requirement.key: requirement for requirement in self.requirements}
        for i, condition in enumerate(self.question.conditions):
            shown = dict(answers.get(i, {}))
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


def _no_answer(requirement: Requirement) -> Reading:
    """A reading well outside: these rows cannot carry the model or the procedure."""
    if math.isfinite(requirement.low):
        return Reading(requirement.low - max(1.0, abs(requirement.low)))
    return Reading(requirement.high + max(1.0, abs(requirement.high)))
