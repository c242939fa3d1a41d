"""What a departure is: one way the assumptions fail, with a ladder of severities, acting on one layer of the response.

    y = X beta + sigma (g + s u + o)

g is the mean layer, s the spread layer, the marginal law and the dependence of u are the law and dependence layers, o the
outlier layer. A departure registers itself here; the command line, the lists, the documentation table and the contract tests
read the registry.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass, fields
from enum import StrEnum
from functools import cached_property
from typing import ClassVar, Protocol

import numpy as np

from withstand.departures.law import Law
from withstand.errors import ScenarioError
from withstand.registry import Registry
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, Point


class Layer(StrEnum):
    """The part of the response a departure acts on."""

    MEAN = "mean"
    SPREAD = "spread"
    LAW = "law"
    DEPENDENCE = "dependence"
    OUTLIERS = "outliers"


class NoiseStream(StrEnum):
    """Independent sources of standard normal scores within one block."""

    ERRORS = "errors"
    GROUPS = "groups"
    OUTLIERS = "outliers"
    NEW = "new"


class Noise(Protocol):
    """The shared noise of one block, the same for every world."""

    width: int
    """Replicates B in the block."""

    def normal(self, stream: NoiseStream, rows: int) -> Floats:
        """Standard normal scores (rows, B); the same array at every call, not to be written to."""

    def generator(self, stream: NoiseStream) -> np.random.Generator:
        """A generator at the start of the stream, for draws that are not normal scores."""


class Dependence(Protocol):
    """A correlation among the rows with unit marginal variance, realised on one design."""

    def apply(self, scores: Floats, law: Law | None, noise: Noise, out: Floats) -> Floats:
        """Turn independent standard normal scores (n, B) into dependent errors (n, B), mean 0 and variance 1.

        `law` is that of the independent parts (innovations, group and row effects). Writes to and returns `out`, which may
        not be `scores`.
        """

    def correlate(self, M: Floats) -> Floats:
        """The correlation matrix times M (n, m), without forming it."""


class Outliers(Protocol):
    """Shifts of single rows, realised on one design."""

    def add(self, errors: Floats, noise: Noise) -> None:
        """Add the shifts, in error SDs, to `errors` (n, B) in place."""


def as_ladder(given: float | Sequence[float]) -> tuple[float, ...]:
    """One severity or several, as a tuple of floats.

    Raises
    ------
    ScenarioError
        If a value is not a number.
    """
    try:
        return tuple(float(value) for value in np.atleast_1d(np.asarray(given, dtype=np.float64)))
    except (TypeError, ValueError) as error:
        raise ScenarioError(
            f"severity {given!r} is not a number or a list of numbers",
            where="departure.severity",
            remedy="Give numbers, as in severity = [0.1, 0.2].",
        ) from error


@dataclass(frozen=True)
class Departure(ABC):
    """One way the assumptions fail.

    Parameters
    ----------
    severity : tuple of float
        The ladder, in the departure's unit, in increasing distance from `neutral`.
    """

    severity: float | Sequence[float] = ()

    kind: ClassVar[str]
    layer: ClassVar[Layer]
    title: ClassVar[str]
    unit: ClassVar[str]
    neutral: ClassVar[float]
    default_ladder: ClassVar[tuple[float, ...]]
    construction: ClassVar[str]
    source: ClassVar[str]

    def __post_init__(self) -> None:
        ladder = as_ladder(self.severity) or self.default_ladder
        object.__setattr__(self, "severity", ladder)
        for value in ladder:
            self.check(value)

    @property
    def ladder(self) -> tuple[float, ...]:
        """The severities to try."""
        return tuple(self.severity)  # type: ignore[arg-type]  # normalised in __post_init__

    @property
    def along(self) -> str:
        """The column it acts along, or empty."""
        return ""

    @cached_property
    def identity(self) -> str:
        """A text that names the departure with all its options but the severity; options left at their default are omitted."""
        options = [(option.name, getattr(self, option.name)) for option in fields(self) if option.name != "severity"]
        default = {option.name: option.default for option in fields(self)}
        told = ", ".join(f"{name}={value!r}" for name, value in options if value != default[name])
        return f"{self.kind}({told})" if told else self.kind

    @property
    def name(self) -> str:
        """As it is shown to people: kind and column."""
        return f"{self.kind} along {self.along}" if self.along else self.kind

    @abstractmethod
    def check(self, severity: float) -> None:
        """Raise ScenarioError if the severity is out of range."""

    def label(self, severity: float) -> str:
        """The severity as a person would say it."""
        return f"{self.unit} {severity:g}"

    def not_applicable(self, design: Design) -> str | None:
        """Why this departure makes no sense on the design, with the remedy; None if it does."""
        return None

    def note(self, design: Design) -> str:
        """What a reader should know about how it is built on this design; empty if there is nothing to say."""
        return ""

    def refuse(self, severity: float, range_text: str) -> ScenarioError:
        """The error for a severity out of range."""
        return ScenarioError(
            f"severity {severity:g} is out of range for '{self.kind}'",
            where="departure.severity",
            remedy=f"It is a {self.unit}; give {range_text}.",
        )


class MeanDeparture(Departure):
    """Acts on the mean: a shift of the true mean away from the model."""

    layer = Layer.MEAN

    @abstractmethod
    def shift(self, design: Design, severity: float) -> Floats:
        """G (n,), in error SDs."""

    @abstractmethod
    def shift_at(self, design: Design, point: Point, severity: float) -> float:
        """G at a point, in error SDs."""

    def target_shift(self, design: Design, focus: Focus, severity: float) -> Floats:
        """How far the true value of the focal quantity moves away from L beta, (k,), per error SD."""
        if focus.point is not None:
            return np.array([self.shift_at(design, focus.point, severity)])
        return np.zeros(focus.k)


class SpreadDeparture(Departure):
    """Acts on the spread: a profile of error SDs over the rows."""

    layer = Layer.SPREAD

    @abstractmethod
    def profile(self, design: Design, severity: float) -> Floats:
        """Relative error SD (n,), positive, in any scale: the world normalises it to mean square 1."""

    @abstractmethod
    def profile_at(self, design: Design, point: Point, severity: float) -> float:
        """The relative error SD at a point, in the scale of `profile`."""


class LawDeparture(Departure):
    """Acts on the marginal law of the errors."""

    layer = Layer.LAW

    @abstractmethod
    def law(self, severity: float) -> Law | None:
        """The law, mean 0 and variance 1; None where the severity is neutral (normal)."""


class DependenceDeparture(Departure):
    """Acts on the dependence between rows."""

    layer = Layer.DEPENDENCE

    @abstractmethod
    def dependence(self, design: Design, severity: float) -> Dependence | None:
        """The dependence on these rows; None where the severity is neutral (independent)."""


class OutlierDeparture(Departure):
    """Shifts single rows."""

    layer = Layer.OUTLIERS

    @abstractmethod
    def outliers(self, design: Design, severity: float) -> Outliers | None:
        """The shifts on these rows; None where the severity is neutral."""


REGISTRY = Registry(Departure, "departure", "departure.kind", attribute="kind")
"""Every departure by kind, in the order of registration."""

register = REGISTRY.register
departure_class = REGISTRY.find
