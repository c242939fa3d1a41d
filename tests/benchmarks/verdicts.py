"""How often is a verdict of the simulator wrong, and what does the sequential search save?

Every cell is normal in its errors and linear in its procedure, so that its true coverage is known from the eigenvalues of a
quadratic form (Imhof 1961), worked out here apart from the package's own exact answers. The cells are then judged by
simulation alone, looking after 10,000, 20,000, ... replicates, and the verdicts compared with the truth.

    python tests/benchmarks/verdicts.py [--json FILE] [--quick]
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))
from bars import Bars, options

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.level_spread import LevelSpread
from withstand.departures.mean import Curvature
from withstand.departures.power_spread import PowerSpread
from withstand.departures.spread import Bowtie, Fan
from withstand.departures.world import World
from withstand.judgement.aspects import aspects_of
from withstand.judgement.tolerance import Tolerance
from withstand.judgement.verdict import Verdict
from withstand.lab.gather import Effort, gather, open_bench
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis, Plan
from withstand.procedures.base import LinearProcedure
from withstand.procedures.classical import Ols
from withstand.procedures.sandwich import Hc0, Hc1, Hc2, Hc2Bm, Hc3
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind, Point
from withstand.study.rows import FixedRows
from withstand.study.study import Study

ALPHA, DELTA = 0.05, 0.01
FIRST, MOST = 10_000, 160_000
PROCEDURES = (Ols(), Hc0(), Hc1(), Hc2(), Hc2Bm(), Hc3())
TOLERANCE = Tolerance()


def axes() -> tuple[Axis, ...]:
    """Every departure with normal errors on its default ladder."""
    departures = (
        Fan(along="x"),
        Fan(along="x", direction="down"),
        Bowtie(along="x"),
        PowerSpread(along="x"),
        LevelSpread(along="site", noisy=("north",)),
        Serial(),
        Clusters(),
        Curvature(along="x"),
    )
    return tuple(Axis(departure) for departure in departures)


def study(n: int, tail: float, focal: str) -> Study:
    """Y ~ x + site with one focal quantity; `tail` is the SD of log x."""
    rng = np.random.default_rng(n)
    x = np.exp(tail * rng.standard_normal(n))
    site = (rng.uniform(size=n) < 0.3).astype(np.int64)
    X = np.column_stack([np.ones(n), x, site])
    coefficients = np.array([10.0, 2.0, 1.5])
    design = Design(
        X=X,
        names=("Intercept", "x", "site[north]"),
        columns={"x": x},
        factors={"site": Factor(site, ("south", "north"))},
        fitted=X @ coefficients,
        order=np.arange(n, dtype=float),
        groups=(np.arange(n) // 4).astype(np.int64),
    )
    if focal in design.names:
        focus = Focus.coefficient(focal, design.names)
    else:
        middle = float(np.median(x))
        at = np.array([[1.0, middle, 0.0]])
        point = Point({"x": middle}, {"site": "south"}, float(at[0] @ coefficients))
        focus = Focus(focal, FocusKind.MEAN, at, np.zeros(1), point=point)
    return Study(
        f"n = {n}", "y ~ x + site", design, (focus,), coefficients, 1.0, FixedRows(design), digest=f"{n} {tail} {focal}"
    )


def true_coverage(procedure: LinearProcedure, design: Design, focus: Focus, world: World) -> tuple[float, float]:
    """Coverage and bias in SDs, from the eigenvalues of the n x n quadratic form."""
    n = design.n
    realised = world.on(design)
    A = design.estimator(focus.L)
    a = A[0]
    critical = procedure.critical(design, A, 1.0 - ALPHA)
    M = np.eye(n) - design.Q @ design.Q.T
    B = np.outer(a, a) - critical**2 * M @ procedure.form(design, A).times(M)
    shift = float(realised.target_shift(focus)[0])
    # Adding X b moves the estimate by L b and leaves the residuals: the question becomes whether 0 is covered.
    mean = (np.zeros(n) if realised.mean is None else realised.mean) - shift * design.X @ np.linalg.pinv(focus.L)[:, 0]
    values, vectors = np.linalg.eigh(realised.covariance(np.eye(n)))
    root = vectors * np.sqrt(np.maximum(values, 0.0)) @ vectors.T
    weights, axes = np.linalg.eigh(root @ B @ root)
    offset = np.linalg.solve(root, mean)
    noncentrality = (axes.T @ offset) ** 2
    bias = float(a @ mean) / float(np.sqrt(a @ realised.covariance(a[:, None])[:, 0]))
    return 1.0 - positive(weights, noncentrality), bias


def positive(weights: np.ndarray, noncentrality: np.ndarray) -> float:
    """P(sum w (z + d)^2 > 0) by the inversion of Gil-Pelaez, on an equally spaced grid of log t."""
    scale = np.abs(weights).max()
    x = np.linspace(-34.0, 34.0, 6001)
    t = np.exp(x)[:, None] / scale
    z = 1.0 - 2.0j * t * weights
    log_phi = np.sum(-0.5 * np.log(z) + 1j * t * weights * noncentrality / z, axis=1)
    return 0.5 + float(np.sum(np.exp(log_phi).imag) * (x[1] - x[0])) / np.pi


def main() -> int:
    """Run, print the table and the bars; 1 where a bar is short."""
    chosen = options(__doc__)
    started = time.perf_counter()
    cells, spent, looked = [], 0, 0
    asked = [(24, 0.3, "x"), (36, 0.6, "site[north]"), (60, 0.8, "x"), (100, 0.4, "mean at the middle")]
    for n, tail, focal in asked[: 2 if chosen.quick else 4]:
        found, replicates, distinct = run(study(n, tail, focal))
        cells += found
        spent += replicates
        looked += distinct
    wrong = [c for c in cells if c["verdict"] != "unsettled" and c["verdict"] != c["truth"]]
    unsettled = [c for c in cells if c["verdict"] == "unsettled"]
    saved = looked * MOST / spent
    print(f"{len(cells)} cells in {time.perf_counter() - started:.0f} s")
    for truth in ("holds", "gives"):
        mine = [c for c in cells if c["truth"] == truth]
        told = {verdict.value: sum(c["verdict"] == verdict for c in mine) for verdict in Verdict}
        print(f"truth {truth}: {len(mine)} cells, judged {told}")
    near = sum(abs(c["coverage"] - 0.94) < 0.002 for c in cells)
    print(
        f"{near} cells within 0.2 % of the bound; largest distance of an unsettled cell from it: "
        f"{max((abs(c['coverage'] - 0.94) for c in unsettled), default=0.0):.5f}"
    )
    for cell in wrong:
        print("wrong:", cell)
    print(f"{spent:,} replicates spent; fixed at the cap: {looked * MOST:,}")
    bars = Bars(chosen)
    bars.at_least("verdict-cells", len(cells), 300 if chosen.quick else 500)
    bars.at_most("verdict-wrong-share", len(wrong) / len(cells), DELTA)
    print(f"a fixed run at the cap spends {saved:.2f} times as much")
    if not chosen.quick:
        # Cells near the bound take nearly all the work, and two studies hold too few of them for the ratio to say much.
        bars.at_least("verdict-replicates-saved", saved, 5.0)
    return bars.close()


def run(asked: Study) -> tuple[list[dict[str, object]], int, int]:
    """Judge every cell of a study by simulation alone; also replicates spent and worlds with procedures simulated."""
    plan = Plan(axes(), PROCEDURES, TOLERANCE, seed=11, repetitions=FIRST, most=MOST, wrong_verdict=DELTA, method="simulated")
    grid = Grid(asked, plan)
    with open_bench(grid, Effort()) as bench:
        evidence = gather(grid, bench)
    bounds = aspects_of(TOLERANCE, ALPHA)
    cells: list[dict[str, object]] = []
    for cell in evidence.cells:
        judgement = evidence.verdict(cell)
        if judgement is None or judgement.exact:
            raise TypeError("every cell of this benchmark is simulated")
        world = grid.world(cell.spot)
        coverage, bias = true_coverage(PROCEDURES[cell.procedure_index], asked.design, cell.focus, world)
        holds = coverage >= bounds["coverage"].low and abs(bias) <= bounds["bias_in_sd"].high
        cells.append(
            {
                "study": asked.name,
                "world": world.key,
                "procedure": cell.procedure.identity,
                "focus": cell.focus.name,
                "coverage": coverage,
                "bias_in_sd": bias,
                "truth": "holds" if holds else "gives",
                "verdict": judgement.verdict.value,
            }
        )
    spent = {(cell.spot.world, cell.procedure_index): tally.replicates for cell, tally in evidence.tallies.items()}
    return cells, sum(spent.values()), len(spent)


if __name__ == "__main__":
    sys.exit(main())
