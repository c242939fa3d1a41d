"""Which residual statistic answers to which departure.

All are free of the error SD and the coefficients. Spread departures share one form, Koenker's signed score along the log of
their own profile: along z for a fan, along the distance from the middle for a bowtie, along log z for power-spread, along the
noisy rows for level-spread. A positive value therefore always points in the departure's own direction. Where the departure acts
along the fitted mean, that is the reference fitted mean, held fixed: with refitted values the statistic would depend on the
coefficients, and its law could not be simulated without knowing them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.base import Departure, MeanDeparture, OutlierDeparture, SpreadDeparture
from withstand.departures.dependence import Clusters, Serial
from withstand.departures.shape import Skew
from withstand.diagnostics.base import Diagnostic, Statistic, Tail
from withstand.diagnostics.groups import GroupF
from withstand.diagnostics.influence import LargestStudentised
from withstand.diagnostics.mean import added_column_t
from withstand.diagnostics.serial import LagOne
from withstand.diagnostics.shape import Kurtosis, Skewness
from withstand.diagnostics.spread import score_along
from withstand.study.design import Design, Floats

_UNIT_RATIO = 2.0
"""Severity at which a spread profile is read; the score is the same at any other, but for worst-fan, whose rows may change."""


@dataclass(frozen=True, eq=False)
class Chosen:
    """The statistic for a departure on one design.

    Parameters
    ----------
    title : str
        As shown to people.
    statistic : callable
        Maps a Sample to values (B,).
    tail : Tail
        Which values count against 'nothing is wrong'.
    signed : bool
        Whether the sign of the value is that of the departure (its direction, or that of the correlation).
    mirrored : bool
        Whether the departure is as likely to be found mirrored (a hollow for a hump, skewed to the left), so that the absolute
        value is what its severity answers to.
    """

    title: str
    statistic: Statistic
    tail: Tail
    signed: bool = False
    mirrored: bool = False


def statistic_for(departure: Departure, design: Design) -> Chosen | None:
    """The residual statistic that answers to a departure; None if no residual statistic does.

    Parameters
    ----------
    departure : Departure
        Applicable to the design.
    design : Design
        The rows.
    """
    match departure:
        case MeanDeparture():
            return _mean(departure, design)
        case SpreadDeparture():
            z = np.log(departure.profile(design, _UNIT_RATIO))
            if np.ptp(z) == 0.0:
                return None
            return Chosen("Koenker's score, signed", score_along(design, z), Tail.BOTH, signed=True)
        case Serial():
            return _of(LagOne(within=departure.within is not None), design, signed=True)
        case Clusters():
            return _of(GroupF(), design)
        case Skew():
            return _of(Skewness(), design, mirrored=True)
        case OutlierDeparture():
            return _of(LargestStudentised(), design)
    # Contaminated normal, Student's t, and any law whose departure from normal is not in its skewness.
    return _of(Kurtosis(), design) if departure.layer == "law" else None


def _of(diagnostic: Diagnostic, design: Design, *, signed: bool = False, mirrored: bool = False) -> Chosen | None:
    if diagnostic.not_applicable(design) is not None:
        return None
    return Chosen(diagnostic.title, diagnostic.prepare(design), diagnostic.tail, signed, mirrored)


def _mean(departure: MeanDeparture, design: Design) -> Chosen | None:
    column: Floats = departure.shift(design, 1.0)
    beyond = column - design.Q @ (design.Q.T @ column)
    if design.df < 2 or np.linalg.norm(beyond) <= 1e-8 * np.linalg.norm(column):
        return None
    return Chosen("t of the added curved term", added_column_t(design, column), Tail.BOTH, mirrored=True)
