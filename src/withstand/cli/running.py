"""The commands `run`, `inspect` and `report`."""

from __future__ import annotations

import os
from contextlib import closing
from pathlib import Path
from typing import Any

import click

from withstand.cli.bars import Bars
from withstand.cli.inputs import loaded_from
from withstand.cli.inspection import inspection
from withstand.cli.layout import visible
from withstand.cli.speech import findings, say_findings, say_json
from withstand.cli.state import State
from withstand.front.folder import LEDGER
from withstand.front.running import perform, report_again
from withstand.lab.gather import Effort
from withstand.lab.plan import Plan
from withstand.report.files import PAGE
from withstand.scenario.load import load_scenario
from withstand.study.study import Study

MOST_WORKERS = 8
"""Worker processes where nobody says; more rarely pay on one machine."""


def run_study(
    state: State,
    input_path: Path,
    *,
    out: Path | None,
    workers: int | None,
    cluster: str | None,
    fresh: bool,
    verify: bool,
    quiet: bool,
    as_json: bool,
    **options: Any,
) -> None:
    """Run a scenario, or a table with options, and write the report."""
    loaded = loaded_from(input_path, options)
    folder = out or default_folder(loaded.name)
    state.out, state.ledger = folder, folder / LEDGER
    with closing(Bars(quiet or as_json)) as bars:
        effort = Effort(workers=workers or cores(), cluster=cluster, verify=verify, progress=bars)
        result = perform(loaded.study, loaded.plan, effort, folder, fresh=fresh, record=loaded.record)
    say_findings(result, folder / PAGE, quiet, as_json)


def inspect_input(state: State, input_path: Path, *, quiet: bool, as_json: bool, **options: Any) -> None:
    """Print what is known without long simulation."""
    loaded = loaded_from(input_path, options)
    with closing(Bars(quiet or as_json)) as bars:
        result = perform(loaded.study, loaded.plan, Effort(simulate=False, progress=bars))
    if as_json:
        say_json(findings(result))
    elif not quiet:
        for line in inspection(result):
            click.echo(visible(line))


def report_folder(state: State, folder: Path, *, quiet: bool, as_json: bool) -> None:
    """Write the report of a run again."""
    result = report_again(folder, _study_and_plan)
    say_findings(result, folder / PAGE, quiet, as_json)


def _study_and_plan(path: Path) -> tuple[Study, Plan]:
    loaded = load_scenario(path)
    return loaded.study, loaded.plan


def default_folder(name: str) -> Path:
    """Where a run leaves its results if nobody says."""
    return Path("outputs") / name


def cores() -> int:
    """Processors this process may use, up to a number."""
    allowed = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return min(allowed, MOST_WORKERS)
