"""The commands. Each imports what it needs when it runs, so that --help answers at once."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from withstand import __version__
from withstand.cli.options import with_effort, with_folder, with_input, with_place, with_speech
from withstand.cli.state import State

LISTS = ("departures", "procedures", "measures", "tolerances")
DEMOS = ("kiln_boards", "reservoir", "lamp_trial")


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="withstand", message="%(prog)s %(version)s")
@click.option("--debug", is_flag=True, help="Show where an error came from.")
@click.pass_obj
def withstand(state: State, /, debug: bool) -> None:
    """Which broken regression assumption matters at your sample size, on your own design matrix."""
    state.debug = debug


@withstand.command()
@with_input
@with_effort
@with_place
@with_speech
@click.pass_obj
def run(state: State, /, **options: Any) -> None:
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
def inspect(state: State, /, **options: Any) -> None:
    """Show the design, the fit and what is known without long simulation, in seconds."""
    from withstand.cli.running import inspect_input

    inspect_input(state, **options)


@withstand.command()
@with_input
@with_effort
@click.option("--departure", "departures", metavar="KIND", multiple=True, help="What may be wrong; as often as needed.")
@click.option("--severity", "severities", metavar="NUMBER", type=float, multiple=True, help="One for each --departure.")
@click.option("--along", metavar="COL", help="The column along which the spread or the mean departs.")
@click.option("--together", is_flag=True, help="The departures act at once, as a stack, rather than each alone.")
@click.option("--plausible", is_flag=True, help="Each departure as far as your residuals allow, rather than as stated.")
@click.option("--procedure", "procedures", metavar="NAME", multiple=True, help="One, or several to find the cheapest.")
@click.option("--power", type=float, help="Power at the smallest effect that matters, such as 0.9.")
@click.option("--half-width", type=float, help="Largest mean half width of the interval.")
@click.option("--only", is_flag=True, help="Only --power and --half-width: coverage and bias need not be within tolerance.")
@click.option("--range", "ranges", metavar="NAME=A,B", multiple=True, help="An uncertain input, such as error_sd=2,4.")
@click.option("--at", metavar="ROWS", type=int, multiple=True, help="Say what so many rows are good for, instead.")
@click.option("--on", metavar="TERM", help="The focal quantity; the first if left out.")
@click.option("--growth", type=click.Choice(["stack", "resample", "extend"]), help="How the rows of a table multiply.")
@click.option("--largest", type=click.IntRange(4), default=20_000, help="The largest number of rows tried; 20,000.")
@with_folder
@with_speech
@click.pass_obj
def size(state: State, /, **options: Any) -> None:
    """Find the number of rows at which everything asked for is met."""
    from withstand.cli.sizing import size_input

    size_input(state, **options)


@withstand.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@with_speech
@click.pass_obj
def report(state: State, /, folder: Path, **options: Any) -> None:
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
def demo(state: State, /, name: str, **options: Any) -> None:
    """Copy a demo scenario with invented data to the current folder and run it."""
    from withstand.cli.demos import run_demo

    run_demo(state, name, **options)


@withstand.command()
def schema() -> None:
    """Print the JSON Schema of scenario files, for editors."""
    import json

    from withstand.scenario.jsonschema import json_schema

    click.echo(json.dumps(json_schema(), indent=2, ensure_ascii=False))
