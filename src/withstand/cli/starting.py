"""The command `start`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from withstand.cli.inputs import loaded_from, study_table
from withstand.scenario.scaffold import scaffold


def start_scenario(input_path: Path, **options: Any) -> None:
    """Print a scenario for a table."""
    if input_path.suffix.lower() == ".toml":
        raise click.UsageError(f"{input_path} is a scenario already; name a table")
    loaded = loaded_from(input_path, options)
    click.echo(scaffold(loaded.study, loaded.plan, study_table(input_path, options)), nl=False)
