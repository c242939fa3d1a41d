"""Who is to be cited, from the registries of departures and procedures."""

from __future__ import annotations

from withstand.departures import REGISTRY as DEPARTURES
from withstand.procedures.base import REGISTRY as PROCEDURES
from withstand.report.view import View, unique

MEASURES_SOURCE = (
    "Morris, T. P., White, I. R. and Crowther, M. J. (2019). Using simulation studies to evaluate statistical methods. "
    "Statistics in Medicine 38, 2074-2102. doi:10.1002/sim.8086"
)
"""Names of the measures and their Monte Carlo errors."""

EXACT_SOURCE = "Gil-Pelaez (1951); Imhof (1961); Davies (1980)"
"""The distribution of a quadratic form in normal variables."""

PREMIUM_SOURCE = "Anscombe (1960)"


def citations(view: View) -> list[tuple[str, str]]:
    """What was used and its source, in the order of the tables: procedures, departures, then the judgement.

    A procedure of the user's own has no source here and says so.
    """
    found = []
    for name in view.procedures:
        known = PROCEDURES.get(name.split("(", 1)[0])
        found.append((name, "the user's own procedure" if known is None else f"{known.title}: {known.source}"))
    for kind in unique(kind for axis in view.ladders for kind in _kinds(axis.departure, axis.stack)):
        found.append((kind, f"{DEPARTURES[kind].title}: {DEPARTURES[kind].source}"))
    source = (view.outcome.provenance.get("tolerance") or {}).get("source")
    if source:
        found.append(("tolerance", str(source)))
    found += [("measures and Monte Carlo errors", MEASURES_SOURCE), ("premium and protection", PREMIUM_SOURCE)]
    if (view.outcome.measures["method"] == "exact").any():
        found.append(("exact values", EXACT_SOURCE))
    return found


def _kinds(departure: str, stack: str) -> list[str]:
    """The registered kinds that a row names, companions of a stack included."""
    named = [departure, *stack.split(" + ")]
    return [kind for part in named for kind in DEPARTURES if part == kind or part.startswith((f"{kind} ", f"{kind},"))]
