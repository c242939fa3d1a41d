"""Tables of a scenario that choose a departure or a procedure with its options, as the registries declare them.

A new departure or procedure gets its keys, their checks and their description for editors from its own class.
"""

from __future__ import annotations

import re
import types
from collections.abc import Iterable, Sequence
from dataclasses import MISSING, fields
from inspect import cleandoc
from typing import Annotated, Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

from pydantic import BaseModel, ConfigDict, Field, create_model

Model = TypeVar("Model", bound="Part")

FROM_FOCUS = frozenset({"row", "new"})
"""Options that are filled in from the focus, and not for a scenario to give."""


class Part(BaseModel):
    """A table of a scenario: no unknown keys, no conversions, no infinities."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


def option_model(
    base: type[Model], name: str, tag: str, value: str, cls: type, skip: Iterable[str] = (), **more: Any
) -> type[Model]:
    """A table whose key `tag` is `value` and whose other keys are the options of a registered class.

    Parameters
    ----------
    base : type
        Model to extend.
    name : str
        Of the new model.
    tag, value : str
        The key that chooses, and what it must say.
    cls : type
        A dataclass from a registry.
    skip : iterable of str
        Fields that are no options.
    **more
        Further keys, as pydantic takes them.
    """
    hints, told = get_type_hints(cls), parameter_texts(cls)
    hidden = FROM_FOCUS | set(skip)
    keys: dict[str, Any] = {tag: (Literal[value], Field(description=told.get("", "")))}
    for option in fields(cls):
        if option.name in hidden:
            continue
        default = None if option.default is MISSING or option.default == () else option.default
        keys[option.name] = (as_written(hints[option.name]), Field(default=default, description=told.get(option.name, "")))
    return create_model(name, __base__=base, **(keys | more))


def tagged_union(models: Sequence[type[Part]], tag: str) -> Any:
    """One of several tables, told apart by the value of a key."""
    if len(models) == 1:
        return models[0]
    return Annotated[Union[tuple(models)], Field(discriminator=tag)]  # noqa: UP007  # members are known at run time only


def given_options(part: Part, skip: Iterable[str]) -> dict[str, Any]:
    """The options that were written down, as the class takes them: lists become tuples."""
    skipped = set(skip)
    written = {name: getattr(part, name) for name in part.model_fields_set if name not in skipped}
    return {name: tuple(value) if isinstance(value, list) else value for name, value in written.items()}


def as_written(hint: Any) -> Any:
    """The type of an option as TOML can carry it: any sequence is a list, and a list of texts may be one text."""
    origin, members = get_origin(hint), get_args(hint)
    if origin in (Union, types.UnionType):
        return Union[tuple(as_written(member) for member in members if member is not type(None))]  # noqa: UP007  # members are known at run time only
    if isinstance(origin, type) and issubclass(origin, Sequence):
        item = members[0]
        return str | list[str] if item is str else list[item]  # type: ignore[valid-type]  # known at run time only
    return hint


def parameter_texts(cls: type) -> dict[str, str]:
    """Descriptions of parameters from a numpydoc docstring; the first line under the empty name."""
    found: dict[str, str] = {}
    for level in reversed(cls.__mro__):
        text = cleandoc(level.__dict__.get("__doc__") or "")
        section = re.search(r"^Parameters\n-+\n(.*?)(?=\n\n\w+\n-+\n|\Z)", text, re.MULTILINE | re.DOTALL)
        for names, told in re.findall(
            r"^(\w[\w, ]*) : [^\n]*\n((?:[ ]+[^\n]*\n?)+)", section.group(1) if section else "", re.MULTILINE
        ):
            found |= dict.fromkeys(names.split(", "), " ".join(told.split()))
        if level is cls:
            found[""] = text.partition("\n")[0]
    return found
