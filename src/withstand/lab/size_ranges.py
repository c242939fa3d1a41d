"""Inputs that are not known well: the number of rows at every corner of their ranges."""

from __future__ import annotations

import itertools
import re
from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from withstand.departures.world import World
from withstand.engine.executors import open_executor
from withstand.errors import ScenarioError, nearest
from withstand.lab.progress import Progress, Silent
from withstand.lab.size_answer import SizeAnswer
from withstand.lab.size_core import size_once
from withstand.lab.size_plan import chosen_focus
from withstand.lab.size_question import SizeQuestion, question_of
from withstand.procedures.base import Procedure
from withstand.study.columns import Drawn
from withstand.study.growth import growth_of
from withstand.study.planning import Planner, replanned
from withstand.study.study import Study

MOST_CORNERS = 64
"""Corners that are answered at most."""

_CORRELATION = re.compile(r"\s*(.+?)\s*~\s*(.+?)\s*")


@dataclass(frozen=True, eq=False)
class CornerAnswer:
    """The number of rows at every corner.

    Parameters
    ----------
    inputs : tuple of str
        Names of the uncertain inputs, which are the first columns of `frame`.
    frame : DataFrame
        One row a corner and procedure: inputs, procedure, n, low, high, bounded, reason.
    answers : tuple of SizeAnswer
        In the order of the corners.
    """

    inputs: tuple[str, ...]
    frame: pd.DataFrame
    answers: tuple[SizeAnswer, ...]

    @property
    def sentences(self) -> tuple[str, ...]:
        """The range of n in words, one sentence a procedure."""
        corners = self.as_record()
        told = []
        for procedure in dict.fromkeys(corner["procedure"] for corner in corners):
            mine = [corner for corner in corners if corner["procedure"] == procedure]
            known = sorted((corner for corner in mine if corner["n"] is not None), key=lambda corner: int(corner["n"]))
            if not known:
                told.append(f"{procedure}: at no corner is there a number of rows; {mine[0]['reason']}.")
                continue
            least, most = (f"{corner['n']} rows ({self._corner(corner)})" for corner in (known[0], known[-1]))
            lost = len(mine) - len(known)
            none = f"; at {lost} of {len(mine)} corners there is no number of rows" if lost else ""
            told.append(f"{procedure}: {least} to {most}{none}.")
        return tuple(told)

    def _corner(self, corner: Mapping[str, Any]) -> str:
        return ", ".join(f"{name} {corner[name]:.4g}" for name in self.inputs)

    def as_record(self) -> list[dict[str, Any]]:
        """The corners as plain values."""
        return [
            {str(k): None if pd.isna(v) else v.item() if hasattr(v, "item") else v for k, v in row.items()}
            for row in self.frame.to_dict("records")
        ]


def size_over_ranges(
    study: Study,
    procedures: Sequence[Procedure],
    worlds: Sequence[World],
    ranges: Mapping[str, Sequence[float]],
    *,
    executor: Executor | None = None,
    progress: Progress | None = None,
    **asked: Any,
) -> CornerAnswer:
    """Answer at every corner of the ranges of uncertain inputs.

    Parameters
    ----------
    study : Study
        Data or plan.
    procedures, worlds, executor, progress, asked
        As in `size_study`.
    ranges : mapping of str to sequence of float
        Values to try. Names: `error_sd`, `effect`, the kind of a departure (its severity), and for plans `attrition` and
        `one~other`, the correlation of two numeric columns, of which the first is drawn.

    Raises
    ------
    ScenarioError
        If a name is unknown, a range is empty, or there are too many corners.
    """
    question = question_of(study, procedures, worlds, **asked)
    # What the pilot leaves open goes along with what is asked.
    span = None if question.targets.scale_free else pilot_range(study)
    wanted = dict(ranges) if span is None else {"error_sd": span, **ranges}
    watched = progress or Silent()
    if executor is not None:
        return corners_of(question, wanted, executor, watched)
    with open_executor(question.effort.workers) as opened:
        return corners_of(question, wanted, opened, watched)


def corners_of(
    question: SizeQuestion, ranges: Mapping[str, Sequence[float]], executor: Executor, progress: Progress
) -> CornerAnswer:
    """Answer at every corner; see `size_over_ranges`."""
    _check(question.study, question.worlds, ranges)
    rows: list[dict[str, Any]] = []
    answers = []
    for values in itertools.product(*ranges.values()):
        corner = dict(zip(ranges, values, strict=True))
        answer = size_once(_at(question, corner), executor, progress)
        answers.append(answer)
        rows += [
            corner
            | {
                "procedure": size.procedure,
                "n": size.n,
                "low": size.low,
                "high": size.high,
                "bounded": size.bounded,
                "reason": size.reason,
            }
            for size in answer.sizes
        ]
    frame = pd.DataFrame(rows).astype({"n": "Int64", "low": "Int64", "high": "Int64"})
    return CornerAnswer(tuple(ranges), frame, tuple(answers))


