"""Exact answers against simulated ones of the same cells."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from withstand import tails
from withstand.engine.tally import Tally
from withstand.lab.gather import Evidence
from withstand.lab.grid import Cell
from withstand.measures.compute import COUNTED, measure

_FAR = 2.0
"""Standard errors beyond which a comparison is counted as far."""


@dataclass(frozen=True)
class Comparison:
    """One measure of one cell by both routes.

    Parameters
    ----------
    cell : Cell
        Where.
    measure : str
        Which.
    exact, simulated : float
        Values, in the unit of the measure.
    z : float
        Their difference in Monte Carlo standard errors.
    """

    cell: Cell
    measure: str
    exact: float
    simulated: float
    z: float


def comparisons(evidence: Evidence) -> list[Comparison]:
    """Every measure that has been found by both routes.

    Notes
    -----
    The standard error of a share is that of its exact value, so that a share of 0 or 1 among replicates has one too. Where the
    law of the errors has no fourth moment, the Monte Carlo error of an SD does not exist, and only shares are compared.
    """
    found = []
    wild: dict[int, bool] = {}
    for cell, answers in evidence.exact.items():
        tally = evidence.tallies.get(cell)
        if tally is None:
            continue
        world = cell.spot.world
        if world not in wild:
            law = evidence.grid.world(cell.spot).on(evidence.grid.study.design).law
            wild[world] = law is not None and math.isinf(law.kurtosis)
        names = [name for name in answers if name in COUNTED or not wild[world]]
        for name, estimate in measure(tally, names, evidence.grid.study.error_sd).items():
            exact = answers[name].estimate.value
            se = _error(name, exact, tally) if name in COUNTED else estimate.mc_se
            difference = estimate.value - exact
            # What both routes give without error, such as a failure rate of 0, is no evidence unless they disagree.
            if se > 0.0 or abs(difference) > 1e-9 * max(abs(exact), 1e-3):
                found.append(Comparison(cell, name, exact, estimate.value, difference / se if se > 0.0 else math.inf))
    return found


def verification(evidence: Evidence) -> dict[str, Any]:
    """A summary for the record: how many comparisons, how far apart, and how far that many may be by chance."""
    compared = comparisons(evidence)
    if not compared:
        return {"comparisons": 0}
    worst = max(compared, key=lambda one: abs(one.z))
    far = sum(abs(one.z) > _FAR for one in compared)
    axis = worst.cell.spot.axis
    return {
        "comparisons": len(compared),
        "beyond_two_errors": far,
        "expected_beyond_two_errors": 2.0 * float(tails.normal_sf(_FAR)) * len(compared),
        "largest_z": abs(worst.z),
        "largest_z_by_chance": float(tails.normal_isf(0.005 / len(compared))),
        "largest_at": {
            "departure": "none" if axis is None else axis.departure.name,
            "severity": worst.cell.spot.severity,
            "procedure": worst.cell.procedure.identity,
            "focus": worst.cell.focus.name,
            "measure": worst.measure,
            "exact": worst.exact,
            "simulated": worst.simulated,
        },
    }


def _error(name: str, share: float, tally: Tally) -> float:
    return math.sqrt(max(share * (1.0 - share), 0.0) / tally.units)
