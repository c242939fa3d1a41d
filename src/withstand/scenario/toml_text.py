"""Values as TOML text."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping, Sequence
from typing import Any


def toml_value(value: Any) -> str:
    """One value in TOML, tables inline.

    Raises
    ------
    TypeError
        If TOML has no such value.
    """
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        # JSON's escapes are TOML's, but TOML wants DEL escaped and knows no surrogate pairs.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else {math.inf: "inf", -math.inf: "-inf"}.get(value, "nan")
    if isinstance(value, Mapping):
        inside = ", ".join(f"{toml_key(str(key))} = {toml_value(item)}" for key, item in value.items())
        return f"{{ {inside} }}" if inside else "{}"
    if isinstance(value, Sequence):
        return f"[{', '.join(toml_value(item) for item in value)}]"
    raise TypeError(f"TOML has no {type(value).__name__}")


def toml_key(name: str) -> str:
    """A key, quoted where it must be."""
    return name if re.fullmatch(r"[A-Za-z0-9_-]+", name) else toml_value(name)


def toml_document(values: Mapping[str, Any]) -> str:
    """A whole document: plain keys first, then tables, then lists of tables."""
    plain = {key: value for key, value in values.items() if not isinstance(value, Mapping) and not _tables(value)}
    lines = [f"{toml_key(key)} = {toml_value(value)}" for key, value in plain.items()]
    for key, value in values.items():
        if isinstance(value, Mapping):
            lines += ["", f"[{toml_key(key)}]", *(f"{toml_key(name)} = {toml_value(item)}" for name, item in value.items())]
        elif _tables(value):
            for table in value:
                lines += [
                    "",
                    f"[[{toml_key(key)}]]",
                    *(f"{toml_key(name)} = {toml_value(item)}" for name, item in table.items()),
                ]
    return "\n".join(lines).lstrip("\n") + "\n"


def _tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(isinstance(item, Mapping) for item in value)
