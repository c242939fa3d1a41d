"""The text of a scenario file and the places in it, so that a message can say where."""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any, TypeVar

from withstand.errors import InputError, ScenarioError

KeyPath = tuple[str | int, ...]
"""Keys and list positions from the top of a scenario down to a value."""

_HEADER = re.compile(r"\s*(\[\[?)\s*([^\[\]]+?)\s*\]")
_KEY = re.compile(r"""\s*((?:[\w-]+|"[^"]*"|'[^']*')(?:\s*\.\s*(?:[\w-]+|"[^"]*"|'[^']*'))*)\s*=""")
_PART = re.compile(r"""[\w-]+|"[^"]*"|'[^']*'""")
_DOTTED = re.compile(r"(study|departure|procedures|tolerance|simulation|growth)(\.\w+)*")
_AT_LINE = re.compile(r"\s*\(at (?:line (\d+), column (\d+)|end of document)\)")

Complaint = TypeVar("Complaint", bound=InputError)


@dataclass(frozen=True)
class Source:
    """Where a scenario came from.

    Parameters
    ----------
    name : str
        File name, for messages.
    text : str
        What is in it.
    folder : Path
        Relative paths in it start here.
    """

    name: str
    text: str
    folder: Path

    @classmethod
    def read(cls, path: Path) -> Source:
        """Read a scenario file.

        Raises
        ------
        ScenarioError
            If it cannot be read as text.
        """
        try:
            return cls(str(path), path.read_bytes().decode("utf-8-sig"), path.parent)
        except UnicodeDecodeError as error:
            raise ScenarioError(
                f"byte {error.start + 1} is not UTF-8 text", where=str(path), remedy="Save the scenario as UTF-8."
            ) from error
        except OSError as error:
            raise ScenarioError(
                f"the file cannot be read ({(error.strerror or str(error)).lower()})",
                where=str(path),
                remedy="Check the path; `withstand start DATA.csv --model ...` writes a scenario to begin with.",
            ) from error

    def parse(self) -> dict[str, Any]:
        """The values in it.

        Raises
        ------
        ScenarioError
            If it is not TOML; the message shows the line.
        """
        try:
            return tomllib.loads(self.text)
        except tomllib.TOMLDecodeError as error:
            raise self._syntax_error(str(error)) from error
        except RecursionError as error:
            raise ScenarioError(
                "brackets or braces are nested too deeply to be read",
                where=self.name,
                remedy="No key of a scenario needs that.",
            ) from error

    def _syntax_error(self, message: str) -> ScenarioError:
        place = _AT_LINE.search(message)
        reason = _AT_LINE.sub("", message).rstrip(".")
        remedy = 'Values are written as key = "text", key = 1.5 or key = ["a", "b"].'
        if reason.startswith("Cannot"):
            reason, remedy = "a key or table is given twice", "Keep one of them; a list of tables has double brackets."
        if place is None or place.group(1) is None:
            return ScenarioError(
                f"this is not valid TOML: {reason[:1].lower()}{reason[1:]}, at the end of the file",
                where=self.name,
                remedy="Close the last quote, bracket or brace." if reason.startswith("Un") else remedy,
            )
        line, column = int(place.group(1)), int(place.group(2))
        # The parser points behind what it stumbled over, which may be the start of the next line.
        shown = self.text.splitlines()[line - 1].strip() if line <= len(self.text.splitlines()) else ""
        return ScenarioError(
            f"this is not valid TOML: {reason[:1].lower()}{reason[1:]}, in `{shown}`",
            where=f"{self.name}, line {line}, column {column}",
            remedy=remedy,
        )

    def where(self, path: KeyPath) -> str:
        """A place in words: file, line and key."""
        line = self._line(path)
        told = in_words(path)
        return ", ".join(part for part in (self.name, f"line {line}" if line else "", told) if part)

    def relocate(self, error: Complaint, entry: KeyPath = ()) -> Complaint:
        """The same complaint with its place in this file.

        Parameters
        ----------
        error : InputError
            Says a key such as "study.order" or "departure.severity", or a place outside the scenario, which is kept.
        entry : tuple, optional
            The list entry in question, as in ("departure", 2).
        """
        if error.where and not _DOTTED.fullmatch(error.where):
            return error
        path: KeyPath = tuple(error.where.split(".")) if error.where else entry
        if error.where and entry and path[0] == entry[0]:
            path = (*entry, *path[1:])
        return type(error)(error.what, where=self.where(path), remedy=error.remedy)

    def _line(self, path: KeyPath) -> int | None:
        while path:
            if path in self._lines:
                return self._lines[path]
            path = path[:-1]
        return None

    @cached_property
    def _lines(self) -> dict[KeyPath, int]:
        """Line numbers of tables and of keys that begin a line; inline values share the line of their key."""
        found: dict[KeyPath, int] = {}
        counts: dict[KeyPath, int] = {}
        table: KeyPath = ()
        for number, line in enumerate(self.text.splitlines(), 1):
            if header := _HEADER.match(line):
                table = self._absolute(_parts(header.group(2)), counts)
                if header.group(1) == "[[":
                    counts[table] = counts.get(table, -1) + 1
                    table = (*table, counts[table])
                found.setdefault(table, number)
            elif key := _KEY.match(line):
                found.setdefault((*table, *_parts(key.group(1))), number)
        return found

    @staticmethod
    def _absolute(names: KeyPath, counts: dict[KeyPath, int]) -> KeyPath:
        """A header's path with the current entry of every list of tables above it."""
        path: KeyPath = ()
        for depth, name in enumerate(names, 1):
            path = (*path, name)
            if depth < len(names) and path in counts:
                path = (*path, counts[path])
        return path


def in_words(path: KeyPath) -> str:
    """A path for people: ("departure", 1, "along") is "departure 2, along"."""
    text = ""
    for before, part in zip((None, *path), path, strict=False):
        if isinstance(part, int):
            text += f" {part + 1}"
        else:
            text += f"{'' if before is None else ', ' if isinstance(before, int) else '.'}{part}"
    return text


def _parts(dotted: str) -> KeyPath:
    return tuple(part.strip("\"'") for part in _PART.findall(dotted))
