"""From the departures of a scenario to axes of a plan."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from withstand.departures import REGISTRY, Departure
from withstand.departures.worst_fan import WorstFan
from withstand.errors import InputError, ScenarioError, nearest
from withstand.lab.plan import Axis
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
        axes.append(Axis(_departure(entry, study, source, ("departure", place)), tuple(companions)))
    return tuple(axes)


def _departure(part: DeparturePart | CompanionPart, study: Study, source: Source, path: KeyPath) -> Departure:
    try:
        made = bound(make_departure(part.kind, given_options(part, skip=("kind", "companions"))), study)
        reason = made.not_applicable(study.design)
    except InputError as error:
        raise source.relocate(error, path) from error
    if reason is not None:
        why, _, remedy = reason.removeprefix("not applicable, because ").partition("; ")
        raise ScenarioError(
            f"'{made.name}' makes no sense here: {why}",
            where=source.where(path),
            remedy=f"{remedy[:1].upper()}{remedy[1:]}." if remedy else "Leave it out.",
        )
    return made


def make_departure(kind: str, options: dict[str, Any]) -> Departure:
    """A departure of a known kind from its options."""
    return REGISTRY[kind](**options)


def bound(departure: Departure, study: Study) -> Departure:
    """The departure with what it needs to know of the focus.

    Raises
    ------
    ScenarioError
        If it names a focal quantity that the study has not.
    """
    if not isinstance(departure, WorstFan) or departure.row is not None:
        return departure
    known = {focus.name: focus for focus in study.focus if focus.scalar}
    if not known:
        raise ScenarioError(
            "'worst-fan' acts against one number, and the focus has joint terms only",
            where="departure.against",
            remedy="Add a coefficient, a contrast, a mean or a new response to the focus.",
        )
    against = departure.against or next(iter(known))
    if against not in known:
        raise ScenarioError(
            f"'worst-fan' acts against '{against}', which is no focal quantity",
            where="departure.against",
            remedy=nearest(against, known),
        )
    return departure.for_focus(known[against])
