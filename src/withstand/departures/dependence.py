"""The dependence layer: errors of neighbouring rows, or of rows in one group, go together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.base import DependenceDeparture, register
from withstand.departures.chain import AR1, Series
from withstand.departures.exchangeable import Exchangeable
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats

_WHOLE = 1e-6
"""Gaps count as whole numbers of steps within this."""


@register
@dataclass(frozen=True)
class Serial(DependenceDeparture):
    """Errors follow a first-order autoregression along the order column.

    Parameters
    ----------
    severity : float or sequence of float
        Correlation rho of errors one step apart, between -1 and 1.
    within : {'groups'}, optional
        A series of its own in each group, instead of one through all rows.
    step : float, optional
        Length of one step, in the unit of the order column. Left out: the smallest gap where all gaps are whole multiples
        of it, else the median gap (and `note` says so).

    Notes
    -----
    Errors `gap` steps apart have correlation rho^gap. A negative rho needs whole-number gaps. A non-normal law is that of the
    innovations.
    """

    within: str | None = None
    step: float | None = None

    kind = "serial"
    title = "errors correlated along the order"
    unit = "correlation of errors one step apart"
    neutral = 0.0
    default_ladder = (0.1, 0.2, 0.4, 0.6)
    construction = "u_1 = e_1, u_t = rho^gap u_(t-1) + sqrt(1 - rho^(2 gap)) e_t, stationary"
    source = "first-order autoregression, AR(1); common practice"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.within not in (None, "groups"):
            raise ScenarioError(
                f"'serial' within '{self.within}'", where="departure.within", remedy='Use within = "groups", or leave it out.'
            )
        if self.step is not None and not 0.0 < self.step < np.inf:
            raise ScenarioError(
                f"step {self.step:g} of 'serial' is not a length",
                where="departure.step",
                remedy="Give a positive number in the unit of the order column, or leave it out.",
            )

    @property
    def name(self) -> str:
        """See Departure."""
        return "serial within groups" if self.within else self.kind

    def check(self, severity: float) -> None:
        """See Departure."""
        if not -1.0 < severity < 1.0:
            raise self.refuse(severity, "a number between -1 and 1, both excluded")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"rho {severity:g}"

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        obstacle = self._obstacle(design, min(self.ladder))
        return f"not applicable, because {obstacle[0]}; {obstacle[1]}" if obstacle else None

    def note(self, design: Design) -> str:
        """See Departure."""
        gaps = self._series(design).inner / self.step_length(design)
        if np.abs(gaps - 1.0).max() <= _WHOLE:
            return ""
        regular = "whole" if _whole(gaps) else "unequal"
        return (
            f"the gaps of the order column are {gaps.min():.4g} to {gaps.max():.4g} steps of {self.step_length(design):.4g} "
            f"({regular} numbers); errors that many steps apart have correlation rho to that power"
        )

    def step_length(self, design: Design) -> float:
        """Length of one step, in the unit of the order column."""
        if self.step is not None:
            return self.step
        gaps = self._series(design).inner
        smallest = float(gaps.min())
        return smallest if _whole(gaps / smallest) else float(np.median(gaps))

    def dependence(self, design: Design, severity: float) -> AR1 | None:
        """See DependenceDeparture."""
        if severity == self.neutral:
            return None
        obstacle = self._obstacle(design, severity)
        if obstacle:
            raise ScenarioError(f"'serial' cannot be built: {obstacle[0]}", where="study.order", remedy=f"{obstacle[1]}.")
        series = self._series(design)
        steps = series.gaps / self.step_length(design)
        links = np.power(severity, np.rint(steps) if severity < 0.0 else steps)
        return AR1(np.where(series.previous >= 0, links, 0.0), series.previous)

    def _series(self, design: Design) -> Series:
        if design.order is None:
            raise ScenarioError(
                "'serial' needs an order column, and the study names none", where="study.order", remedy='Add order = "...".'
            )
        return Series.of(design.order, design.groups if self.within else None)

    def _obstacle(self, design: Design, severity: float) -> tuple[str, str] | None:
        """Why there is no such autoregression on these rows, and what to do about it."""
        if design.order is None:
            return "the study names no order column", 'name the column that gives the time order: order = "..."'
        if self.within and design.groups is None:
            return "the study names no groups to keep the series in", 'name the column: groups = "..."'
        gaps = self._series(design).inner
        if gaps.size == 0:
            return "every group has one row, and a series needs two", "leave out within"
        if gaps.min() <= 0.0:
            row = int(np.flatnonzero((self._series(design).previous >= 0) & (self._series(design).gaps <= 0.0))[0])
            tie = f"two rows share the position {design.order[row]:g} in the order column, which would give them the same error"
            return tie, 'break the ties, or keep the series apart with groups and within = "groups"'
        if gaps.max() < _WHOLE * self.step_length(design):
            return (
                f"one step of {self.step_length(design):g} is more than a million times the longest gap in the order column, "
                "which would give all rows the same error",
                "give a step of the size of the gaps, or leave it out",
            )
        if severity < 0.0 and not _whole(gaps / self.step_length(design)):
            return (
                f"the negative correlation {severity:g} has no power at gaps that are not whole numbers of steps",
                "use positive correlations, or an order column with regular steps",
            )
        return None


@register
@dataclass(frozen=True)
class Clusters(DependenceDeparture):
    """Rows of one group share part of their error.

    Parameters
    ----------
    severity : float or sequence of float
        Intraclass correlation, from 0 to below 1: the share of the error variance that a group has in common.

    Notes
    -----
    A non-normal law is that of the group effects and of the row effects alike.
    """

    kind = "clusters"
    title = "errors shared within groups"
    unit = "correlation of errors within a group"
    neutral = 0.0
    default_ladder = (0.05, 0.1, 0.2, 0.4)
    construction = "u = sqrt(icc) v_group + sqrt(1 - icc) e"
    source = "random group effects; Moulton (1986)"

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity < 1.0:
            raise self.refuse(severity, "a number from 0 to below 1")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"icc {severity:g}"

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        if design.groups is None:
            return 'not applicable, because the study names no groups; name the column: groups = "..."'
        if design.group_count == 1:
            return "not applicable, because all rows are in one group; name a column with two groups or more"
        if design.group_count == design.n:
            return "not applicable, because every group has one row; name a column whose groups have several"
        return None

    def dependence(self, design: Design, severity: float) -> Exchangeable | None:
        """See DependenceDeparture."""
        if severity == self.neutral:
            return None
        if design.groups is None:
            raise ScenarioError(
                "'clusters' needs groups, and the study names none", where="study.groups", remedy='Add groups = "...".'
            )
        return Exchangeable(severity, design.groups)


def _whole(steps: Floats) -> bool:
    return bool(np.all(np.abs(steps - np.rint(steps)) <= _WHOLE * np.maximum(1.0, steps)) and steps.min() > 0.5)
