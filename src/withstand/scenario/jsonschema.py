"""The JSON Schema of scenario files, for editors and for messages about unknown keys."""

from __future__ import annotations

from typing import Any

from withstand.scenario.schema import Scenario
from withstand.scenario.source import KeyPath


def json_schema() -> dict[str, Any]:
    """JSON Schema (2020-12) of a scenario file."""
    schema = Scenario.model_json_schema(by_alias=True)
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **schema}


def known_keys(path: KeyPath, raw: Any) -> list[str]:
    """Keys that the table at a path may have.

    Parameters
    ----------
    path : tuple
        Of a table.
    raw : mapping
        The values as they were read; a departure's kind decides on its keys.
    """
    schema = json_schema()
    definitions = schema["$defs"]
    node, value = schema, raw
    for part in path:
        value = value[part]
        children = [_child(form, part) for form in _forms(node, definitions)]
        node = {"anyOf": [child for child in children if child is not None]}
        node = _chosen(node, value, definitions)
    return [key for form in _forms(node, definitions) for key in form.get("properties", {})]


def _forms(node: dict[str, Any], definitions: dict[str, Any]) -> list[dict[str, Any]]:
    """Every form a value may take, references followed."""
    if "$ref" in node:
        return _forms(definitions[node["$ref"].rpartition("/")[2]], definitions)
    members = node.get("anyOf") or node.get("oneOf")
    if members and "properties" not in node:
        return [form for member in members for form in _forms(member, definitions)]
    return [node]


def _child(form: dict[str, Any], part: str | int) -> dict[str, Any] | None:
    if isinstance(part, int):
        return form.get("items")
    inside = form.get("properties", {}).get(part)
    if inside is not None:
        return dict(inside)
    beyond = form.get("additionalProperties")
    return dict(beyond) if isinstance(beyond, dict) else None


def _chosen(node: dict[str, Any], value: Any, definitions: dict[str, Any]) -> dict[str, Any]:
    """The forms whose constant keys agree with the value, where it has any of them."""
    if not isinstance(value, dict):
        return node
    fitting = [
        form
        for form in _forms(node, definitions)
        if all(
            value.get(key, told["const"]) == told["const"]
            for key, told in form.get("properties", {}).items()
            if "const" in told
        )
    ]
    return {"anyOf": fitting}
