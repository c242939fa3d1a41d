"""The answer in words for one focal quantity: what holds, what gives first, how far, what to do instead, at what premium.

Numbers are rounded here because sentences need it; every one of them stands unrounded in the tables.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence

from withstand.judgement.detectability import Detectability, Hazard, hazard
from withstand.judgement.limit import Cure
from withstand.judgement.plausible import Plausible
from withstand.judgement.ranking import Spot, Threat
from withstand.judgement.verdict import Verdict

Say = Callable[[str, float], str]
"""Says a severity of the named departure as a person would: 'SD ratio 2', 't with 5 df'."""

NOTHING = "nothing wrong"
"""What is said of a severity at which the assumption holds."""

_NORMAL = 1.96
"""97.5 % point of the normal law."""

_NAMED = 4
"""Departures named in one sentence; the others are counted."""


def round_for_speech(value: float, digits: int = 2) -> float:
    """A number with so many significant digits."""
    if value == 0.0 or not math.isfinite(value):
        return value
    return round(value, digits - 1 - math.floor(math.log10(abs(value))))


def headline(
    n: int,
    level: float,
    focus: str,
    threats: Sequence[Threat],
    say: Say,
    *,
    throughout: tuple[str, float] | None = None,
    detectability: Mapping[str, Detectability] | None = None,
) -> tuple[str, ...]:
    """Sentences about one focal quantity and the user's own procedure.

    Parameters
    ----------
    n : int
        Rows of the study.
    level : float
        Confidence level.
    focus : str
        Name of the focal quantity.
    threats : sequence of Threat
        For this focus and the user's procedure, ranked: what to worry about first comes first. At least one.
    say : callable
        Says a severity; NOTHING where the assumption holds and nothing else is wrong.
    throughout : (str, float), optional
        The procedure that holds at every severity the residuals allow, with its premium over the user's own; name empty where
        none does. None where only one procedure was judged.
    detectability : mapping of str to Detectability, optional
        By departure, at its tipping severity.

    Returns
    -------
    tuple of str
        The most important first.
    """
    giving = [t for t in threats if t.worst.judgement.verdict is Verdict.GIVES]
    open_ones = [t for t in threats if t.worst.judgement.verdict is Verdict.UNSETTLED]
    holding = [t for t in threats if t.worst.judgement.verdict is Verdict.HOLDS]
    interval = f"the {100 * level:g} % interval for {focus} by {threats[0].procedure}"
    sentences = []
    if giving:
        sentences.append(_worry(n, interval, giving[0], say))
        if len(giving) > 1:
            sentences.append(f"It also gives under {_listing([_with_severity(t, say) for t in giving[1:]])}.")
    elif open_ones:
        sentences.append(
            f"With these {n} rows {interval} comes too close to the tolerance to call under "
            f"{_listing([t.departure for t in open_ones])}."
        )
    else:
        sentences.append(f"With these {n} rows {interval} holds under every departure tried, {_how_far(threats)}.")
    if giving and open_ones:
        sentences.append(f"Too close to call: {_listing([t.departure for t in open_ones])}.")
    if holding and (giving or open_ones):
        sentences.append(f"It holds under {_listing([t.departure for t in holding])}, {_how_far(holding)}.")
    sentences += _hidden(giving, detectability or {}, say)
    if giving:
        sentences += _instead(giving, throughout)
    return tuple(sentences)


def _worry(n: int, interval: str, first: Threat, say: Say) -> str:
    worst = first.worst
    turn = first.tipping.point if first.tipping.point is not None else first.tipping.first_gives
    neutral = first.tipping.neutral
    if first.tipping.always and say(first.departure, neutral) == NOTHING:
        gives = "it is out of tolerance even when nothing is wrong"
    elif first.tipping.always:
        gives = f"it is out of tolerance from {say(first.departure, neutral)} on"
    elif turn is None:
        gives = f"it gives at {say(first.departure, worst.severity)}"
    elif turn < neutral:
        gives = f"it gives from {say(first.departure, turn)} down"
    else:
        gives = f"it gives beyond {say(first.departure, turn)}"
    allowed = first.plausible
    there = _where(first, say)
    if allowed is None:
        reach = f"{there}, the worst tried,"
    elif allowed.empty:
        reach = f"your residuals fit no severity well; {there}, the nearest,"
    else:
        reach = f"your residuals allow {_allowed(first, allowed, say)}; {there}"
    rows = {Cure.NEVER: "; more rows are no cure", Cure.FADES: "; it fades with more rows", Cure.SLOWLY: "; rows help slowly"}
    cure = "" if first.limit is None else rows[first.limit.cure]
    return (
        f"Worry first about {first.departure}: with these {n} rows, for {interval}, {gives}; {reach} it {_does(worst)}{cure}."
    )


def _where(threat: Threat, say: Say) -> str:
    told = say(threat.departure, threat.worst.severity)
    return f"with {told}" if told == NOTHING else f"at {told}"


def _does(spot: Spot) -> str:
    """What the procedure does there, by the measure that decided the verdict."""
    deciding = spot.judgement.deciding
    match deciding.measure:
        case "size":
            return f"rejects a true null hypothesis in {_percent(spot, deciding.value)} %"
        case "miss_below" | "miss_above":
            side = "below" if deciding.measure == "miss_below" else "above"
            return f"lies wholly {side} the true value in {_percent(spot, deciding.value)} %"
        case "bias_in_sd":
            return f"covers {_percent(spot, spot.share)} %, with a bias of {deciding.value:.2g} SD of the estimate"
        case "bias":
            return f"covers {_percent(spot, spot.share)} %, with a bias of {deciding.value:.3g}"
    return f"covers {_percent(spot, spot.share)} %"


def _allowed(threat: Threat, allowed: Plausible, say: Say) -> str:
    """A range of severities; what the label of its end repeats of that of its start is left out."""
    low, high = (say(threat.departure, end) for end in (allowed.low, allowed.high))
    if allowed.open_below and allowed.open_above:
        return "any severity"
    if allowed.open_below:
        return f"{high} and anything below"
    if allowed.open_above:
        return f"{low} and anything beyond"
    shared = 0
    for a, b in zip(low.split(), high.split(), strict=False):
        if a != b:
            break
        shared += 1
    return f"{low} to {' '.join(high.split()[shared:])}" if low != high else low


def _with_severity(threat: Threat, say: Say) -> str:
    return f"{threat.departure} ({_does(threat.worst)} {_where(threat, say)})"


def _how_far(threats: Sequence[Threat]) -> str:
    if all(t.plausible is None for t in threats):
        return "as far as it was tried"
    return "as far as your residuals allow it"


def _hidden(giving: Sequence[Threat], seen: Mapping[str, Detectability], say: Say) -> list[str]:
    known = [t.departure for t in giving if t.departure in seen]
    hidden = [name for name in known if hazard(True, seen[name]) is Hazard.HIDDEN]
    if not hidden:
        return []
    worst = min(hidden, key=lambda name: seen[name].power)
    found = seen[worst]
    others = f" The same goes for {_listing([name for name in hidden if name != worst])}." if len(hidden) > 1 else ""
    return [
        f"{str(Hazard.HIDDEN).capitalize()}: a check of the residuals shows {worst} at {say(worst, found.severity)} in "
        f"{round(100 * found.power)} of 100 such studies.{others}"
    ]


def _instead(giving: Sequence[Threat], throughout: tuple[str, float] | None) -> list[str]:
    if throughout is None:
        return []
    name, premium = throughout
    if name:
        return [f"{name} holds throughout{_price(premium)}."]
    where: dict[tuple[str, float], list[str]] = {}
    for threat in giving:
        if threat.holding:
            where.setdefault((threat.holding, threat.premium), []).append(threat.departure)
    if not where:
        return ["No procedure tried holds under any of these."]
    found = [f"{name} under {_listing(departures)}{_price(premium)}" for (name, premium), departures in where.items()]
    return [f"No procedure tried holds throughout; what holds is {_listing(found, '; ')}."]


def _price(premium: float) -> str:
    if math.isnan(premium):
        return ""
    percent = round(100 * premium)
    if percent == 0:
        return ", with intervals as wide when nothing is wrong"
    return f", with intervals {abs(percent)} % {'wider' if percent > 0 else 'narrower'} when nothing is wrong"


def _percent(spot: Spot, share: float) -> str:
    """A share in percent, with the half-width of its 95 % Monte Carlo interval where it is simulated.

    It has as many decimals as it takes to lie on its own side of the bound it is judged by.
    """
    decimals, bound = 1, spot.judgement.deciding.bound
    while decimals < 5 and _same(share, bound, decimals):
        decimals += 1
    told = f"{100.0 * share:.{decimals}f}"
    if spot.exact:
        return told
    reach = 100.0 * _NORMAL * spot.mc_se
    return f"{told} ± {max(reach, 10.0**-decimals):.{decimals}f}"


def _same(a: float, b: float, decimals: int) -> bool:
    return a != b and round(100.0 * a, decimals) == round(100.0 * b, decimals)


def _listing(items: Sequence[str], joint: str = ", ") -> str:
    shown = list(items[:_NAMED])
    if len(items) > _NAMED:
        shown.append(f"{len(items) - _NAMED} more")
    if len(shown) < 2:
        return "".join(shown)
    return f"{joint.join(shown[:-1])} and {shown[-1]}"
