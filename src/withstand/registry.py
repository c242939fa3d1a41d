"""Names to classes: how departures, procedures and diagnostics become known, and are made from what a user writes."""

from __future__ import annotations

from dataclasses import fields
from typing import Any, Generic, TypeVar

from withstand.errors import ScenarioError, nearest

T = TypeVar("T")
Registered = TypeVar("Registered", bound=type)


class Registry(dict[str, type[T]], Generic[T]):
    """Classes by name, in the order of registration.

    Parameters
    ----------
    base : type
        What all of them are.
    noun : str
        What one of them is called, for messages.
    where : str
        The key under which a user names one.
    attribute : str
        The class attribute that holds the name.
    """

    def __init__(self, base: type[T], noun: str, where: str, attribute: str = "name") -> None:
        super().__init__()
        self._base, self._noun, self._where, self._attribute = base, noun, where, attribute

    def register(self, cls: Registered) -> Registered:
        """Class decorator: make a class known by its name."""
        self[getattr(cls, self._attribute)] = cls
        return cls

    def find(self, name: str) -> type[T]:
        """The class of that name.

        Raises
        ------
        ScenarioError
            If there is none; the message offers the nearest one.
        """
        if name not in self:
            raise ScenarioError(f"unknown {self._noun} '{name}'", where=self._where, remedy=nearest(name, self))
        return self[name]

    def make(self, spec: str | T, **options: Any) -> T:
        """One of them from its name and options; one that is made already is returned as it is.

        Raises
        ------
        ScenarioError
            If the name or an option is unknown; the message offers the nearest one.
        """
        if isinstance(spec, self._base):
            return spec
        cls = self.find(str(spec))
        known = [option.name for option in fields(cls)]  # type: ignore[arg-type]  # every registered class is a dataclass
        for option in options:
            if option not in known:
                remedy = nearest(option, known) if known else "It takes no options."
                raise ScenarioError(f"{self._noun} '{spec}' has no option '{option}'", where=self._where, remedy=remedy)
        return cls(**options)
