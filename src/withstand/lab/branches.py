"""Rules that look first and then choose, where the check passed: what someone can rely on who saw it pass."""

from __future__ import annotations

from collections.abc import Sequence

from withstand.diagnostics import Pretest
from withstand.engine.job import tasks_for
from withstand.engine.tally import Tally
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.gather import Bench
from withstand.lab.grid import Cell
from withstand.lab.simulate import tallies_of
from withstand.lab.threats import Assessment, Threatened
from withstand.measures.compute import Estimate, measure
from withstand.measures.names import GIVEN_PASS, conditional_measures
from withstand.procedures.base import Procedure


def given_pass(assessment: Assessment, threats: Sequence[Threatened], bench: Bench) -> dict[Cell, CellAnswers]:
    """How often the check of a rule passes, and coverage and size where it did.

    Parameters
    ----------
    assessment : Assessment
        With all evidence gathered.
    threats : sequence of Threatened
        As the assessment found them.
    bench : Bench
        Where to simulate.

    Returns
    -------
    dict of Cell to CellAnswers
        For the rules of the plan, where nothing is wrong and at the worst severity of every departure.

    Notes
    -----
    The rule is run again on the noise of the run, with the replicates in which the check failed counted as without an answer.
    """
    grid = assessment.grid
    rules = {cell: rule for cell in assessment.compared(threats) if (rule := _rule(cell.procedure)) is not None}
    if not rules:
        return {}
    points = {_place(cell, rule): (cell.spot.axis, cell.spot.severity) for cell, rule in rules.items()}
    visited = dict.fromkeys((axis, severity) for axis, severity in points.values() if axis is not None)
    passing = grid.at(visited, dict.fromkeys(rule.given_passed for rule in rules.values()))
    places = {_place(cell, cell.procedure): cell for cell in passing.cells}
    wanted = {cell: places[_place(cell, rule.given_passed)] for cell, rule in rules.items()}
    runner, tasks = bench.runner(passing), tasks_for(grid.plan.repetitions)
    keys = {(cell.spot.world, cell.procedure_index) for cell in wanted.values()}
    if bench.effort.simulate:
        bench.effort.progress.phase("rules where their check passes", runner.outstanding(keys, tasks))
        runner.advance(keys, tasks, bench.effort.progress.step)
    tallies = tallies_of(runner, wanted.values())
    return {cell: _answers(cell, tallies[there], grid.study.error_sd) for cell, there in wanted.items() if there in tallies}


def _rule(procedure: Procedure) -> Pretest | None:
    return procedure if isinstance(procedure, Pretest) and procedure.branch == "both" else None


def _place(cell: Cell, procedure: Procedure) -> tuple[str, float, str, int]:
    axis = cell.spot.axis
    return "" if axis is None else axis.identity, cell.spot.severity, procedure.identity, cell.focus_index


def _answers(cell: Cell, tally: Tally, error_sd: float) -> CellAnswers:
    read = measure(tally, ["failure_rate", *conditional_measures(cell.procedure, cell.focus)], error_sd)
    read["failure_rate"] = _complement(read["failure_rate"])
    # The rule itself has an answer where its check fails, so none of these replicates is a failure.
    return {GIVEN_PASS[name]: Answer(estimate, "simulated", tally.replicates, 0) for name, estimate in read.items()}


def _complement(share: Estimate) -> Estimate:
    return Estimate(1.0 - share.value, share.mc_se, 1.0 - share.high, 1.0 - share.low, -share.shift, share.shift_se)
