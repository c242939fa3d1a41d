"""What to worry about first: departures in the order of the harm they do within what the residuals allow."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from withstand.judgement.limit import Limit
from withstand.judgement.plausible import Plausible
from withstand.judgement.tipping import Tipping
from withstand.judgement.verdict import Judgement, Verdict


@dataclass(frozen=True)
class Spot:
    """A procedure under a departure at one severity.

    Parameters
    ----------
    severity : float
        In the departure's unit.
    judgement : Judgement
        The verdict with its findings.
    share : float
        Coverage; the complement of the size for procedures that only test.
    shift : float
        Change of that share from the baseline, negative where something is lost.
    exact : bool
        Whether the share is exact.
    mc_se : float
        Monte Carlo standard error of the share.
    """

    severity: float
    judgement: Judgement
    share: float
    shift: float
    exact: bool
    mc_se: float = 0.0


@dataclass(frozen=True, eq=False)
class Threat:
    """One departure against one procedure and focal quantity.

    Parameters
    ----------
    departure : str
        As shown to people, column and companions included.
    procedure, focus : str
        Names.
    worst : Spot
        The most harmful severity within what the residuals allow; of the ladder, where they do not say.
    tipping : Tipping
        Where the verdict turns.
    plausible : Plausible or None
        What the residuals allow.
    limit : Limit or None
        What more rows do.
    holding : str
        The cheapest procedure that holds at the worst severity; empty where none does.
    premium : float
        Mean width of its interval over that of this procedure when nothing is wrong, minus 1; nan where unknown.
    """

    departure: str
    procedure: str
    focus: str
    worst: Spot
    tipping: Tipping
    plausible: Plausible | None
    limit: Limit | None
    holding: str
    premium: float


def worst_of(spots: Iterable[Spot], neutral: float = 0.0) -> Spot:
    """The spot to worry about most: one that gives before one that does not, then the one that loses most.

    Of spots that differ by no more than simulation noise, the farthest from neutral: it speaks for those before it.

    Parameters
    ----------
    spots : iterable of Spot
        At least one: the severities to be feared, the plausible ones or the ladder.
    neutral : float
        The severity at which the assumption holds.
    """
    known = list(spots)
    worst = min(known, key=_badness)
    alike = [
        spot
        for spot in known
        if spot.judgement.verdict is worst.judgement.verdict
        and abs(spot.share - worst.share) <= _NOISE * math.hypot(spot.mc_se, worst.mc_se)
    ]
    return max(alike, key=lambda spot: abs(spot.severity - neutral)) if not worst.exact else worst


_NOISE = 2.0
"""Standard errors of a difference that are taken for noise."""


_ORDER = {Verdict.GIVES: 0, Verdict.UNSETTLED: 1, Verdict.HOLDS: 2}


def _badness(spot: Spot) -> tuple[int, float, float]:
    """A bias may put a spot out of tolerance while its coverage is above nominal; the verdict therefore comes first."""
    return _ORDER[spot.judgement.verdict], min(spot.shift, 0.0), spot.judgement.margin


def ranked(threats: Iterable[Threat]) -> list[Threat]:
    """Threats in the order of what to worry about first: those that give, then most coverage lost, then smallest margin."""
    return sorted(threats, key=lambda t: (*_badness(t.worst), t.departure))


@dataclass(frozen=True)
class Candidate:
    """A procedure that could be used instead.

    Parameters
    ----------
    verdicts : sequence of Verdict
        At every severity it has to stand.
    width : float
        Mean width of its interval when nothing is wrong; nan where it has none.
    """

    verdicts: Sequence[Verdict]
    width: float

    @property
    def holds(self) -> bool:
        """Whether it holds everywhere asked."""
        return bool(self.verdicts) and all(verdict is Verdict.HOLDS for verdict in self.verdicts)


def cheapest_holding(candidates: Mapping[str, Candidate], reference: str) -> tuple[str, float]:
    """The procedure that holds everywhere asked with the narrowest interval when nothing is wrong.

    Parameters
    ----------
    candidates : mapping of str to Candidate
        By name, in the user's order, which decides between equals.
    reference : str
        The procedure whose width is the measure.

    Returns
    -------
    name : str
        Empty where none holds.
    premium : float
        Its width over that of the reference, minus 1; nan where one of them has no width.
    """
    holding = [name for name, candidate in candidates.items() if candidate.holds]
    if not holding:
        return "", math.nan
    # A procedure without an interval is no cheaper than one with; it comes last.
    name = min(holding, key=lambda h: math.inf if math.isnan(candidates[h].width) else candidates[h].width)
    base = candidates[reference].width if reference in candidates else math.nan
    return name, candidates[name].width / base - 1.0 if base > 0.0 else math.nan
