"""From the validator's list of errors to the one message a person can act on."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from pydantic import ValidationError

from withstand.errors import ScenarioError, nearest
from withstand.scenario.jsonschema import known_keys
from withstand.scenario.source import KeyPath, Source

_KINDS = {
    "string": "text in quotes",
    "float": "a number",
    "int": "a whole number",
    "bool": "true or false",
    "list": "a list in [ ]",
    "dict": "a table in { }",
    "model": "a table in { }",
    "model_attributes": "a table in { }",
}
"""What a value must be, by the validator's name for it."""

_TABLES = {"study", "study.plan.columns"}
"""Required keys that are tables of their own."""


def complaint(error: ValidationError, raw: Mapping[str, Any], source: Source) -> ScenarioError:
    """The first thing wrong with a scenario, and how many more there are.

    Parameters
    ----------
    error : ValidationError
        From validating `raw`.
    raw : mapping
        The values as they were read.
    source : Source
        Where they were read from.
    """
    found: dict[KeyPath, list[Any]] = {}
    for detail in error.errors(include_url=False):
        found.setdefault(_path(detail, raw), []).append(detail)
    # A value that fits none of several forms is reported once a form; the form that got furthest was meant.
    paths = [path for path in found if not any(other[: len(path)] == path and len(other) > len(path) for other in found)]
    path = _first(paths, found)
    what, remedy = _said(path, found[path], raw)
    more = sum(other != path and not _explained(other, path, found) for other in paths)
    if more:
        remedy += f" ({more} more {'key needs' if more == 1 else 'keys need'} mending.)"
    return ScenarioError(what, where=source.where(path), remedy=remedy)


def _path(detail: Any, raw: Any) -> KeyPath:
    """The location without the validator's own names for forms and tables, which are no keys of the file."""
    path: list[str | int] = []
    value = raw
    last = len(detail["loc"]) - 1
    for place, part in enumerate(detail["loc"]):
        if (isinstance(value, dict) and part in value) or (isinstance(value, list) and isinstance(part, int)):
            value = value[part]
            path.append(part)
        elif place == last and detail["type"] == "missing":
            path.append(part)
    return tuple(path)


def _first(paths: list[KeyPath], found: Mapping[KeyPath, list[Any]]) -> KeyPath:
    """The one to tell: an unknown key before a missing one of the same table, which it may be a misspelling of."""
    path = paths[0]
    if found[path][0]["type"] == "missing":
        for other in paths:
            if other[:-1] == path[:-1] and found[other][0]["type"] == "extra_forbidden":
                return other
    return path


def _explained(other: KeyPath, told: KeyPath, found: Mapping[KeyPath, list[Any]]) -> bool:
    """Whether a missing key is the one that was misspelt."""
    kinds = found[other][0]["type"], found[told][0]["type"]
    return other[:-1] == told[:-1] and kinds == ("missing", "extra_forbidden")


def _said(path: KeyPath, details: list[Any], raw: Mapping[str, Any]) -> tuple[str, str]:
    """What is wrong, and the remedy."""
    # A value of the right form with the wrong content says more than the forms that it has not.
    first = next((detail for detail in details if _form(detail["type"]) not in _KINDS), details[0])
    kind, given, context = first["type"], first["input"], first.get("ctx", {})
    key = _name(path)
    if kind == "extra_forbidden":
        return f"unknown key '{key}'", nearest(key, known_keys(path[:-1], raw))
    if kind == "missing":
        table = ".".join(map(str, path))
        return f"'{key}' is missing", f"Add [{table}]." if table in _TABLES else f"Add {key} = ..."
    if kind == "union_tag_not_found":
        tag = context["discriminator"].strip("'")
        return f"'{tag}' is missing", f'Add {tag} = "...".'
    if kind == "union_tag_invalid":
        tag, known = context["discriminator"].strip("'"), re.findall(r"'([^']*)'", context["expected_tags"])
        word = "departure" if tag == "kind" else "procedure"
        return f"unknown {word} '{context['tag']}'", nearest(str(context["tag"]), known)
    if path == ("departure",) and isinstance(given, dict):
        return "departure is one table, not a list of tables", "Write its header with double brackets: [[departure]]."
    if kind == "literal_error" and context["expected"] in ("True", "False"):
        also = [_KINDS[name] for name in dict.fromkeys(_form(detail["type"]) for detail in details) if name in _KINDS]
        return f"{key} is {_shown(given)}", f"It must be {' or '.join([*also, context['expected'].lower()])}."
    if kind == "literal_error":
        known = re.findall(r"'([^']*)'", context["expected"])
        if isinstance(given, str) and known:
            return f"{key} is '{given}'", nearest(given, known)
        return f"{key} is {_shown(given)}", f"It must be {context['expected']}."
    if kind == "value_error":
        what, _, remedy = str(context["error"]).partition("; ")
        return what, f"{remedy[:1].upper()}{remedy[1:]}." if remedy else ""
    if kind == "too_short":
        return f"{key} is {_shown(given)}", f"It must have {context['min_length']} or more."
    if kind == "too_long":
        return f"{key} is {_shown(given)}", f"It must have no more than {context['max_length']}."
    wanted = [_KINDS[name] for name in dict.fromkeys(_form(detail["type"]) for detail in details) if name in _KINDS]
    if wanted and _form(kind) in _KINDS:
        return f"{key} is {_shown(given)}", f"It must be {' or '.join(wanted)}."
    message = first["msg"].removeprefix("Input ")
    return f"{key} is {_shown(given)}", f"It {message.replace('should', 'must')}."


def _name(path: KeyPath) -> str:
    """What a value is called in a sentence."""
    if path and isinstance(path[-1], int):
        return f"entry {path[-1] + 1} of {_name(path[:-1])}"
    return str(path[-1]) if path else "the scenario"


def _form(kind: str) -> str:
    """'string_type' is a string, 'int_from_float' an int."""
    return re.sub(r"_(type|from_\w+|parsing)$", "", kind)


def _shown(value: Any) -> str:
    if isinstance(value, str):
        return f"the text '{value}'"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return f"the list {value}"
    return str(value)
