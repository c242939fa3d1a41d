"""Severities as people say them, with as many digits as a person would."""

from __future__ import annotations

from collections.abc import Mapping

from withstand.departures.shape import HeavyTails
from withstand.judgement.headline import NOTHING, round_for_speech
from withstand.lab.plan import Axis

_DIGITS = 3


def spoken(axis: Axis, severity: float) -> str:
    """A severity as a person would say it, to three digits: those of the degrees of freedom for heavy tails.

    Where the assumption holds, nothing is wrong, unless companions act.
    """
    departure = axis.departure
    if severity == departure.neutral and not axis.companions:
        return NOTHING
    if isinstance(departure, HeavyTails) and severity > 0.0:
        return departure.label(1.0 / round_for_speech(1.0 / severity, _DIGITS))
    return departure.label(round_for_speech(severity, _DIGITS))


def shown(axis: Axis, roles: Mapping[str, str]) -> str:
    """An axis as it is shown to people: 'clusters by charge', 'fan along fitted with skew skewness 1'.

    Parameters
    ----------
    axis : Axis
        Which.
    roles : mapping of str to str
        Names of the study's columns of order and groups, by role.
    """
    departure = axis.departure
    told = departure.name
    if departure.kind == "clusters" and roles.get("groups"):
        told = f"{told} by {roles['groups']}"
    elif departure.kind == "serial" and roles.get("order"):
        told = f"{told} along {roles['order']}"
    return f"{told} with {axis.stack}" if axis.stack else told
