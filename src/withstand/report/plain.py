"""Values as JSON can carry them and give them back: numbers, text, lists, mappings, and the floats JSON lacks."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence, Set
from typing import Any

import numpy as np

_MARK = "not-a-json-number"


def plain(value: Any) -> Any:
    """The value with mappings as dict with text keys, sequences and arrays as list, NumPy scalars as Python's own.

    Raises
    ------
    TypeError
        If there is something else in it.
    """
    if value is None or type(value) in (str, bool, int, float):
        return value
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, Set):
        return sorted(plain(item) for item in value)
    if isinstance(value, Sequence) and not isinstance(value, (str, bytes)):
        return [plain(item) for item in value]
    if isinstance(value, str):
        return str(value)
    raise TypeError(f"a {type(value).__name__} ({value!r}) has no plain form to be stored in")


def to_json(value: Any) -> str:
    """Standard JSON text; a float that is not finite is stored as {"not-a-json-number": "nan"}."""
    return json.dumps(_marked(plain(value)), ensure_ascii=False, indent=2, allow_nan=False) + "\n"


def from_json(text: str) -> Any:
    """What `to_json` was given, in plain form."""
    return json.loads(text, object_hook=_unmarked)


def _marked(value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value):
        return {_MARK: repr(value)}
    if isinstance(value, dict):
        return {key: _marked(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_marked(item) for item in value]
    return value


def _unmarked(found: dict[str, Any]) -> Any:
    return float(found[_MARK]) if found.keys() == {_MARK} else found
