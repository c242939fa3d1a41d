"""Does the plausible interval hold the true severity as often as it says?

Data are generated at a known severity of every departure, three severities each, on two designs of 30 and of 100 rows, and the
90 % interval is asked whether it holds that severity. Each share comes from several thousand data sets, so that chance alone
does not push one of many shares over the bar.

    python tests/benchmarks/plausible.py [--json FILE] [--quick]
"""

from __future__ import annotations

import math
import sys
import time
from pathlib import Path

import numpy as np
from threadpoolctl import threadpool_limits

sys.path.insert(0, str(Path(__file__).parent))
from bars import Bars, options

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.level_spread import LevelSpread
from withstand.departures.mean import Curvature
from withstand.departures.outliers import Outliers
from withstand.departures.power_spread import PowerSpread
from withstand.departures.shape import Contaminated, HeavyTails, Skew
from withstand.departures.spread import Bowtie, Fan
from withstand.departures.world import World
from withstand.diagnostics.base import observed
from withstand.engine.noise import BlockNoise
from withstand.judgement.plausible import plausible_severities, severity_laws
from withstand.judgement.residual_laws import Request, simulate
from withstand.study.design import Design, Factor

DATA_SEED, LAW_SEED = 20_26, 7
NEEDED = (0.87, 0.93)

CASES = [
    (Fan(along="x"), (1.0, 2.0, 4.0)),
    (Fan(along="fitted"), (0.5, 1.5, 3.0)),
    (Bowtie(along="x"), (0.7, 1.5, 3.0)),
    (PowerSpread(along="x"), (0.5, 1.0, 2.0)),
    (LevelSpread(along="site", noisy=("north",)), (0.6, 1.5, 3.0)),
    (Serial(), (-0.3, 0.2, 0.6)),
    (Clusters(), (0.05, 0.2, 0.5)),
    (HeavyTails(), (1 / 30, 0.1, 1 / 3)),
    (Contaminated(), (3.0, 5.0, 10.0)),
    (Skew(), (0.5, 1.0, 2.0)),
    (Outliers(), (3.0, 5.0, 8.0)),
    (Curvature(along="x"), (0.25, 0.5, 1.0)),
]


def even_design(n: int) -> Design:
    """Evenly spaced predictor, balanced site, groups of five in a row."""
    site = np.arange(n) % 3
    return make(np.linspace(1.0, 9.0, n), site, np.arange(n) // 5)


def skewed_design(n: int) -> Design:
    """Lognormal predictor with a few far points, an unbalanced site, unequal scattered groups."""
    rng = np.random.default_rng(5)
    x = np.exp(0.6 * rng.standard_normal(n))
    site = (rng.uniform(size=n) < 0.3).astype(int)
    group = np.unique(np.minimum(rng.geometric(0.15, n), 8), return_inverse=True)[1]
    return make(x, site, group)


def make(x: np.ndarray, site: np.ndarray, group: np.ndarray) -> Design:
    """The model y ~ x + site."""
    dummies = (site[:, None] == np.arange(1, site.max() + 1)).astype(float)
    X = np.column_stack([np.ones(len(x)), x, dummies])
    return Design(
        X=X,
        names=("Intercept", "x", *[f"site {level}" for level in range(1, site.max() + 1)]),
        columns={"x": x},
        factors={"site": Factor(site.astype(np.int64), ("south", "north", "west")[: site.max() + 1])},
        fitted=X @ np.concatenate([[10.0, 2.0], np.full(dummies.shape[1], 1.5)]),
        order=np.arange(len(x), dtype=float),
        groups=group.astype(np.int64),
    )


def main() -> int:
    """Run, print the table and the bars; 1 where a bar is short."""
    chosen = options(__doc__)
    data_sets = 1000 if chosen.quick else 8000
    started = time.perf_counter()
    rows = []
    with threadpool_limits(1):
        for label, build in (("even", even_design), ("skewed", skewed_design)):
            for n in (30, 100):
                rows += run(label, build(n), data_sets)
        spent = inspect_time(skewed_design(100))
    heads = f"{'severity':>9}{'holds':>8}{'mc se':>8}{'empty':>8}{'open':>8}{'median above':>14}"
    print(f"{'design':8}{'n':>5}  {'departure':34}{heads}")
    for row in rows:
        print(
            f"{row['design']:8}{row['n']:5d}  {row['departure']:34}{row['severity']:9.3g}{row['holds']:8.4f}{row['mc_se']:8.4f}"
            f"{row['empty']:8.4f}{row['open']:8.4f}{row['above']:14.4f}"
        )
    shares = np.array([row["holds"] for row in rows])
    pooled, error = float(shares.mean()), math.sqrt(0.9 * 0.1 / (len(shares) * data_sets))
    print(f"{len(rows)} cells of {rows[0]['data_sets']} data sets in {time.perf_counter() - started:.0f} s")
    print(f"pooled: {pooled:.4f}, Monte Carlo error of the data sets {error:.4f}; each law adds its own, shared by its cells")
    # A share of exactly 0.9 scatters too; with few data sets, by so much that the extreme of many says little.
    slack = 4.5 * math.sqrt(0.9 * 0.1 / data_sets) if chosen.quick else 0.0
    bars = Bars(chosen)
    bars.at_least("plausible-least-coverage", float(shares.min()), NEEDED[0] - slack)
    bars.at_most("plausible-most-coverage", float(shares.max()), NEEDED[1] + slack)
    bars.at_least("plausible-pooled-coverage", pooled, 0.89)
    bars.at_most("plausible-pooled-coverage-from-above", pooled, 0.91)
    bars.at_most("plausible-seconds-for-12-departures", spent, 5.0)
    return bars.close()


def run(label: str, design: Design, data_sets: int) -> list[dict[str, object]]:
    """All departures on one design."""
    rows: list[dict[str, object]] = []
    laws = severity_laws(design, [departure for departure, _ in CASES], seed=LAW_SEED)
    for (departure, severities), law in zip(CASES, laws, strict=True):
        assert law is not None
        inversion = law.inversion()
        signed = Request(departure, law.chosen, np.array(severities))
        values = simulate(design, [signed], seed=DATA_SEED, replicates=data_sets)[0]
        for severity, statistics in zip(severities, values, strict=True):
            found = [inversion.plausible(float(value)) for value in statistics]
            rows.append(
                {
                    "design": label,
                    "n": design.n,
                    "departure": departure.name,
                    "severity": severity,
                    "holds": float(np.mean([p.holds(severity) for p in found])),
                    "empty": float(np.mean([p.empty for p in found])),
                    "open": float(np.mean([p.open_above or p.open_below for p in found])),
                    "above": float(np.mean([p.point > severity for p in found])),
                    "mc_se": math.sqrt(0.9 * 0.1 / len(found)),
                    "data_sets": len(found),
                }
            )
    return rows


def inspect_time(design: Design) -> float:
    """Seconds for the plausible severities of one data set, as `inspect` asks for them, laws simulated from nothing."""
    noise = BlockNoise(3, 0, 1)
    assert design.fitted is not None
    response = design.fitted + 2.0 * World(((Skew(), 1.0),)).on(design).draw(noise, np.empty((design.n, 1)))[:, 0]
    observed(design, response)
    started = time.perf_counter()
    plausible_severities(design, response, [departure for departure, _ in CASES], seed=99)
    return time.perf_counter() - started


if __name__ == "__main__":
    sys.exit(main())
