"""The commands. Each imports what it needs when it runs, so that --help answers at once."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from withstand.cli.options import with_effort, with_input, with_place, with_speech
from withstand.cli.state import State

LISTS = ("departures", "procedures", "measures", "tolerances")
DEMOS = ("kiln_boards", "reservoir")


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="withstand", message="%(package)s %(version)s")
@click.option("--debug", is_flag=True, help="Show where an error came from.")
@click.pass_obj
def withstand(state: State, debug: bool) -> None:
    """Which broken regression assumption matters at your sample size, on your own design matrix."""
    state.debug = debug


@withstand.command()
@with_input
@with_effort
@with_place
@with_speech
@click.pass_obj
def run(state: State, **options: Any) -> None:
    """Find out what matters, and write the report.

    The same command again goes on where an interrupted run stopped.
    """
    from withstand.cli.running import run_study

    run_study(state, **options)


@withstand.command()
@with_input
@with_effort
@with_speech
@click.pass_obj
def inspect(state: State, **options: Any) -> None:
    """Show the design, the fit and what is known without long simulation, in seconds."""
    from withstand.cli.running import inspect_input

    inspect_input(state, **options)


@withstand.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@with_speech
@click.pass_obj
def report(state: State, folder: Path, **options: Any) -> None:
    """Write the report again from a finished or half-finished run."""
    from withstand.cli.running import report_folder

    report_folder(state, folder, **options)


@withstand.command()
@with_input
def start(**options: Any) -> None:
    """Print a commented scenario for a table, to edit: withstand start DATA.csv --model ... > my.toml."""
    from withstand.cli.starting import start_scenario

    start_scenario(**options)


@withstand.command("list")
@click.argument("what", type=click.Choice(LISTS))
@click.option("--json", "as_json", is_flag=True, help="Print JSON for a machine instead of text.")
def list_command(what: str, as_json: bool) -> None:
    """Show the departures, procedures, measures or tolerances there are."""
    from withstand.cli.lists import listing

    click.echo(listing(what, as_json))


@withstand.command()
@click.argument("name", type=click.Choice(DEMOS), default=DEMOS[0])
@with_effort
@with_place
@with_speech
@click.pass_obj
def demo(state: State, name: str, **options: Any) -> None:
    """Copy a demo scenario with invented data to the current folder and run it."""
    from withstand.cli.demos import run_demo

    run_demo(state, name, **options)


@withstand.command()
def schema() -> None:
    """Print the JSON Schema of scenario files, for editors."""
    import json

    from withstand.scenario.jsonschema import json_schema

    click.echo(json.dumps(json_schema(), indent=2, ensure_ascii=False))
