"""What the residuals say of each axis, and the severities that have to be feared because of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from withstand.diagnostics.base import observed
from withstand.judgement.detectability import Detectability, Detector, detectability
from withstand.judgement.plausible import Plausible, SeverityLaw, severity_laws
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis

_DIGITS = 3
"""Ends of plausible ranges are judged at so many significant digits, rounded outwards."""


@dataclass(frozen=True, eq=False)
class Residuals:
    """The residual statistic of one axis.

    Parameters
    ----------
    axis : Axis
        Its companions are taken to act as stated.
    law : SeverityLaw
        The law of its statistic over severities.
    plausible : Plausible or None
        What the user's own residuals allow; None for a plan, which has none.
    detector : Detector or None
        Its power; None for an axis with companions, which the statistic answers to as well.
    seed : int
        Of the run.
    """

    axis: Axis
    law: SeverityLaw
    plausible: Plausible | None
    detector: Detector | None
    seed: int

    def seen_at(self, severity: float) -> Detectability | None:
        """The chance that the statistic shows the departure at a severity; simulated anew where the law does not reach."""
        if self.detector is None:
            return None
        found = self.detector.at(severity)
        if found is None:
            again = detectability(self.detector.design, self.axis.departure, [severity], seed=self.seed)
            found = None if again is None else again[0]
        return found


def residuals_of(grid: Grid) -> dict[str, Residuals]:
    """What the residuals say of every axis.

    Parameters
    ----------
    grid : Grid
        The plan on its study.

    Returns
    -------
    dict of str to Residuals
        By identity of the axis; axes that no residual statistic answers to are left out.
    """
    axes, design, response = grid.possible, grid.study.design, grid.study.response
    companions = [axis.companions for axis in axes]
    laws = severity_laws(design, [axis.departure for axis in axes], seed=grid.plan.seed, companions=companions)
    sample = None if response is None else observed(design, response)
    found = {}
    for axis, law in zip(axes, laws, strict=True):
        if law is not None:
            plausible = None if sample is None else law.plausible(float(law.chosen.statistic(sample)[0]))
            detector = None if axis.companions else Detector.of(design, law)
            found[axis.identity] = Residuals(axis, law, plausible, detector, grid.plan.seed)
    return found


def feared(axis: Axis, residuals: Residuals | None) -> tuple[float, ...]:
    """Severities at which harm is looked at; neutral is left out where it is the baseline, without companions.

    The ends of the plausible range and the rungs of the ladder within it; the whole ladder where the residuals do not say.
    """
    ladder, neutral = axis.departure.ladder, axis.departure.neutral
    plausible = None if residuals is None else residuals.plausible
    if plausible is None:
        return ladder
    ends = plausible.worst_case(ladder, neutral)
    outward = {_outwards(ends[0], down=True), *ends[1:-1], _outwards(ends[-1], down=False)}
    inside = {severity for severity in ladder if plausible.holds(severity)}
    return tuple(sorted(outward | inside if axis.companions else (outward | inside) - {neutral}))


def points_of(axes: Sequence[Axis], residuals: dict[str, Residuals]) -> list[tuple[Axis, float]]:
    """Every axis with its ladder and the severities to be feared besides, in increasing order.

    A stack is visited at neutral as well, where its companions act alone.
    """
    points = []
    for axis in axes:
        severities = {*axis.departure.ladder, *feared(axis, residuals.get(axis.identity))}
        severities |= {axis.departure.neutral} if axis.companions else set()
        points += [(axis, severity) for severity in sorted(severities)]
    return points


def _outwards(severity: float, *, down: bool) -> float:
    """A severity rounded down or up to a few significant digits."""
    if severity == 0.0 or not math.isfinite(severity):
        return severity
    places = _DIGITS - 1 - math.floor(math.log10(abs(severity)))
    scaled = severity * 10.0**places
    whole = round(scaled)
    if abs(scaled - whole) > 1e-9 * abs(scaled):
        whole = math.floor(scaled) if down else math.ceil(scaled)
    return float(f"{whole}e{-places}")
