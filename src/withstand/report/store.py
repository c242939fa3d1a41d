"""Keeps an outcome in a folder as tables that any program reads, and gives it back exactly."""

from __future__ import annotations

import csv
import io
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from withstand.errors import InputError
from withstand.lab.outcome import MEASURE_COLUMNS, RANKING_COLUMNS, TIPPING_COLUMNS, VERDICT_COLUMNS, Outcome
from withstand.report.files import write_files
from withstand.report.plain import from_json, to_json

TABLES = {
    "measures": MEASURE_COLUMNS,
    "verdicts": VERDICT_COLUMNS,
    "tipping": TIPPING_COLUMNS,
    "ranking": RANKING_COLUMNS,
}
"""Tables of an outcome with the columns each must have."""

SUMMARY = "run.json"
"""Holds what is not in a table."""

FORMAT = 1
"""Of run.json; raised when older files can no longer be read."""


def stored(outcome: Outcome) -> dict[str, bytes]:
    """The files of an outcome, by name.

    Notes
    -----
    Floats are written with the fewest digits that give the same float back; a missing number is an empty cell; missing text is
    the same as empty text.
    """
    files = {f"{name}.csv": _csv(getattr(outcome, name)).encode() for name in TABLES}
    rest = {
        "format": FORMAT,
        "title": outcome.title,
        "headline": outcome.headline,
        "facts": outcome.facts,
        "notices": outcome.notices,
        "refusals": outcome.refusals,
        "provenance": outcome.provenance,
        "columns": {name: _kinds(getattr(outcome, name)) for name in TABLES},
    }
    return files | {SUMMARY: to_json(rest).encode()}


def store(outcome: Outcome, folder: Path) -> None:
    """Write an outcome to a folder.

    Raises
    ------
    InputError
        If the folder cannot be written to.
    """
    write_files(folder, stored(outcome))


def restore(folder: Path) -> Outcome:
    """Read an outcome from the folder it was stored in.

    Raises
    ------
    InputError
        If a file is missing or was not written by this package.
    """
    rest = from_json(_read(folder / SUMMARY))
    if not isinstance(rest, dict) or rest.get("format") != FORMAT:
        raise InputError(
            f"'{SUMMARY}' is not a run stored in format {FORMAT}",
            where=str(folder),
            remedy="Run the scenario again, or read it with the version that wrote it.",
        )
    try:
        tables = {name: _table(folder / f"{name}.csv", rest["columns"][name]) for name in TABLES}
        return Outcome(
            title=rest["title"],
            headline=tuple(rest["headline"]),
            facts=rest["facts"],
            notices=tuple(rest["notices"]),
            refusals=tuple((procedure, focus, reason) for procedure, focus, reason in rest["refusals"]),
            provenance=rest["provenance"],
            **tables,
        )
    except (KeyError, TypeError, AttributeError) as error:
        raise _changed(f"'{SUMMARY}' is not as a run writes it: {error}", folder / SUMMARY) from error


def _kinds(frame: pd.DataFrame) -> dict[str, str]:
    """'text', 'yes-no', or the NumPy name of a number type, by column."""
    return {str(name): _kind(frame[name]) for name in frame.columns}


def _kind(column: pd.Series[Any]) -> str:
    if column.dtype == bool:
        return "yes-no"
    return str(column.dtype) if isinstance(column.dtype, np.dtype) and column.dtype.kind in "if" else "text"


def _csv(frame: pd.DataFrame) -> str:
    """Comma-separated, with the shortest exact form of every float."""
    columns = [[_cell(value, kind) for value in frame[name].tolist()] for name, kind in _kinds(frame).items()]
    lines = [",".join(_quoted(str(name)) for name in frame.columns)]
    lines += [",".join(row) for row in zip(*columns, strict=True)]
    return "\n".join(lines) + "\n"


def _cell(value: Any, kind: str) -> str:
    if kind == "text":
        return "" if value is None or value is pd.NA or value != value else _quoted(str(value))
    return "" if value != value else repr(value)


def _quoted(text: str) -> str:
    return '"' + text.replace('"', '""') + '"' if any(sign in text for sign in ',"\r\n') else text


def _table(path: Path, kinds: dict[str, str]) -> pd.DataFrame:
    try:
        rows = list(csv.reader(io.StringIO(_read(path), newline=""), strict=True))
    except csv.Error as error:
        raise _changed(f"'{path.name}' is not a table as a run writes it: {error}", path) from error
    if not rows or rows[0] != list(kinds):
        raise _changed(f"the columns of '{path.name}' are not those that {SUMMARY} names", path)
    # a table of one empty text column would read its rows as blank lines; no table of an outcome has one column
    if ragged := [place for place, row in enumerate(rows, 1) if len(row) != len(kinds)]:
        raise _changed(f"row {ragged[0]} of '{path.name}' has {len(rows[ragged[0] - 1])} cells in place of {len(kinds)}", path)
    columns = list(zip(*rows[1:], strict=True)) or [()] * len(kinds)
    try:
        return pd.DataFrame({name: _column(cells, kind) for (name, kind), cells in zip(kinds.items(), columns, strict=True)})
    except ValueError as error:
        raise _changed(f"'{path.name}' holds something that is no number: {error}", path) from error


def _changed(what: str, path: Path) -> InputError:
    remedy = "The file was changed after the run; run the scenario again."
    return InputError(what, where=str(path.parent), remedy=remedy)


def _column(cells: tuple[str, ...], kind: str) -> pd.Series[Any]:
    if kind == "text":
        return pd.Series(list(cells), dtype=object)
    if kind == "yes-no":
        return pd.Series([cell == "True" for cell in cells], dtype=bool)
    if kind.startswith("float"):
        return pd.Series([float(cell) if cell else np.nan for cell in cells], dtype=kind)
    return pd.Series([int(cell) for cell in cells], dtype=kind)


def _read(path: Path) -> str:
    try:
        return path.read_bytes().decode()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"'{path.name}' cannot be read: {getattr(error, 'strerror', None) or error}",
            where=str(path.parent),
            remedy="Name the folder a run has written, such as outputs/NAME.",
        ) from error
