"""Departures and procedures as chosen in Python or in a scenario, checked against the study."""

from __future__ import annotations

from collections.abc import Sequence

from withstand.departures import Departure, departure_class
from withstand.departures.worst_fan import WorstFan
from withstand.errors import ScenarioError, nearest
from withstand.lab.plan import Axis
from withstand.procedures.base import Procedure, make_procedure
from withstand.study.study import Study

MOST = 160_000
"""Replicates a simulated cell gets at most, where nobody says."""

_BECAUSE = "not applicable, because "


def chosen_axes(given: Sequence[Departure | str | Sequence[Departure]], study: Study) -> tuple[Axis, ...]:
    """Axes from departures, kinds of departures and stacks of them.

    Parameters
    ----------
    given : sequence
        Of a stack the first departure varies and the others have one severity each.
    study : Study
        What the user has.

    Raises
    ------
    ScenarioError
        If something is no departure, makes no sense on the study, or a companion has several severities.
    """
    if isinstance(given, str | Departure):
        raise ScenarioError(
            f"departures is {given!r}, not a list", where="departures", remedy="Put it in brackets: departures=[...]."
        )
    axes = []
    for entry in given:
        stack = list(entry) if isinstance(entry, Sequence) and not isinstance(entry, str) else [entry]
        if not stack:
            raise ScenarioError("a stack is empty", where="departures", remedy="Leave it out.")
        first, *companions = (fitting(_made(one), study) for one in stack)
        axes.append(stackable(Axis(first, tuple((companion, one_severity(companion)) for companion in companions))))
    return tuple(axes)


def stackable(axis: Axis) -> Axis:
    """The axis itself.

    Raises
    ------
    ScenarioError
        If two of its departures cannot act at once.
    """
    axis.world(axis.departure.ladder[0])
    return axis


def _made(one: Departure | str) -> Departure:
    if isinstance(one, str):
        return departure_class(one)()
    if not isinstance(one, Departure):
        raise ScenarioError(
            f"{one!r} is no departure", where="departures", remedy="Give departures such as withstand.Skew(2), or their kinds."
        )
    return one


def one_severity(companion: Departure) -> float:
    """The severity of a departure that acts all the while.

    Raises
    ------
    ScenarioError
        If it has several.
    """
    if len(companion.ladder) != 1:
        raise ScenarioError(
            f"'{companion.kind}' acts all the while here, and has not one severity",
            remedy="Give one number, as in severity = 1.",
        )
    return companion.ladder[0]


def fitting(departure: Departure, study: Study) -> Departure:
    """The departure, bound to the focus where it needs to be.

    Raises
    ------
    ScenarioError
        If it makes no sense on the study's rows.
    """
    made = bound(departure, study)
    reason = made.not_applicable(study.design)
    if reason is not None:
        why, _, remedy = reason.removeprefix(_BECAUSE).partition("; ")
        raise ScenarioError(
            f"'{made.name}' makes no sense here: {why}",
            remedy=f"{remedy[:1].upper()}{remedy[1:].rstrip('.')}." if remedy else "Leave it out.",
        )
    return made


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


def chosen_procedures(given: Sequence[Procedure | str], study: Study) -> tuple[Procedure, ...]:
    """Procedures from their names or themselves.

    Raises
    ------
    ScenarioError
        If one is unknown or has no answer for the study.
    """
    if isinstance(given, str | Procedure):
        raise ScenarioError(
            f"procedures is {given!r}, not a list", where="procedures", remedy="Put it in brackets: procedures=[...]."
        )
    return tuple(answering(make_procedure(one), study) for one in given)


def answering(procedure: Procedure, study: Study) -> Procedure:
    """The procedure itself.

    Raises
    ------
    ScenarioError
        If it has an answer for no focal quantity of the study.
    """
    reasons = [procedure.not_applicable(study.design, focus) for focus in study.focus]
    if reasons[0] is not None and None not in reasons:
        raise ScenarioError(
            f"'{procedure.identity}' has no answer for this study: {reasons[0].removeprefix(_BECAUSE)}",
            remedy="Leave it out, or name another; `withstand list procedures` shows them.",
        )
    return procedure
