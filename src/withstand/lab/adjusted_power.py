"""Size-adjusted power: what tests of different size could do if each had the critical value that its world calls for.

Power is worth comparing between tests of one size. Where a size is outside the tolerance, the test's critical value is
multiplied by what gives it its nominal size in that world: exactly where the cell is exact, else on replicates of the run's
own noise.
"""

from __future__ import annotations

import math
import uuid
from collections.abc import Iterable, Sequence

import numpy as np

from withstand.engine.executors import parcel, run_ratios
from withstand.engine.job import TASK_REPLICATES
from withstand.engine.ratios import Ratios
from withstand.errors import NumericalError
from withstand.exact import adjusted_power
from withstand.lab.exactly import exactly
from withstand.lab.frames import Answer, CellAnswers
from withstand.lab.gather import Bench, Evidence
from withstand.lab.grid import Cell, Grid
from withstand.lab.threats import Assessment, Threatened
from withstand.measures.compute import Estimate, monte_carlo_interval
from withstand.measures.names import ADJUSTED_POWER
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Floats

TASKS = 10
"""Tasks a simulated cell gets: 20,000 replicates. The error of its adjusted power is then about half a percentage point."""

_BAND = 0.2
"""Relative distance from the nominal size within which the slope of power against size is taken."""


def adjusted_powers(assessment: Assessment, threats: Sequence[Threatened], bench: Bench) -> dict[Cell, CellAnswers]:
    """Size-adjusted power where nothing is wrong and at the worst severity of every departure.

    Parameters
    ----------
    assessment : Assessment
        With all evidence gathered.
    threats : sequence of Threatened
        As the assessment found them; the first of a departure and focal quantity names the severity.
    bench : Bench
        Where to simulate.

    Returns
    -------
    dict of Cell to CellAnswers
        Cells whose size is within the tolerance, or whose test has no critical value of its own, are left out.
    """
    evidence, grid = assessment.evidence, assessment.grid
    found: dict[Cell, CellAnswers] = {}
    open_cells = []
    for cell in assessment.compared(threats):
        if not _off(evidence, cell):
            continue
        value = _exact(grid, cell) if evidence.answers(cell)["power"].method == "exact" else None
        if value is None:
            open_cells.append(cell)
        else:
            found[cell] = {ADJUSTED_POWER: Answer(exactly(value, math.nan), "exact", 0, 0)}
    for cell, estimate in _simulated(grid, open_cells, bench).items():
        failures = evidence.answers(cell)["power"].failures
        found[cell] = {ADJUSTED_POWER: Answer(estimate, "simulated", TASKS * TASK_REPLICATES, failures)}
    return found


def _off(evidence: Evidence, cell: Cell) -> bool:
    """Whether the size is known and outside the tolerance, on either side."""
    answers = evidence.answers(cell)
    if "size" not in answers or "power" not in answers:
        return False
    accepted = evidence.grid.aspects["size"]
    return not accepted.thrifty_low <= answers["size"].estimate.value <= accepted.high


def _exact(grid: Grid, cell: Cell) -> float | None:
    procedure, effect = cell.procedure, cell.focus.effect
    if not isinstance(procedure, LinearProcedure) or effect is None:
        return None
    study = grid.study
    disturbance = grid.world(cell.spot).on(study.design)
    try:
        found = adjusted_power(procedure, study.design, cell.focus, disturbance, study.level, effect[None] / study.error_sd)
    except NumericalError:
        # The accuracy is out of reach, so it is simulated, and its column `method` says so.
        return None
    return float(found[0])


