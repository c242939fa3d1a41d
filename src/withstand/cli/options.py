"""Options that several commands share. Nothing heavy may be imported here."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

Command = TypeVar("Command", bound=Callable[..., Any])

_INPUT = [
    click.argument("input_path", metavar="SCENARIO.toml|DATA", type=click.Path(path_type=Path)),
    click.option("--model", metavar="FORMULA", help='Model formula for a table, such as "y ~ a + b".'),
    click.option("--focus", metavar="TERM", multiple=True, help="What the decision hangs on; give it once for each."),
    click.option("--order", metavar="COL", help="Column with the order in time."),
    click.option("--groups", metavar="COL", help="Column with the groups whose rows may share an error."),
    click.option("--weights", metavar="COL", help="Column with known weights."),
    click.option("--effect", metavar="TERM=NUMBER", multiple=True, help="The smallest effect that matters."),
    click.option("--level", type=float, help="Confidence level, 0.95 if left out."),
    click.option("--rows", type=click.Choice(["fixed", "resampled"]), help="Rows as they are, or drawn with replacement."),
    click.option("--decimal", type=click.Choice([".", ","]), help="Decimal sign of the table."),
]

_EFFORT = [
    click.option("--seed", type=click.IntRange(0), help="Seed; same seed, same numbers."),
    click.option("--repetitions", type=click.IntRange(100), help="Replicates a simulated cell gets at least."),
    click.option("--most", type=click.IntRange(100), help="Replicates a simulated cell gets at most, in search of a verdict."),
    click.option("--method", type=click.Choice(["auto", "simulated"]), help="Exact answers where there are any, or none."),
]

_FOLDER = [
    click.option("--out", metavar="DIR", type=click.Path(path_type=Path), help="Folder for results; outputs/NAME if left out."),
    click.option("--workers", type=click.IntRange(1), help="Worker processes; the number of cores, up to 8, if left out."),
]

_FURTHER = [
    click.option("--cluster", metavar="ADDRESS", help="Address of a Dask scheduler, instead of worker processes."),
    click.option("--fresh", is_flag=True, help="Forget what an earlier run left in the folder."),
    click.option("--verify", is_flag=True, help="Simulate what has exact answers as well, and compare."),
]

_SPEECH = [
    click.option("--quiet", is_flag=True, help="No progress and no text on success."),
    click.option("--json", "as_json", is_flag=True, help="Print JSON for a machine instead of text."),
]


def with_input(command: Command) -> Command:
    """The study: a scenario file, or a table with options."""
    return _with(_INPUT, command)


def with_effort(command: Command) -> Command:
    """How much to simulate."""
    return _with(_EFFORT, command)


def with_folder(command: Command) -> Command:
    """Where to leave the results, and how many processes to use."""
    return _with(_FOLDER, command)


def with_place(command: Command) -> Command:
    """The same, with what concerns a run that is kept."""
    return _with([*_FOLDER, *_FURTHER], command)


def with_speech(command: Command) -> Command:
    """What to print."""
    return _with(_SPEECH, command)


def _with(options: list[Callable[[Any], Any]], command: Command) -> Command:
    for option in reversed(options):
        command = option(command)
    return command
