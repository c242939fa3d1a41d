"""How fast the engine is a replicate, against a statsmodels loop and against drawing the normals alone.

    python tests/benchmarks/peer.py [--json FILE] [--quick]

Everything is paired in one run on one thread: the three take turns, and the median of the ratios counts.
"""

from __future__ import annotations

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import statistics
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import statsmodels.api as sm

sys.path.insert(0, str(Path(__file__).parent))
from bars import Bars, options

from withstand.departures import Fan, World
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.engine.tally import Feature
from withstand.procedures import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus
from withstand.study.rows import FixedRows
from withstand.study.study import Study

ROUNDS = 7
SHAPES = ((100, 5), (24, 3), (400, 8))


@dataclass
class Timing:
    """Microseconds a replicate, one entry a round."""

    engine: list[float]
    floor: list[float]
    loop: list[float]
    more: list[float]


def make_job(n: int, p: int) -> Job:
    """A job on a random design, OLS and HC3 on one coefficient, with a fan as a further world."""
    X = np.column_stack([np.ones(n), np.random.default_rng(1).standard_normal((n, p - 1))])
    names = ("Intercept", *(f"x{i}" for i in range(1, p)))
    design = Design(X, names, columns={"x1": X[:, 1]})
    study = Study("peer", "", design, (Focus.coefficient("x1", names),), np.zeros(p), 1.0, FixedRows(design))
    worlds = (World(((Fan((3.0,), along="x1"), 3.0),)),)
    return Job(study, worlds, (make_procedure("ols"), make_procedure("hc3")), seed=1)


def statsmodels_loop(job: Job, replicates: int) -> int:
    """OLS fit with classical and HC3 intervals and tests, one data set at a time; returns the HC3 intervals that cover.

    The engine tallies intervals and tests of both procedures, so the loop asks for both.
    """
    generator = np.random.default_rng(1)
    X = job.study.design.X
    covered = 0
    for _ in range(replicates):
        fit = sm.OLS(generator.standard_normal(len(X)), X).fit()
        fit.conf_int(), fit.pvalues
        robust = fit.get_robustcov_results("HC3", use_t=True)
        low, high = robust.conf_int()[1]
        covered += low <= 0.0 <= high and robust.pvalues[1] >= 0.05
    return covered


def measure(n: int, p: int, replicates: int, loops: int) -> tuple[Timing, float]:
    """Time the three in turn; also the share of intervals that cover, so that the work is seen to be done."""
    job = make_job(n, p)
    kernel = Kernel(job)
    blocks = range(max(1, replicates // job.width))
    done = len(blocks) * job.width
    buffer = np.empty((n, job.width))
    base = {BASELINE: (0, 1)}
    kernel.run(range(2), base | {0: (0, 1)})
    timing = Timing([], [], [], [])
    coverage = 0.0
    for _ in range(ROUNDS):
        start = time.perf_counter()
        result = kernel.run(blocks, base)
        engine = time.perf_counter() - start
        start = time.perf_counter()
        kernel.run(blocks, base | {0: (0, 1)})
        two_worlds = time.perf_counter() - start
        generator = np.random.Generator(np.random.SFC64(1))
        start = time.perf_counter()
        for _block in blocks:
            generator.standard_normal(out=buffer)
        floor = time.perf_counter() - start
        start = time.perf_counter()
        statsmodels_loop(job, loops)
        loop = time.perf_counter() - start
        timing.engine.append(engine / done * 1e6)
        timing.more.append((two_worlds - engine) / done * 1e6)
        timing.floor.append(floor / done * 1e6)
        timing.loop.append(loop / loops * 1e6)
        tally = result[(BASELINE, 1)][0]
        coverage = tally.products[Feature.ONE, Feature.COVERED] / tally.replicates
    return timing, coverage


def main() -> int:
    """Print the table and the bars."""
    chosen = options(__doc__)
    bars = Bars(chosen)
    replicates, loops = (20_000, 100) if chosen.quick else (200_000, 400)
    print(
        f"{'n':>4} {'p':>2} {'engine us':>10} {'floor us':>9} {'loop us':>9} {'loop/engine':>12} {'engine/floor':>13} "
        f"{'next world/floor':>17} {'covered':>8}"
    )
    for n, p in SHAPES:
        timing, coverage = measure(n, p, replicates, loops)
        speedup = statistics.median(a / b for a, b in zip(timing.loop, timing.engine, strict=True))
        above = statistics.median(a / b for a, b in zip(timing.engine, timing.floor, strict=True))
        more = statistics.median(a / b for a, b in zip(timing.more, timing.floor, strict=True))
        medians = [statistics.median(values) for values in (timing.engine, timing.floor, timing.loop)]
        print(
            f"{n:>4} {p:>2} {medians[0]:>10.3f} {medians[1]:>9.3f} {medians[2]:>9.1f} {speedup:>12.0f} {above:>13.2f} "
            f"{more:>17.2f} {coverage:>8.4f}"
        )
        if (n, p) == (100, 5):
            bars.at_least("speed against a statsmodels loop, n=100 p=5", speedup, 400)
            bars.at_most("engine over floor, n=100 p=5", above, 1.6)
        bars.at_most(f"next world over floor, n={n} p={p}", more, 1.0)
    return bars.close()


if __name__ == "__main__":
    sys.exit(main())