def _simulated(grid: Grid, cells: Iterable[Cell], bench: Bench) -> dict[Cell, Estimate]:
    """From the ledger or, where that has none and simulation is allowed, from the noise."""
    runner = bench.runner(grid)
    keys = {cell: runner.key((cell.spot.world, cell.procedure_index)) for cell in cells}
    names = {cell: f"{ADJUSTED_POWER} of {cell.focus_index}" for cell in keys}
    known = {cell: bench.ledger.numbers(keys[cell], names[cell]) for cell in keys}
    open_cells = [cell for cell, numbers in known.items() if numbers is None]
    if open_cells and bench.effort.simulate:
        ratios = _ratios(grid, open_cells, bench)
        unit = 1 if grid.study.rows.fixed else grid.job.width
        for cell in open_cells:
            pair = ratios.get((cell.spot.world, cell.procedure_index, cell.focus_index))
            known[cell] = () if pair is None else power_at_size(pair, grid.study.alpha, unit)
        for name in dict.fromkeys(names.values()):
            fresh = {keys[cell]: found for cell in open_cells if names[cell] == name and (found := known[cell]) is not None}
            bench.ledger.write_numbers(name, fresh)
    units = TASKS * TASK_REPLICATES // (1 if grid.study.rows.fixed else grid.job.width)
    return {cell: _estimate(numbers[0], numbers[1], units) for cell, numbers in known.items() if numbers}


def _estimate(power: float, se: float, units: int) -> Estimate:
    return Estimate(power, se, *monte_carlo_interval(power, se, units, (0.0, 1.0)), math.nan, math.nan)


def _ratios(grid: Grid, cells: Iterable[Cell], bench: Bench) -> Ratios:
    active: dict[int, list[int]] = {}
    for world, procedure in sorted({(cell.spot.world, cell.procedure_index) for cell in cells}):
        active.setdefault(world, []).append(procedure)
    bench.effort.progress.phase("size-adjusted power", TASKS)
    job, token = parcel(grid.job, bench.executor), uuid.uuid4().hex
    futures = [bench.executor.submit(run_ratios, job, token, task, active) for task in range(TASKS)]
    results = []
    try:
        for future in futures:
            results.append(future.result())
            bench.effort.progress.step()
    finally:
        for future in futures:
            future.cancel()
    return {key: np.concatenate([result[key] for result in results], axis=1) for key in results[0]}


def power_at_size(pair: Floats, alpha: float, unit: int = 1) -> tuple[float, float] | tuple[()]:
    """Power with the critical value at which the size is alpha.

    Parameters
    ----------
    pair : ndarray of shape (2, R)
        Test statistics over critical values: at a true null hypothesis, and with the effect.
    alpha : float
        Nominal size.
    unit : int
        Replicates in an independent unit: those of a block, where each block has a design of its own.

    Returns
    -------
    tuple of (float, float)
        Power and its standard error; empty where the ratio that is exceeded with probability alpha is 0 or infinite.

    Notes
    -----
    With c the 1 - alpha quantile of the ratios at the null hypothesis, a replicate moves the power by [effect > c] - power -
    g ([null > c] - alpha), where g, the slope of power against size, comes from the quantiles at 0.8 and 1.2 alpha. The
    standard error is that of the mean of these (the representation of a quantile by Bahadur 1966, Ann. Math. Statist. 37:577),
    and so knows that both rest on the same noise.
    """
    null, effect = pair
    ordered = np.sort(null)

    def multiplier(size: float) -> float:
        return float(ordered[max(math.ceil(len(ordered) * (1.0 - size)) - 1, 0)])

    c, low, high = (multiplier(size) for size in (alpha, (1.0 + _BAND) * alpha, (1.0 - _BAND) * alpha))
    if not 0.0 < c < math.inf:
        return ()
    power = float(np.mean(effect > c))
    spread = float(np.mean(null > low) - np.mean(null > high))
    slope = 0.0 if spread <= 0.0 else float(np.mean(effect > low) - np.mean(effect > high)) / spread
    moved = (effect > c) - slope * (null > c)
    means = moved.reshape(-1, unit).mean(axis=1)
    return power, float(means.std(ddof=1)) / math.sqrt(len(means))
