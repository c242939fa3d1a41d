"""Answers by simulation: the ledger's tallies read as measures, sharpened where the baseline is known exactly."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import replace

from withstand import tails
from withstand.engine.runner import Runner
from withstand.engine.tally import Feature, Tally
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.grid import Cell
from withstand.measures.compute import CONFIDENCE, PROPORTIONS, Estimate, measure
from withstand.measures.names import applicable_measures, conditional_measures

_REACH = float(tails.normal_isf((1.0 - CONFIDENCE) / 2.0))


def tallies_of(runner: Runner, cells: Iterable[Cell]) -> dict[Cell, Tally]:
    """What the ledger holds of each cell; cells without a replicate are left out."""
    found: dict[Cell, Tally] = {}
    entries = {}
    for cell in cells:
        key = (cell.spot.world, cell.procedure_index)
        if key not in entries:
            entries[key] = runner.read(key)
        tallies = entries[key].tallies
        tally = tallies[cell.focus_index] if tallies else None
        if tally is not None:
            found[cell] = tally
    return found


def simulated_answers(
    tallies: Mapping[Cell, Tally], known_baseline: Mapping[tuple[int, int], CellAnswers], error_sd: float
) -> dict[Cell, CellAnswers]:
    """Measures of every tallied cell.

    Parameters
    ----------
    tallies : mapping of Cell to Tally
        What was simulated.
    known_baseline : mapping of (int, int) to CellAnswers
        Exact answers of the baseline, by index of procedure and focal quantity.
    error_sd : float
        Reference error SD, in the unit of the response.

    Returns
    -------
    dict of Cell to CellAnswers
        One answer a measure.
    """
    answers = {}
    for cell, tally in tallies.items():
        failures = tally.replicates - round(tally.products[Feature.ONE, Feature.OK] / tally.units * tally.replicates)
        known = known_baseline.get((cell.procedure_index, cell.focus_index), {})
        names = applicable_measures(cell.procedure, cell.focus)
        names += conditional_measures(cell.procedure, cell.focus) if failures else []
        computed = measure(tally, names, error_sd)
        answers[cell] = {
            name: Answer(_sharpened(name, estimate, known, cell.spot.axis is None), "simulated", tally.replicates, failures)
            for name, estimate in computed.items()
        }
    return answers


def sharpened_count(answers: Mapping[Cell, CellAnswers], tallies: Mapping[Cell, Tally]) -> int:
    """How many shares rest on the exact baseline as a control, rather than on the plain count."""
    count = 0
    for cell, found in answers.items():
        sums = tallies[cell].products[Feature.ONE] / tallies[cell].units
        count += sum(found[name].estimate.value != float(sums[PROPORTIONS[name]]) for name in PROPORTIONS if name in found)
    return count


def _sharpened(name: str, estimate: Estimate, known: CellAnswers, is_baseline: bool) -> Estimate:
    """The control-variate estimate of a share, where it has the smaller error.

    The baseline on the same noise is the control, its exact value the known mean; the estimate is that value plus the paired
    shift. With perfect dependence the two errors are equal and the plain share is kept, whose interval is exact.
    """
    if is_baseline or name not in PROPORTIONS or name not in known or not estimate.shift_se < 0.9 * estimate.mc_se:
        return estimate
    if estimate.shift_se == 0.0 or math.isnan(estimate.shift):
        return estimate
    value = min(max(known[name].estimate.value + estimate.shift, 0.0), 1.0)
    reach = _REACH * estimate.shift_se
    return replace(
        estimate,
        value=value,
        mc_se=estimate.shift_se,
        low=max(value - reach, 0.0),
        high=min(value + reach, 1.0),
    )
