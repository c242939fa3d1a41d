"""Detectability: the chance that the usual diagnostic would show a departure at this n, and what is harmful and hard to see."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from scipy.interpolate import PchipInterpolator

from withstand.departures.base import Departure
from withstand.diagnostics.base import Tail
from withstand.diagnostics.critical import Critical
from withstand.diagnostics.for_departure import Chosen, statistic_for
from withstand.judgement.plausible import SeverityLaw
from withstand.judgement.residual_laws import Request, simulate
from withstand.study.design import Design, Floats

EVEN_CHANCE = 0.5
"""A departure that its diagnostic shows less often than this is called hard to see."""

ALPHA = 0.05
"""Size of the diagnostic test."""


@dataclass(frozen=True)
class Detectability:
    """Power of the residual statistic of a departure at one severity.

    Parameters
    ----------
    severity : float
        In the departure's unit.
    power, mc_se : float
        Share of data sets in which the test rejects, and its Monte Carlo standard error.
    statistic : str
        Which statistic.
    critical : Critical
        Its critical values, simulated under the ideal model on the same noise.
    """

    severity: float
    power: float
    mc_se: float
    statistic: str
    critical: Critical

    @property
    def hard_to_see(self) -> bool:
        """Whether the diagnostic misses it more often than not."""
        return self.power < EVEN_CHANCE


class Hazard(StrEnum):
    """Harm against detectability."""

    HIDDEN = "harmful and hard to see"
    VISIBLE = "harmful, but you would notice"
    FALSE_ALARM = "harmless, though you would notice"
    HARMLESS = "harmless and hard to see"


def hazard(harmful: bool, seen: Detectability) -> Hazard:
    """Place a departure at a severity on the map of harm against detectability."""
    if harmful:
        return Hazard.HIDDEN if seen.hard_to_see else Hazard.VISIBLE
    return Hazard.HARMLESS if seen.hard_to_see else Hazard.FALSE_ALARM


@dataclass(frozen=True, eq=False)
class Detector:
    """Power of a residual statistic over severity, read off its simulated law.

    Parameters
    ----------
    design : Design
        The rows.
    law : SeverityLaw
        The simulated statistic at each of its severities.
    critical : Critical
        Critical values at the neutral severity.
    power : ndarray of shape (S,)
        Share of rejections at each severity.
    """

    design: Design
    law: SeverityLaw
    critical: Critical
    power: Floats

    @classmethod
    def of(cls, design: Design, law: SeverityLaw) -> Detector:
        """Read the power off a law."""
        neutral = int(np.flatnonzero(law.span.severities == law.span.neutral)[0])
        critical = Critical.of(law.values[neutral], _tail(law.chosen), ALPHA)
        return cls(design, law, critical, np.asarray(critical.rejects(law.values).mean(axis=1)))

    def at(self, severity: float) -> Detectability | None:
        """The power at a severity, interpolated between those simulated; None beyond them."""
        span = self.law.span
        if not span.severities[0] <= severity <= span.severities[-1]:
            return None
        curve = PchipInterpolator(span.scale(span.severities), self.power)
        power = float(np.clip(curve(span.scale(np.array(severity))), 0.0, 1.0))
        mc_se = math.sqrt(power * (1.0 - power) / self.law.values.shape[1])
        return Detectability(severity, power, mc_se, self.law.chosen.title, self.critical)


def detectability(
    design: Design, departure: Departure, severities: list[float], *, seed: int, replicates: int | None = None
) -> list[Detectability] | None:
    """The power of a departure's residual statistic at some severities.

    Parameters
    ----------
    design : Design
        The rows.
    departure : Departure
        Applicable to the design.
    severities : list of float
        Where to ask, in the departure's unit.
    seed, replicates
        As in `withstand.judgement.plausible.severity_laws`.

    Returns
    -------
    list of Detectability or None
        In the order of the severities; None where no residual statistic answers to the departure.

    Notes
    -----
    Two-sided where the statistic has a sign, as the usual tests are; upper tail otherwise. The critical values come from the
    same simulation at the neutral severity, which is exact since the statistic is free of the error SD and the coefficients.
    """
    chosen = statistic_for(departure, design)
    if chosen is None:
        return None
    request = Request(departure, chosen, np.array([departure.neutral, *severities]))
    values = simulate(design, [request], seed=seed, replicates=replicates)[0]
    critical = Critical.of(values[0], _tail(chosen), ALPHA)
    result = []
    for severity, row in zip(severities, values[1:], strict=True):
        power, mc_se = critical.power(row)
        result.append(Detectability(severity, power, mc_se, chosen.title, critical))
    return result


def _tail(chosen: Chosen) -> Tail:
    """The side that counts; a mirrored statistic is kept as its absolute value."""
    return Tail.UPPER if chosen.mirrored else chosen.tail
