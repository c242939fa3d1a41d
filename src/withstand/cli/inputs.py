"""From the options of a command to a loaded scenario."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from withstand.scenario.load import Loaded, load, load_scenario
from withstand.scenario.source import Complaint, KeyPath, Source

_STUDY = ("model", "focus", "order", "groups", "weights", "effect", "level", "rows")
_ENDINGS = (".gz", ".csv", ".tsv", ".txt", ".parquet", ".xlsx")


@dataclass(frozen=True)
class CommandLine(Source):
    """Options that stand for a scenario; places in it are options."""

    def where(self, path: KeyPath) -> str:
        """The option that gave a value."""
        key = str(path[1]) if len(path) > 1 else ""
        return self.name if key in ("", "data") else f"--{key}"

    def relocate(self, error: Complaint, entry: KeyPath = ()) -> Complaint:
        """The same complaint with its place and its remedy in options, where they speak of keys."""
        found = super().relocate(error, entry)
        remedy = re.sub(rf"\b({'|'.join([*_STUDY, 'decimal'])}) = ", r"--\1 ", found.remedy)
        return type(found)(found.what, where=found.where, remedy=remedy)


def loaded_from(input_path: Path, options: Mapping[str, Any]) -> Loaded:
    """The study and plan of a scenario file, or of a table with options.

    Parameters
    ----------
    input_path : Path
        A .toml file, or a table.
    options : mapping
        Those of the command; None and empty where they were not given.

    Raises
    ------
    InputError
        If the input cannot be used.
    """
    simulation = {key: options[key] for key in ("seed", "repetitions", "most", "method") if options.get(key) is not None}
    study: dict[str, Any] = {"decimal": options["decimal"]} if options.get("decimal") else {}
    if input_path.suffix.lower() == ".toml":
        if options.get("effect"):
            study["effect"] = _effects(options["effect"])
        given = [key for key in _STUDY if options.get(key) and key != "effect"]
        if given:
            raise click.UsageError(f"--{given[0]} goes with a table; the scenario {input_path} says it itself")
        return load_scenario(input_path, {"study": study, "simulation": simulation})
    return load(
        {"study": study_table(input_path, options), "simulation": simulation},
        CommandLine(str(input_path), "", Path()),
        table_name(input_path),
    )


def study_table(data: Path, options: Mapping[str, Any]) -> dict[str, Any]:
    """The [study] table that the options stand for."""
    if not options.get("model"):
        raise click.UsageError(f'the table {data} needs a model: --model "y ~ a + b"')
    table: dict[str, Any] = {"data": str(data)}
    for key in ("model", "order", "groups", "weights", "level", "rows", "decimal"):
        if options.get(key) is not None:
            table[key] = options[key]
    if options.get("focus"):
        table["focus"] = list(options["focus"])
    if options.get("effect"):
        table["effect"] = _effects(options["effect"])
    return table


def table_name(data: Path) -> str:
    """The file name without what says its format."""
    name = data.name
    while (ending := Path(name).suffix.lower()) in _ENDINGS and name != ending:
        name = name[: -len(ending)]
    return name


def _effects(given: Sequence[str]) -> dict[str, float]:
    effects = {}
    for text in given:
        name, _, number = text.rpartition("=")
        try:
            effects[name.strip()] = float(number)
        except ValueError:
            effects[""] = math.nan
        if not name.strip() or not math.isfinite(effects.get(name.strip(), math.nan)):
            raise click.UsageError(f"--effect is '{text}'; give it as TERM=NUMBER, such as --effect dose=0.5")
    return effects
