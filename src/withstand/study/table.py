"""Tables from files, read without guessing: cells are text until every one of a column is a number."""

from __future__ import annotations

import csv
import gzip
import importlib
import io
import warnings
import zlib
from collections.abc import Callable
from pathlib import Path
from types import ModuleType

import numpy as np
import pandas as pd

from withstand.errors import TableError
from withstand.study.numerals import as_numbers

NOTICES = "notices"
"""Key in the attributes of a frame under which the reader leaves what the user should know."""

_DELIMITERS = {".csv": ",;\t", ".tsv": "\t", ".txt": "\t,;"}


def read_table(path: str | Path, *, decimal: str | None = None) -> pd.DataFrame:
    """Read a table.

    Parameters
    ----------
    path : str or Path
        A csv, tsv, txt, parquet or xlsx file; with .gz behind it, compressed.
    decimal : {".", ","}, optional
        Decimal sign of text files; a point if left out.

    Returns
    -------
    DataFrame
        Columns are float64 where every cell is a number, text otherwise; only a blank cell is missing, so "NA" and "None"
        are labels. The index counts rows as a spreadsheet does, with the header as row 1.

    Raises
    ------
    TableError
        If the file is missing, unreadable, empty, of unknown kind, or its header names a column twice.
    """
    path = Path(path)
    content, kind = _content(path)
    reader = _READERS.get(kind)
    if reader is None:
        raise TableError(
            f"'{path.name}' is not a kind of table that can be read", where=str(path), remedy=f"Known: {', '.join(_READERS)}."
        )
    frame = reader(content, path, decimal or ".")
    if frame.empty:
        raise TableError("the table has no rows of data", where=str(path), remedy="Check that the file was saved in full.")
    return frame


def check_names(names: list[str], where: str) -> None:
    """Complain about a column name that comes twice.

    Raises
    ------
    TableError
        If it does.
    """
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise TableError(
            f"the column name '{twice[0]}' comes {names.count(twice[0])} times",
            where=where,
            remedy="Rename one of the columns.",
        )


def _content(path: Path) -> tuple[bytes, str]:
    """The bytes and the ending that says the kind."""
    try:
        content = path.read_bytes()
    except (OSError, ValueError) as error:  # a zero byte in the path is a ValueError
        reason = getattr(error, "strerror", None) or str(error)
        raise TableError(f"the file cannot be read ({reason.lower()})", where=str(path), remedy="Check the path.") from error
    ending = path.suffix.lower()
    if ending == ".gz":
        try:
            content = gzip.decompress(content)
        except (OSError, EOFError, zlib.error) as error:
            raise TableError(
                f"the file is damaged or not compressed ({error})",
                where=str(path),
                remedy="Compress it again, or drop the .gz.",
            ) from error
        ending = Path(path.stem).suffix.lower()
    if not content:
        raise TableError("the file is empty", where=str(path), remedy="Check that it was saved in full.")
    return content, ending


def _read_text(content: bytes, path: Path, decimal: str) -> pd.DataFrame:
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise TableError(
            f"byte {error.start + 1} is not UTF-8 text", where=f"{path}, row {line}", remedy="Save the table as UTF-8."
        ) from error
    if "\0" in text:
        raise TableError("this is not a text file", where=str(path), remedy="Export the table as csv.")
    delimiter = _delimiter(text, _ending(path))
    try:
        rows = [
            [cell.strip() for cell in row]
            for row in csv.reader(io.StringIO(text, newline=None), delimiter=delimiter, strict=True)
        ]
    except csv.Error as error:
        raise TableError(f"a quoted cell is not closed or not well formed ({error})", where=str(path),
                         remedy="Mend the quotes, or export the table again.") from error  # fmt: skip
    while rows and not any(rows[-1]):
        rows.pop()
    if not rows:
        raise TableError("the file holds no cells", where=str(path), remedy="Check that it was saved in full.")
    header = _header(rows[0], path)
    for number, row in enumerate(rows[1:], 2):
        if len(row) > len(header) or (len(row) < len(header) and any(row)):
            raise TableError(
                f"the row has {len(row)} cells, and the header names {len(header)} columns",
                where=f"{path}, row {number}",
                remedy="Quote cells that contain the delimiter, and keep empty cells.",
            )
    width = len(header)
    cells = [[cell or None for cell in row] + [None] * (width - len(row)) for row in rows[1:]]
    frame = pd.DataFrame(cells, columns=header, index=pd.RangeIndex(2, len(rows) + 1), dtype=object)
    return _typed(frame, decimal)