def pilot_range(study: Study) -> tuple[float, float] | None:
    """The range of an error SD that rests on a pilot."""
    return study.grow.sd_range if isinstance(study.grow, Planner) else None


def _at(question: SizeQuestion, corner: Mapping[str, float]) -> SizeQuestion:
    study = _moved(question.study, corner)
    effect = corner.get("effect")
    focus = question.focus if effect is None else chosen_focus(study, question.focus.name, effect)
    rule = None if study.grow is not None else question.growth.rule
    worlds = tuple(_moved_world(world, corner) for world in question.worlds)
    return replace(question, study=study, worlds=worlds, focus=focus, growth=growth_of(study, rule))


def _check(study: Study, worlds: Sequence[World], ranges: Mapping[str, Sequence[float]]) -> None:
    kinds = {departure.kind for world in worlds for departure, _ in world.stack}
    known = ["error_sd", "effect", *sorted(kinds), *(["attrition"] if study.grow is not None else [])]
    corners = 1
    for name, values in ranges.items():
        corners *= len(values)
        if not len(values):
            raise ScenarioError(f"the range of '{name}' has no values", where="--range", remedy=f"Write {name}=2,4.")
        if name in known or (study.grow is not None and _CORRELATION.fullmatch(name)):
            continue
        if study.grow is None and (name == "attrition" or _CORRELATION.fullmatch(name)):
            raise ScenarioError(
                f"'{name}' is an input of a plan, and this study has data", where="--range", remedy=nearest(name, known)
            )
        raise ScenarioError(f"unknown uncertain input '{name}'", where="--range", remedy=nearest(name, known))
    if not ranges:
        raise ScenarioError("no ranges to go over", where="--range", remedy="Write error_sd=2,4.")
    if corners > MOST_CORNERS:
        raise ScenarioError(
            f"the ranges have {corners} corners",
            where="--range",
            remedy=f"At most {MOST_CORNERS} are answered; try fewer values.",
        )


def _moved(study: Study, corner: Mapping[str, float]) -> Study:
    changes: dict[str, Any] = {}
    if "attrition" in corner:
        changes["attrition"] = corner["attrition"]
    columns: dict[str, Drawn] = {}
    for name, value in corner.items():
        pair = _CORRELATION.fullmatch(name)
        if pair:
            columns |= _correlated(study, pair.group(1), pair.group(2), value, columns)
    if columns:
        changes["columns"] = columns
    if "error_sd" in corner:
        if not corner["error_sd"] > 0.0:
            raise ScenarioError(f"error_sd is {corner['error_sd']:g}", where="--range", remedy="Give positive numbers.")
        if study.grow is None:
            sd = corner["error_sd"]
            study = replace(study, error_sd=sd, digest=f"{study.digest}|error_sd={sd!r}")
        else:
            changes["error_sd"] = corner["error_sd"]
    return replanned(study, **changes) if changes else study


def _correlated(study: Study, one: str, other: str, value: float, sofar: Mapping[str, Drawn]) -> dict[str, Drawn]:
    if not isinstance(study.grow, Planner):
        raise ScenarioError("this study is no plan", where="--range", remedy="Only plans have correlations to vary.")
    plan = study.grow.plan
    for first, second in ((one, other), (other, one)):
        column = sofar.get(first, plan.columns.get(first))
        if isinstance(column, Drawn):
            return {first: replace(column, correlated={**column.correlated, second: value})}
    drawn = [name for name, column in plan.columns.items() if isinstance(column, Drawn)]
    raise ScenarioError(
        f"neither '{one}' nor '{other}' is a drawn column of the plan, so their correlation is what the layout makes it",
        where="--range",
        remedy=f"Drawn columns: {', '.join(drawn)}." if drawn else "Describe one of them by a law.",
    )


def _moved_world(world: World, corner: Mapping[str, float]) -> World:
    stack = []
    for departure, severity in world.stack:
        value = corner.get(departure.kind, severity)
        departure.check(value)
        stack.append((replace(departure, severity=(value,)), value))
    return World(tuple(stack))
