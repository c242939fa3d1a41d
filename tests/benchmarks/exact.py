"""The exact answers: how long they take, how exact they are, and whether the simulator reproduces them.

    python tests/benchmarks/exact.py [--json FILE] [--quick]

Times are processor times on one thread, the least of several rounds. The accuracy is against eigenvalues of n x n matrices
written out from the formulas. The z-scores compare 200,000 replicates of a cell with its exact answer; every cell has a design,
a world and a seed of its own, so they are independent.
"""

from __future__ import annotations

import importlib
import statistics
import sys
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import numpy as np
from bars import Bars, options
from exact_cells import MEASURES, compare, control_variate_gains
from threadpoolctl import threadpool_limits

from withstand.departures import Clusters, Fan, Serial, World
from withstand.exact import coverage, power
from withstand.exact.contour import Inverter
from withstand.exact.modes import dense_modes
from withstand.exact.problem import pose
from withstand.procedures import make_procedure
from withstand.procedures.base import LinearProcedure
from withstand.procedures.hac import Hac
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind

LEVEL = 0.95


def regression(n: int) -> Design:
    """Five columns, groups of five."""
    X = np.column_stack([np.ones(n), np.random.default_rng(1).standard_normal((n, 4))])
    names = ("Intercept", "x1", "x2", "x3", "x4")
    return Design(X, names, columns={"x1": X[:, 1]}, groups=np.arange(n) // 5)


def trend(n: int) -> Design:
    """A line in time."""
    x = np.arange(1.0, n + 1)
    return Design(np.column_stack([np.ones(n), x]), ("Intercept", "x1"), order=x)


FAN = World(((Fan((3.0,), along="x1"), 3.0),))
SERIES = World(((Serial((0.6,)), 0.6),))
SHARED = World(((Clusters((0.3,)), 0.3),))
SETTINGS: dict[str, tuple[Callable[[int], Design], World, LinearProcedure]] = {
    "OLS, fan": (regression, FAN, make_procedure("ols")),
    "HC3, fan": (regression, FAN, make_procedure("hc3")),
    "OLS, AR(1), trend": (trend, SERIES, make_procedure("ols")),
    "HC3, AR(1), trend": (trend, SERIES, make_procedure("hc3")),
    "HAC lag 4, AR(1), trend": (trend, SERIES, Hac(lag=4)),
    "OLS, clusters": (regression, SHARED, make_procedure("ols")),
    "CR1, clusters": (regression, SHARED, make_procedure("cr1")),
}
LIMITS = {"OLS, fan": 3.0, "HC3, fan": 3.0, "OLS, AR(1), trend": 20.0, "HC3, AR(1), trend": 20.0}
"""Seconds allowed at 100,000 rows."""


def seconds(work: Callable[[], object], rounds: int) -> float:
    """Least processor time of a call."""
    times = []
    for _ in range(rounds):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def question(name: str, n: int) -> Callable[[], object]:
    """The coverage, both tails and the width of one cell, on a fresh design, so that nothing is remembered."""
    build, world, procedure = SETTINGS[name]

    def ask() -> object:
        design = build(n)
        focus = Focus.coefficient("x1", design.names)
        return coverage(procedure, design, focus, world.on(design), LEVEL)

    return ask


def dense(name: str, n: int) -> Callable[[], object]:
    """The same coverage by eigenvalues."""
    build, world, procedure = SETTINGS[name]

    def ask() -> object:
        design = build(n)
        problem = pose(procedure, design, Focus.coefficient("x1", design.names), world.on(design), LEVEL)
        return Inverter(problem, dense_modes(problem)).probabilities(np.zeros((1, 1)), sides=True)

    return ask


def peak(work: Callable[[], object]) -> float:
    """Largest memory in use during a call, in MB."""
    tracemalloc.start()
    work()
    _, most = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    return most / 1e6


def times(bars: Bars, quick: bool) -> None:
    """Time and memory against n."""
    sizes = (100, 1_000, 10_000, 100_000)
    print("seconds a cell, structured route: " + ", ".join(f"n = {n:,}" for n in sizes))
    for name in SETTINGS:
        taken = [seconds(question(name, n), 50 if n == 100 else 1 if quick else 3) for n in sizes]
        print(f"  {name:26}" + "".join(f"{t:12.4f}" for t in taken))
        if name in ("OLS, fan", "HC3, fan"):
            bars.at_most(f"milliseconds a cell, n=100 p=5, {name}", 1000 * taken[0], 10)
        if name in LIMITS:
            bars.at_most(f"seconds, n=100,000, {name}", taken[-1], LIMITS[name])
        bars.at_most(f"growth of the time from 10,000 to 100,000 rows, {name}", taken[-1] / taken[-2], 12)
    few = (100, 300, 1000) if quick else (100, 300, 1000, 2000)
    print("seconds a cell, eigenvalue route: " + ", ".join(f"n = {n:,}" for n in few))
    for name in ("HC3, fan", "HC3, AR(1), trend", "HAC lag 4, AR(1), trend"):
        print(f"  {name:26}" + "".join(f"{seconds(dense(name, n), 1):12.4f}" for n in few))
    print("peak memory, MB: n = 10,000, n = 100,000, growth")
    for name in SETTINGS:
        small, large = peak(question(name, 10_000)), peak(question(name, 100_000))
        print(f"  {name:26}{small:12.1f}{large:12.1f}{large / small:12.1f}")
        bars.at_most(f"growth of the memory from 10,000 to 100,000 rows, {name}", large / small, 12)


def accuracy(bars: Bars, quick: bool) -> None:
    """Largest difference from the eigenvalues over random cases."""
    sys.path.insert(0, str(Path(__file__).parents[1] / "exact"))
    cases = importlib.import_module("cases")
    rng = np.random.default_rng(99)
    count = 60 if quick else 400
    differences, claimed = [], []
    for _ in range(count):
        case = cases.any_case(rng, 500)
        found = coverage(*case.ask, width=False)
        differences.append(abs(found.size - cases.dense_size(case)))
        claimed.append(found.error)
        if case.focus.kind is not FocusKind.NEW:
            effect = float(rng.uniform(0.5, 5.0)) * case.unit
            differences.append(abs(power(*case.ask, np.array([effect]))[0] - cases.dense_size(case, effect)))
    worst = float(max(differences))
    print(f"{len(differences)} sizes and powers of {count} random cases: largest difference {worst:.1e}, ", end="")
    print(f"median {statistics.median(differences):.1e}; largest error claimed {max(claimed):.1e}")
    needed = 0.05 * 0.95 / max(worst, 1e-12) ** 2
    print(f"a simulation of a rate of 5 % would need {needed:.1e} replicates for a standard error of that size,")
    print(f"and {0.05 * 0.95 / 1e-7**2:.1e} for one of 1e-7")
    bars.at_most("largest difference from the eigenvalue route", worst, 1e-7)


def z_scores(bars: Bars, quick: bool) -> None:
    """The simulator against the exact answers."""
    cells, replicates = (320, 20_000) if quick else (320, 200_000)
    found = [comparison for seed in range(cells) for comparison in compare(1000 + seed, replicates)]
    print(f"z-scores of {cells} cells at {replicates:,} replicates each: count, mean, SD, largest")
    for name in MEASURES:
        z = np.array([c.z for c in found if c.measure == name])
        if not z.size:
            continue
        print(f"  {name:12}{z.size:6}{z.mean():9.3f}{z.std(ddof=1):8.3f}{np.abs(z).max():8.2f}")
        if name == "coverage":
            bars.at_least("cells with a z-score of the coverage", float(z.size), 300)
            bars.at_most("z-scores of the coverage, absolute mean", abs(float(z.mean())), 0.2)
            bars.at_most("z-scores of the coverage, distance of the SD from 1", abs(float(z.std(ddof=1)) - 1), 0.15)
    worst = max(found, key=lambda c: abs(c.z))
    print(f"  largest: {worst.z:.2f}, {worst.measure}, {worst.what}")
    bars.at_most("z-scores of all measures, largest", abs(worst.z), 4.5)


def gains(quick: bool) -> None:
    """What the known baseline is worth as a control variate."""
    print("control variate: variance of the plain coverage estimate over that of known baseline plus paired shift")
    for label, name, covered, gain in control_variate_gains(20_000 if quick else 100_000):
        print(f"  {label:24}{name:6}coverage {covered:.4f}   ratio {gain:7.2f}{'' if gain > 1 else '   (plain estimate used)'}")


def main() -> int:
    """Print the tables and the bars."""
    chosen = options(__doc__)
    bars = Bars(chosen)
    with threadpool_limits(1):
        times(bars, chosen.quick)
        accuracy(bars, chosen.quick)
        z_scores(bars, chosen.quick)
        gains(chosen.quick)
    return bars.close()


if __name__ == "__main__":
    sys.exit(main())
