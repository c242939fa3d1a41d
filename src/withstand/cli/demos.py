"""The command `demo`: copies a scenario with its invented table, never over a file that is there, and runs it."""

from __future__ import annotations

from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path
from typing import Any

import click

from withstand.cli.running import run_study
from withstand.cli.state import State
from withstand.errors import InputError
from withstand.report.files import write_files


def run_demo(state: State, name: str, **options: Any) -> None:
    """Copy the demo to the current folder and run it."""
    quiet = options["quiet"] or options["as_json"]
    copied = copy_demo(name, Path())
    if copied and not quiet:
        click.echo(f"Copied {' and '.join(copied)} to this folder.\n")
    run_study(state, Path(f"{name}.toml"), **options)


def copy_demo(name: str, folder: Path) -> list[str]:
    """Copy what is not there yet.

    Returns
    -------
    list of str
        Names of the files copied; those that were there and the same are not among them.

    Raises
    ------
    InputError
        If a file of the same name with other content is there, or the folder cannot be written to.
    """
    home = demos_home()
    contents = {source.name: source.read_bytes() for source in home.iterdir() if source.name in (f"{name}.toml", f"{name}.csv")}
    fresh = {file: content for file, content in contents.items() if not (folder / file).exists()}
    for file in sorted(set(contents) - set(fresh)):
        if (folder / file).read_bytes() != contents[file]:
            raise InputError(
                f"'{file}' is there already and is not the demo's",
                where=str(folder.resolve()),
                remedy=f"Run it as it is with `withstand run {name}.toml`, or call the demo in another folder.",
            )
    write_files(folder, fresh)
    return sorted(fresh)


def demos_home() -> Traversable:
    """Where the demo scenarios are: inside an installed package, or beside the sources in a checkout."""
    installed = files("withstand") / "scenarios"
    return installed if installed.is_dir() else Path(__file__).parents[3] / "scenarios"
