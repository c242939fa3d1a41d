"""Findings: what was compared with what, and who set the bound. Numbers are unrounded; rounding is the report's."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from withstand.measures.compute import COUNTED

_NOTHING = 1e-9
"""An exact value within this of the nominal one differs from it by rounding."""


class Kind(StrEnum):
    """How a measure stands against its tolerance."""

    WITHIN = "within"
    OUTSIDE = "outside"
    OPEN = "open"
    """The Monte Carlo interval still holds a bound."""
    WASTEFUL = "wasteful"
    """Within, on the costly side: coverage above the band or size below it. A cost, not a fault."""


@dataclass(frozen=True)
class Aspect:
    """One measure with what is accepted of it.

    Parameters
    ----------
    measure : str
        As in the tables of measures.
    low, high : float
        Accepted range, in the unit of the measure; infinite where a side is free.
    thrifty_low, thrifty_high : float
        Range outside which an accepted value is wasteful; infinite where there is no such side.
    nominal : float
        The value promised when nothing is wrong.
    set_by : str
        Who set the tolerance.
    """

    measure: str
    low: float
    high: float
    thrifty_low: float
    thrifty_high: float
    nominal: float
    set_by: str

    def margin(self, value: float) -> float:
        """How far a value is inside the accepted range, as a share of what the tolerance allows; negative outside.

        1 at the nominal value when that is the centre of what is allowed, 0 at the bound.
        """
        inside = min(value - self.low, self.high - value)
        return inside / self._allowance

    def bound(self, value: float) -> float:
        """The bound of the accepted range that a value is nearer to."""
        return self.low if value - self.low <= self.high - value else self.high

    def stand(self, low: float, high: float) -> Kind:
        """How an interval [low, high] for the measure stands."""
        if high < self.low or low > self.high:
            return Kind.OUTSIDE
        if low < self.low or high > self.high:
            return Kind.OPEN
        return Kind.WASTEFUL if high < self.thrifty_low or low > self.thrifty_high else Kind.WITHIN

    @property
    def _allowance(self) -> float:
        allowed = min(abs(self.nominal - self.low), abs(self.high - self.nominal))
        # A user's own range may have the nominal value on its edge; margins are then in units of the measure.
        return allowed if allowed > 0.0 else 1.0


@dataclass(frozen=True)
class Finding:
    """One measure of one cell compared with its tolerance.

    Parameters
    ----------
    kind : Kind
        How it stands.
    measure : str
        Which measure.
    value : float
        Estimate or exact value, in the unit of the measure.
    low, high : float
        The interval the decision rests on, at the level the look may spend; the value itself where it is exact.
    bound : float
        The nearer bound of the accepted range.
    margin : float
        Distance inside the accepted range, as a share of what the tolerance allows; negative outside.
    nominal : float
        The value promised when nothing is wrong.
    set_by : str
        Who set the tolerance.
    """

    kind: Kind
    measure: str
    value: float
    low: float
    high: float
    bound: float
    margin: float
    nominal: float
    set_by: str

    @classmethod
    def of(cls, aspect: Aspect, value: float, low: float, high: float) -> Finding:
        """Compare an interval with what is accepted."""
        return cls(
            kind=aspect.stand(low, high),
            measure=aspect.measure,
            value=value,
            low=low,
            high=high,
            bound=aspect.bound(value),
            margin=aspect.margin(value),
            nominal=aspect.nominal,
            set_by=aspect.set_by,
        )

    @property
    def spare(self) -> float:
        """The share of what the tolerance allows that is left: 0 at the bound, 1 at the nominal value and on its harmless side.

        A bias that cannot be told from none has spent nothing.
        """
        told = self.measure in COUNTED or not self.low - _NOTHING <= self.nominal <= self.high + _NOTHING
        return min(self.margin, 1.0) if told else 1.0
