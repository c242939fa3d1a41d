"""From a study and a plan to an outcome: gather evidence, judge it, find where it turns, and say what matters."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

from withstand.judgement.headline import headline
from withstand.judgement.verdict import Judgement
from withstand.lab.account import library_versions, study_facts, tolerance_record
from withstand.lab.adjusted_power import adjusted_powers
from withstand.lab.branches import given_pass
from withstand.lab.frames import CellAnswers, measures_frame
from withstand.lab.gather import Bench, Effort, Evidence, gather, open_bench
from withstand.lab.glance import glance
from withstand.lab.grid import Cell, Grid
from withstand.lab.judging import verdicts_frame
from withstand.lab.outcome import Outcome
from withstand.lab.plan import Plan
from withstand.lab.plausibility import Residuals, points_of, residuals_of
from withstand.lab.simulate import sharpened_count
from withstand.lab.speech import shown, spoken
from withstand.lab.threats import Assessment, Threatened, ranking_frame
from withstand.lab.tipping import find_tippings
from withstand.lab.tipping_table import tipping_frame
from withstand.lab.verify import verification
from withstand.study.study import Study


def conduct(study: Study, plan: Plan, effort: Effort | None = None, *, simulate: bool = True) -> Outcome:
    """Try a plan on a study.

    Parameters
    ----------
    study : Study
        What the user has.
    plan : Plan
        What to try.
    effort : Effort, optional
        How and where to compute; in this process and without a file if left out.
    simulate : bool
        False uses exact answers and what the ledger already holds, for half-finished runs. Without a ledger only the procedure
        judged most closely is then looked at throughout, in seconds, and the others where it does not hold.

    Returns
    -------
    Outcome
        It depends on study, plan and seed, not on workers or on earlier interruptions.

    Raises
    ------
    LedgerError
        If the ledger belongs to another study, seed or version of the data.
    """
    started, clock = datetime.now(UTC), time.perf_counter()
    effort = effort or Effort()
    effort = replace(effort, simulate=effort.simulate and simulate)
    grid = Grid(study, plan)
    facts = study_facts(study)
    effort.progress.phase("residual statistics", 1)
    residuals = residuals_of(grid)
    effort.progress.step()
    grid = grid.at(points_of(grid.possible, residuals))
    names = {axis.identity: shown(axis, study.roles) for axis in grid.possible}
    if effort.simulate or effort.ledger_path is not None:
        with open_bench(grid, effort) as bench:
            evidence = gather(grid, bench)
            tippings = find_tippings(evidence, bench, leading(grid))
            assessment = Assessment(evidence, residuals, tippings, names)
            threats = assessment.threats()
            more = _more(assessment, threats, bench)
    else:
        evidence, tippings = glance(grid, residuals, names, leading(grid))
        assessment = Assessment(evidence, residuals, tippings, names)
        threats, more = assessment.threats(), {}
    verdicts = {cell: judgement for cell in evidence.cells if (judgement := evidence.verdict(cell)) is not None}
    return Outcome(
        title=study.name,
        measures=measures_frame(grid, ((cell, evidence.answers(cell) | more.get(cell, {})) for cell in evidence.cells)),
        verdicts=verdicts_frame(grid, verdicts),
        tipping=tipping_frame(grid, residuals, tippings, threats, leading(grid)),
        ranking=ranking_frame(assessment, threats),
        headline=_headline(assessment, threats, residuals),
        facts=facts | {"axes": _axes(grid, names)},
        notices=(*study.notices, *_notices(grid, verdicts)),
        refusals=_refusals(grid),
        provenance=_provenance(grid, evidence, effort, verdicts)
        | {"started": started.isoformat(timespec="seconds"), "seconds": round(time.perf_counter() - clock, 2)},
    )


def _more(assessment: Assessment, threats: Sequence[Threatened], bench: Bench) -> dict[Cell, CellAnswers]:
    """What is found out where procedures are compared and nowhere else."""
    passed, adjusted = given_pass(assessment, threats, bench), adjusted_powers(assessment, threats, bench)
    return {cell: passed.get(cell, {}) | adjusted.get(cell, {}) for cell in passed | adjusted}


def leading(grid: Grid) -> list[int | None]:
    """The procedure judged most closely, by focal quantity: the first one named that applies."""
    applies = [
        [i for i in range(len(grid.plan.procedures)) if (i, j) not in grid.job.refusals] for j in range(len(grid.study.focus))
    ]
    return [some[0] if some else None for some in applies]


def _headline(assessment: Assessment, threats: Sequence[Threatened], residuals: Mapping[str, Residuals]) -> tuple[str, ...]:
    """Sentences for each focal quantity in turn, about the procedure judged most closely."""
    grid = assessment.grid
    axes = {assessment.names[axis.identity]: axis for axis in grid.possible}
    sentences: list[str] = []
    for focus, procedure in enumerate(leading(grid)):
        mine = [one for one in threats if (one.procedure, one.focus) == (procedure, focus)]
        if procedure is None or not mine:
            continue
        seen = {}
        for one in mine:
            known, point = residuals.get(one.axis.identity), one.threat.tipping.point
            found = None if known is None or point is None else known.seen_at(point)
            if found is not None:
                seen[one.threat.departure] = found
        sentences += headline(
            grid.study.n,
            grid.study.level,
            grid.study.focus[focus].name,
            [one.threat for one in mine],
            lambda name, severity: spoken(axes[name], severity),
            throughout=assessment.throughout(focus, procedure),
            detectability=seen,
        )
    return tuple(sentences)


def _axes(grid: Grid, names: Mapping[str, str]) -> list[dict[str, Any]]:
    """Axes as the tables name them, with the name that people see and the ladder."""
    return [
        {
            "departure": axis.departure.kind,
            "along": grid.along(axis),
            "stack": axis.stack,
            "name": names[axis.identity],
            "ladder": [[severity, axis.departure.label(severity)] for severity in axis.departure.ladder],
        }
        for axis in grid.possible
    ]


def _notices(grid: Grid, verdicts: Mapping[Cell, Judgement]) -> list[str]:
    notices = list(grid.impossible.values())
    for axis in grid.possible:
        notices += [note for d in (axis.departure, *(d for d, _ in axis.companions)) if (note := d.note(grid.study.design))]
    unsettled = sum(not judgement.settled for judgement in verdicts.values())
    if unsettled:
        notices.append(
            f"{unsettled} of {len(verdicts)} verdicts are unsettled: so near to the tolerance that "
            f"{grid.looks.most:,} replicates at most could not tell; a larger cap may"
        )
    return list(dict.fromkeys(notices))


def _refusals(grid: Grid) -> tuple[tuple[str, str, str], ...]:
    return tuple(
        (grid.plan.procedures[i].identity, grid.study.focus[j].name, reason) for (i, j), reason in grid.job.refusals.items()
    )


def _targets(grid: Grid) -> list[str]:
    """What a coefficient is held to estimate where the mean is not as the model says."""
    told = {"line": "the slope of the best straight line over the rows", "average-slope": "the mean slope of the true curve"}
    return [
        f"Under {axis.departure.name} the target is {told[target]}."
        for axis in grid.possible
        if (target := getattr(axis.departure, "target", None)) in told
    ]


def _provenance(grid: Grid, evidence: Evidence, effort: Effort, verdicts: Mapping[Cell, Judgement]) -> dict[str, Any]:
    plan = grid.plan
    record: dict[str, Any] = {
        "seed": plan.seed,
        "versions": library_versions(),
        "study_digest": grid.study.digest,
        "plan_digest": plan.digest,
        "tolerance": tolerance_record(plan, grid.study.level),
        "repetitions": grid.looks.first,
        "most": grid.looks.most,
        "wrong_verdict": plan.wrong_verdict,
        "method": plan.method,
        "procedures": [procedure.identity for procedure in plan.procedures],
        "workers": effort.workers,
        "exact_cells": sum(judgement.exact for judgement in verdicts.values()),
        "simulated_cells": sum(not judgement.exact for judgement in verdicts.values()),
        "replicates": sum(tally.replicates for tally in evidence.tallies.values()),
        "control_variates": sharpened_count(evidence.simulated, evidence.tallies),
        "targets": _targets(grid),
    }
    if effort.verify:
        record["verification"] = verification(evidence)
    return record
