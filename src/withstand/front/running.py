"""Run and inspect: a plan from what was asked, the conductor's outcome as a result."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from withstand.departures.base import Departure
from withstand.errors import InputError
from withstand.front.folder import FINISHED, LEDGER, SCENARIO, finished, hashes, prepare
from withstand.judgement.tolerance import Tolerance
from withstand.lab.conduct import conduct
from withstand.lab.gather import Effort
from withstand.lab.grid import Grid
from withstand.lab.plan import Method, Plan
from withstand.lab.progress import Progress, Silent
from withstand.procedures.base import Procedure
from withstand.report.result import Result
from withstand.report.store import restore
from withstand.scenario.choices import MOST, chosen_axes, chosen_procedures
from withstand.scenario.defaults import default_axes, default_procedures
from withstand.study.study import Study

UNFINISHED = "this run is not finished: what has no answer yet is left out. Run the scenario again to go on"
"""The notice on a report that is written before the end."""


def run(
    study: Study,
    departures: Sequence[Departure | str | Sequence[Departure]] | None = None,
    procedures: Sequence[Procedure | str] | None = None,
    *,
    seed: int = 1,
    tolerance: Tolerance | None = None,
    repetitions: int = 10_000,
    most: int | None = None,
    wrong_verdict: float = 0.01,
    method: Method = "auto",
    workers: int = 1,
    cluster: str | None = None,
    out: str | Path | None = None,
    fresh: bool = False,
    verify: bool = False,
    progress: Progress | None = None,
) -> Result:
    """Say how far bias, coverage and test size shift when the assumptions fail, on the study's own design.

    Parameters
    ----------
    study : Study
        What the user has.
    departures : sequence of Departure, str or sequence of Departure, optional
        What to try: a departure, the kind of one with its default ladder, or a stack, of which the first is tried along its
        ladder while the others act at one severity each. Left out: every departure that makes sense for the columns at hand.
    procedures : sequence of Procedure or str, optional
        What to judge; the first is the user's own. Left out: those that answer the departures.
    seed : int
        Same seed, same numbers.
    tolerance : Tolerance, optional
        What the user can live with; Cochran's criterion if left out.
    repetitions, most : int
        Replicates a simulated cell gets at least and at most; `most` is 160,000 if left out.
    wrong_verdict : float
        Accepted chance that a verdict is wrong.
    method : {"auto", "simulated"}
        Whether cells that have exact answers get them.
    workers : int
        Worker processes. The numbers do not depend on it.
    cluster : str, optional
        Address of a Dask scheduler, instead of worker processes.
    out : str or Path, optional
        Folder for the tallies and the report; an interrupted run of the same study goes on there. Left out: nothing is
        written.
    fresh : bool
        Whether to forget the tallies of an earlier run in `out`.
    verify : bool
        Whether to simulate the exact cells as well.
    progress : Progress, optional
        Who is told how far it is.

    Returns
    -------
    Result
        Measures, verdicts, tipping severities and the ranking, as DataFrames.

    Raises
    ------
    InputError
        If something asked for makes no sense on the study, or `out` belongs to another study.
    """
    study, plan = planned(
        study, departures, procedures, seed=seed, tolerance=tolerance, repetitions=repetitions, most=most,
        wrong_verdict=wrong_verdict, method=method,
    )  # fmt: skip
    effort = Effort(workers=workers, cluster=cluster, verify=verify, progress=progress or Silent())
    return perform(study, plan, effort, None if out is None else Path(out), fresh=fresh)


def inspect(
    study: Study,
    departures: Sequence[Departure | str | Sequence[Departure]] | None = None,
    procedures: Sequence[Procedure | str] | None = None,
    *,
    seed: int = 1,
    tolerance: Tolerance | None = None,
    progress: Progress | None = None,
) -> Result:
    """Say what is known without long simulation: design, fit, plausible severities, exact answers.

    Parameters
    ----------
    study, departures, procedures, seed, tolerance, progress
        As in `run`.

    Returns
    -------
    Result
        Cells without an exact answer have no measures and no verdict.

    Raises
    ------
    InputError
        As in `run`.
    """
    study, plan = planned(study, departures, procedures, seed=seed, tolerance=tolerance)
    return perform(study, plan, Effort(simulate=False, progress=progress or Silent()))


def planned(
    study: Study,
    departures: Sequence[Departure | str | Sequence[Departure]] | None,
    procedures: Sequence[Procedure | str] | None,
    *,
    tolerance: Tolerance | None = None,
    repetitions: int = 10_000,
    most: int | None = None,
    **effort: Any,
) -> tuple[Study, Plan]:
    """The study, with a notice of what the defaults left out, and the plan."""
    axes, notices = default_axes(study) if departures is None else (chosen_axes(departures, study), ())
    chosen = default_procedures(study) if procedures is None else chosen_procedures(procedures, study)
    plan = Plan(
        axes,
        chosen,
        tolerance or Tolerance(),
        repetitions=repetitions,
        most=max(MOST, repetitions) if most is None else most,
        **effort,
    )
    return replace(study, notices=(*study.notices, *notices)), plan


def perform(
    study: Study,
    plan: Plan,
    effort: Effort,
    out: Path | None = None,
    *,
    fresh: bool = False,
    record: Mapping[str, Any] | None = None,
) -> Result:
    """Carry out a plan.

    Parameters
    ----------
    study : Study
        What the user has.
    plan : Plan
        What to try.
    effort : Effort
        How and where to compute; with `out`, the ledger is kept there.
    out : Path, optional
        Folder for ledger and report.
    fresh : bool
        Whether to forget the ledger of an earlier run in `out`.
    record : mapping, optional
        The scenario, kept in `out` so that the report can be written again.

    Raises
    ------
    InputError
        If `out` cannot be written to or belongs to another study.
    """
    if out is not None:
        effort = replace(effort, ledger_path=prepare(out, Grid(study, plan).job.digest, record, fresh))
    result = Result.of(conduct(study, plan, effort))
    if record is not None:
        result = replace(result, provenance={**result.provenance, **hashes(record), FINISHED: True})
    if out is not None:
        result.report(out)
    return result


def report_again(folder: Path, load: Callable[[Path], tuple[Study, Plan]]) -> Result:
    """Write the report of a run again: from its tables if it finished, from its ledger if it did not.

    Parameters
    ----------
    folder : Path
        Of the run.
    load : callable
        Reads a scenario file.

    Raises
    ------
    InputError
        If the folder is not that of a run, or something in it was changed.
    """
    scenario, ledger = folder / SCENARIO, folder / LEDGER
    if finished(folder):
        result = Result.of(restore(folder))
    elif scenario.is_file() and ledger.is_file():
        study, plan = load(scenario)
        ledger = prepare(folder, Grid(study, plan).job.digest)
        result = Result.of(conduct(study, plan, Effort(ledger_path=ledger, simulate=False)))
        result = replace(result, notices=(UNFINISHED, *result.notices))
    else:
        raise InputError(
            f"it holds neither the tables of a run nor {SCENARIO} and {LEDGER}",
            where=str(folder),
            remedy="Name the folder a run has written, such as outputs/NAME.",
        )
    result.report(folder)
    return result
