"""What a given number of rows buys: coverage, power, half width and the smallest effect that would be noticed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import replace

import numpy as np
import pandas as pd

from withstand import tails
from withstand.departures.world import World
from withstand.engine.executors import open_executor
from withstand.errors import ScenarioError
from withstand.judgement.size_points import Requirement
from withstand.lab.frames import CellAnswers
from withstand.lab.size_look import Look, reading
from withstand.lab.size_plan import Condition, Effort, chosen_focus
from withstand.lab.size_question import noise_seed
from withstand.procedures.base import Answer, Procedure
from withstand.study.focus import Focus, FocusKind
from withstand.study.growth import growth_of
from withstand.study.planned import MOST_ROWS
from withstand.study.study import Study

BUDGET_COLUMNS = (
    "n", "analysed", "procedure", "focus", "world", "coverage", "size", "power", "half_width", "detectable_effect",
    "coverage_se", "power_se", "method",
)  # fmt: skip

DETECTED = 0.8
"""Power at which an effect counts as detectable."""

_STEPS = 12
_CLOSE = 0.002
"""The search for the detectable effect ends when its power is within this, or two standard errors, of DETECTED."""


def what_rows_buy(
    study: Study,
    procedures: Sequence[Procedure],
    rows: Sequence[int],
    worlds: Sequence[World] = (),
    *,
    focus: str | None = None,
    effect: float | None = None,
    rule: str | None = None,
    effort: Effort | None = None,
    executor: Executor | None = None,
) -> pd.DataFrame:
    """Say what each number of rows is good for.

    Parameters
    ----------
    study : Study
        Data or plan.
    procedures : sequence of Procedure
        To compare.
    rows : sequence of int
        Numbers of rows to collect.
    worlds : sequence of World
        None is the world in which nothing is wrong.
    focus, effect, rule, effort, executor
        As in `size_study`.

    Returns
    -------
    DataFrame
        BUDGET_COLUMNS; nan where a procedure does not answer. `detectable_effect` has power 0.8, in the unit of the focal
        quantity; for a joint quantity it is the factor on the stated effect.

    Raises
    ------
    InputError
        If a number of rows cannot carry the model.
    """
    effort = effort or Effort()
    if executor is None:
        with open_executor(effort.workers) as opened:
            return what_rows_buy(
                study, procedures, rows, worlds, focus=focus, effect=effect, rule=rule, effort=effort, executor=opened
            )
    chosen = chosen_focus(study, focus, effect)
    growth = growth_of(study, rule)
    found = []
    for n in rows:
        if not 1 <= n <= MOST_ROWS:
            raise ScenarioError(
                f"{n} rows are not laid out", where="--at", remedy=f"Give whole numbers from 1 to {MOST_ROWS:,}."
            )
        grown = growth.at(n)
        for procedure in procedures:
            for world in worlds or (World(),):
                condition = Condition(world).bound_to(chosen)
                found.append(_bought(grown, n, procedure, chosen, condition, effort, executor))
    return pd.DataFrame(found, columns=list(BUDGET_COLUMNS))


def _bought(
    grown: Study, n: int, procedure: Procedure, focus: Focus, condition: Condition, effort: Effort, executor: Executor
) -> dict[str, object]:
    reason = procedure.not_applicable(grown.design, focus)
    if reason is not None:
        raise ScenarioError(f"'{procedure.identity}' at {n} rows is {reason}", where="--procedure", remedy="Choose another.")
    answers = _answers(grown, n, procedure, focus, condition, effort, executor)
    scaled = {"half_width": ("width", 0.5)}
    values = {
        name: answers[source].estimate.value * factor if source in answers else math.nan
        for name in ("coverage", "size", "power", "half_width")
        for source, factor in [scaled.get(name, (name, 1.0))]
    }
    errors = {f"{name}_se": answers[name].estimate.mc_se if name in answers else math.nan for name in ("coverage", "power")}
    detectable = detectable_effect_at(grown, n, procedure, focus, condition, effort, executor)
    exact = all(answer.method == "exact" for name, answer in answers.items() if name in ("coverage", "size", "power"))
    return (
        {
            "n": n,
            "analysed": grown.n,
            "procedure": procedure.identity,
            "focus": focus.name,
            "world": condition.name,
            "detectable_effect": detectable,
            "method": "exact" if exact else "simulated",
        }
        | values
        | errors
    )


def _answers(
    grown: Study, n: int, procedure: Procedure, focus: Focus, condition: Condition, effort: Effort, executor: Executor
) -> CellAnswers:
    answers = procedure.answers(focus)
    asked = [Requirement("0|coverage", "coverage", low=-1.0)] if Answer.INTERVAL in answers else []
    if Answer.TEST in answers and focus.effect is not None:
        asked.append(Requirement("0|power", "power", low=-1.0))
    look = Look(procedure, (condition,), asked, effort, executor)
    effect = None if focus.effect is None else focus.effect.tolist()
    study = replace(grown, focus=(focus,), digest=f"{grown.digest}|{focus.name}|{effect}")
    return look.answers(study, noise_seed(effort.seed, n, 0))[0]


def detectable_effect_at(
    grown: Study, n: int, procedure: Procedure, focus: Focus, condition: Condition, effort: Effort, executor: Executor
) -> float:
    """The smallest effect with power DETECTED; nan where there is no test.

    Notes
    -----
    Power is found at a few effects on the same noise. With probit(power) nearly straight in the effect, each next effect comes
    from the line through the two nearest.
    """
    if Answer.TEST not in procedure.answers(focus) or focus.kind is FocusKind.NEW:
        return math.nan
    if not focus.scalar and focus.effect is None:
        return math.nan
    unit = focus.effect if focus.effect is not None and not focus.scalar else np.ones(1)
    A = grown.design.estimator(focus.L)
    spread = np.linalg.solve(A @ A.T, unit) @ unit
    step = (tails.normal_isf(grown.alpha / 2.0) + tails.normal_ppf(DETECTED)) * grown.error_sd / math.sqrt(float(spread))
    target = float(tails.normal_ppf(DETECTED))
    tried: list[tuple[float, float]] = []
    factor = float(step)
    for _ in range(_STEPS):
        here = replace(focus, effect=factor * unit)
        answers = _answers(grown, n, procedure, here, condition, effort, executor)
        seen = reading(answers, "power")
        tried.append((factor, float(tails.normal_ppf(min(max(seen.value, 1e-6), 1.0 - 1e-6)))))
        if abs(seen.value - DETECTED) <= (1e-9 if seen.exact else max(_CLOSE / 4.0, seen.se / 4.0)):
            return factor
        if len(tried) == 1:
            factor *= min(max((target + 1.96) / max(tried[0][1] + 1.96, 0.1), 0.3), 3.0)
            continue
        (a, pa), (b, pb) = sorted(tried, key=lambda one: abs(one[1] - target))[:2]
        slope = (pb - pa) / (b - a) if b != a else 0.0
        if slope <= 0.0:
            return factor if abs(seen.value - DETECTED) < 0.05 else math.nan
        factor = max(a + (target - pa) / slope, 0.1 * min(a, b))
    return factor