def _ending(path: Path) -> str:
    return (Path(path.stem) if path.suffix.lower() == ".gz" else path).suffix.lower()


def _delimiter(text: str, ending: str) -> str:
    """The candidate that comes most often in the header; the first one where none does."""
    header = next((line for line in text.splitlines() if line.strip()), "")
    outside = "".join(header.split('"')[::2])
    return max(_DELIMITERS[ending], key=outside.count)


def _header(cells: list[str], path: Path) -> list[str]:
    """Column names; a nameless column, as of row numbers, is named by its place."""
    names = [cell or f"column {place}" for place, cell in enumerate(cells, 1)]
    check_names(names, f"{path}, row 1")
    return names


def _typed(frame: pd.DataFrame, decimal: str) -> pd.DataFrame:
    for name in frame.columns:
        numbers = as_numbers(frame[name], decimal)
        if numbers is not None:
            frame[name] = numbers
    return frame


def _read_excel(content: bytes, path: Path, decimal: str) -> pd.DataFrame:
    openpyxl = _extra("openpyxl", path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # about styles and extensions that hold no data
            book = openpyxl.load_workbook(io.BytesIO(content), read_only=True, data_only=True)
            sheets = book.sheetnames
            rows = [list(row) for row in book[sheets[0]].iter_rows(values_only=True)]
    except Exception as error:  # the library raises many kinds on a damaged file
        raise TableError(f"the workbook cannot be read ({error})", where=str(path), remedy="Save it again as xlsx.") from error
    while rows and all(cell is None for cell in rows[-1]):
        rows.pop()
    if not rows:
        raise TableError(f"the sheet '{sheets[0]}' is empty", where=str(path), remedy="Put the table on the first sheet.")
    header = _header(["" if cell is None else str(cell).strip() for cell in rows[0]], path)
    frame = pd.DataFrame([_blank(row) for row in rows[1:]], columns=header, index=pd.RangeIndex(2, len(rows) + 1), dtype=object)
    for name in frame.columns:
        present = frame[name].dropna()
        if present.empty:
            continue
        if present.map(lambda cell: isinstance(cell, int | float) and not isinstance(cell, bool)).all():
            frame[name] = frame[name].astype(np.float64)
        elif pd.api.types.infer_dtype(present) not in ("datetime", "date", "datetime64"):
            frame[name] = frame[name].map(_as_text, na_action="ignore")
    if len(sheets) > 1:
        frame.attrs[NOTICES] = (f"{path.name} has {len(sheets)} sheets; the first, '{sheets[0]}', was read",)
    return frame


def _blank(row: list[object]) -> list[object]:
    return [None if cell is None or (isinstance(cell, str) and not cell.strip()) else cell for cell in row]


def _as_text(cell: object) -> str:
    return f"{cell:g}" if isinstance(cell, float) else str(cell).strip()


def _read_parquet(content: bytes, path: Path, decimal: str) -> pd.DataFrame:
    _extra("pyarrow", path)
    try:
        frame = pd.read_parquet(io.BytesIO(content))
    except Exception as error:  # the library raises many kinds on a damaged file
        raise TableError(f"the file cannot be read ({error})", where=str(path), remedy="Write it again as parquet.") from error
    names = [str(name) for name in frame.columns]
    check_names(names, str(path))
    frame.columns = pd.Index(names)
    frame.index = pd.RangeIndex(2, len(frame) + 2)
    return frame


def _extra(module: str, path: Path) -> ModuleType:
    try:
        return importlib.import_module(module)
    except ImportError as error:
        raise TableError(
            f"reading this kind of file needs the library '{module}', which is not installed",
            where=str(path),
            remedy="Install it with: pip install 'withstand[files]', or export the table as csv.",
        ) from error


_READERS: dict[str, Callable[[bytes, Path, str], pd.DataFrame]] = {
    ".csv": _read_text,
    ".tsv": _read_text,
    ".txt": _read_text,
    ".parquet": _read_parquet,
    ".xlsx": _read_excel,
}
