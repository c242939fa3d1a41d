"""From the departures of a scenario to axes of a plan."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from withstand.departures import REGISTRY, Departure
from withstand.errors import InputError, ScenarioError
from withstand.lab.plan import Axis
from withstand.scenario.choices import fitting, stackable
from withstand.scenario.options import given_options
from withstand.scenario.schema import CompanionPart, DeparturePart
from withstand.scenario.source import KeyPath, Source
from withstand.study.study import Study


def axes_of(entries: Sequence[DeparturePart], study: Study, source: Source) -> tuple[Axis, ...]:
    """The departures of a scenario, bound to the study.

    Raises
    ------
    ScenarioError
        If one cannot be made or makes no sense on the study's rows; the message says which.
    """
    axes = []
    for place, entry in enumerate(entries):
        companions = []
        for turn, part in enumerate(entry.companions):
            path: KeyPath = ("departure", place, "with", turn)
            companion = _departure(part, study, source, path)
            if len(companion.ladder) != 1 or not {"severity", "df"} & part.model_fields_set:
                raise ScenarioError(
                    f"'{part.kind}' acts all the while here, and has not one severity",
                    where=source.where(path),
                    remedy="Give one number, as in severity = 1.",
                )
            companions.append((companion, companion.ladder[0]))
        axis = Axis(_departure(entry, study, source, ("departure", place)), tuple(companions))
        try:
            axes.append(stackable(axis))
        except InputError as error:
            raise source.relocate(error, ("departure", place)) from error
    return tuple(axes)


def _departure(part: DeparturePart | CompanionPart, study: Study, source: Source, path: KeyPath) -> Departure:
    try:
        return fitting(make_departure(part.kind, given_options(part, skip=("kind", "companions"))), study)
    except InputError as error:
        raise source.relocate(error, path) from error


def make_departure(kind: str, options: dict[str, Any]) -> Departure:
    """A departure of a known kind from its options."""
    return REGISTRY[kind](**options)
