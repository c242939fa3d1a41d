"""Size-adjusted power: what tests of different size could do if each had the critical value that its world calls for.

Power is worth comparing between tests of one size. Where a size is outside the tolerance, the test's critical value is
multiplied by what gives it its nominal size in that world: exactly where the cell is exact, else on replicates of the run's
own noise.
"""

from __future__ import annotations

import math
import uuid
from collections.abc import Sequence
from concurrent.futures import Future

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
    off = [cell for cell in assessment.compared(threats) if _off(evidence, cell)]
    exact = [cell for cell in off if evidence.answers(cell)["power"].method == "exact"]
    simulation = _Simulation(grid, [cell for cell in off if cell not in exact], bench)
    values = {cell: _exact(grid, cell) for cell in exact}
    found = {
        cell: {ADJUSTED_POWER: Answer(exactly(value, math.nan), "exact", 0, 0)}
        for cell, value in values.items()
        if value is not None
    }
    rest = _Simulation(grid, [cell for cell, value in values.items() if value is None], bench)
    for cell, estimate in (simulation.answers() | rest.answers()).items():
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


class _Simulation:
    """Cells from the ledger or, where that has none and simulation is allowed, from the noise; it runs while others work.

    Parameters
    ----------
    grid : Grid
        The plan on its study.
    cells : sequence of Cell
        Where size-adjusted power is wanted.
    bench : Bench
        Where to simulate.
    """

    def __init__(self, grid: Grid, cells: Sequence[Cell], bench: Bench) -> None:
        self._grid, self._bench = grid, bench
        runner = bench.runner(grid)
        self._keys = {cell: runner.key((cell.spot.world, cell.procedure_index)) for cell in cells}
        self._known = {cell: bench.ledger.numbers(key, _name(cell)) for cell, key in self._keys.items()}
        self._open = [cell for cell, numbers in self._known.items() if numbers is None and bench.effort.simulate]
        self._futures: list[Future[Ratios]] = self._submitted() if self._open else []

    def _submitted(self) -> list[Future[Ratios]]:
        active: dict[int, list[int]] = {}
        for world, procedure in sorted({(cell.spot.world, cell.procedure_index) for cell in self._open}):
            active.setdefault(world, []).append(procedure)
        executor = self._bench.executor
        self._bench.effort.progress.phase("size-adjusted power", TASKS)
        job, token = parcel(self._grid.job, executor), uuid.uuid4().hex
        return [executor.submit(run_ratios, job, token, task, active) for task in range(TASKS)]

    def answers(self) -> dict[Cell, Estimate]:
        """Size-adjusted power of every cell that has one."""
        unit = 1 if self._grid.study.rows.fixed else self._grid.job.width
        if self._futures:
            ratios, alpha = self._collected(), self._grid.study.alpha
            pairs = {cell: ratios.get((cell.spot.world, cell.procedure_index, cell.focus_index)) for cell in self._open}
            found = {cell: () if pair is None else power_at_size(pair, alpha, unit) for cell, pair in pairs.items()}
            self._bench.ledger.write_numbers({(self._keys[cell], _name(cell)): numbers for cell, numbers in found.items()})
            self._known |= found
        units = TASKS * TASK_REPLICATES // unit
        return {cell: _estimate(numbers[0], numbers[1], units) for cell, numbers in self._known.items() if numbers}

    def _collected(self) -> Ratios:
        results = []
        try:
            for future in self._futures:
                results.append(future.result())
                self._bench.effort.progress.step()
        finally:
            for future in self._futures:
                future.cancel()
        return {key: np.concatenate([result[key] for result in results], axis=1) for key in results[0]}


def _name(cell: Cell) -> str:
    """Under which the ledger keeps it."""
    return f"{ADJUSTED_POWER} of {cell.focus_index}"


def _estimate(power: float, se: float, units: int) -> Estimate:
    return Estimate(power, se, *monte_carlo_interval(power, se, units, (0.0, 1.0)), math.nan, math.nan)


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
