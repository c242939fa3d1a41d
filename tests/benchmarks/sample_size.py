"""Are the numbers of rows right, do their intervals hold, and how long does an answer take?

Three parts. Normal errors: n and power against noncentral t and F. Exponential errors on designs with one far point: the n
from which they may be ignored against brute force, a fixed 400,000 replicates at each n by code that shares nothing with the
package.
Time: the default question on a planned trial with four lamp levels, two benches and a spread that grows with the level.

    python tests/benchmarks/sample_size.py [--json FILE] [--quick]
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass

import numpy as np
from bars import Bars, options
from scipy import optimize, stats

from withstand.departures.shape import Skew
from withstand.departures.spread import Fan
from withstand.departures.world import World
from withstand.judgement.tolerance import Tolerance
from withstand.lab.size_answer import SizeAnswer
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.sizing import size_study
from withstand.procedures.base import make_procedure
from withstand.study.columns import Levels
from withstand.study.design import Design
from withstand.study.focus import Focus
from withstand.study.growth import growth_of
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study
from withstand.study.rows import FixedRows
from withstand.study.study import Study

OLS = (make_procedure("ols"),)
EXPONENTIAL = World(((Skew(), 2.0),))
COVERAGE, TAILS = Tolerance(), Tolerance("bradley-liberal", tails=True)

DESIGNS = ((6, 30.0), (7, 50.0), (8, 100.0), (9, 25.0), (10, 40.0), (10, 15.0), (11, 60.0), (12, 35.0), (13, 80.0), (14, 45.0))
"""Rows and place of the far one; the others stand at 0, 1, 2, ..."""


def main() -> int:
    """Run the three parts, print the tables and the bars; 1 where a bar is short."""
    chosen = options(__doc__)
    bars = Bars(chosen)
    worst, wrong, questions = normal_errors()
    print(f"normal errors: {questions} questions, {wrong} with another n, largest difference of a power {worst:.1e}\n")
    bars.at_most("size-n-differs-from-noncentral", wrong, 0)
    bars.at_most("size-power-difference", worst, 1e-8)
    trials = far_points(DESIGNS[:3] if chosen.quick else DESIGNS, 100_000 if chosen.quick else 400_000)
    bars.at_least("size-agrees-with-brute-force", sum(trial.agrees for trial in trials), len(trials))
    if not chosen.quick:
        bars.at_least("size-brute-force-trials", len(trials), 20)
    seconds = lamp_trial()
    bars.at_most("size-default-seconds", seconds, 30)
    return bars.close()


def normal_errors() -> tuple[float, int, int]:
    """Largest difference of a power, questions with another n, and questions."""
    worst, wrong, questions = 0.0, 0, 0
    for k in (2, 4):
        for size in (0.2, 0.5, 0.8, 1.2):
            for alpha in (0.05, 0.01):
                arms = tuple("abcd"[:k])
                effect = [size] * (k - 1) if k > 2 else size
                study = planned_study(
                    StudyPlan(5 * k, {"arm": Levels(arms)}, error_sd=1.0), "y ~ arm", focus="arm", effect={"arm": effect},
                    level=1.0 - alpha,
                )  # fmt: skip
                # One arm lies `size` below all others.
                f2 = size**2 * (k - 1) / k**2
                for target in (0.8, 0.95):
                    answer = size_study(study, OLS, targets=Targets(holds=False, power=target))
                    powers = answer.curve[answer.curve["measure"] == "power"]
                    for n, value in zip(powers["n"], powers["value"], strict=True):
                        worst = max(worst, abs(value - noncentral(n, k, f2, alpha)))
                    n = 2 * k
                    while noncentral(n, k, f2, alpha) < target:
                        n += k
                    wrong += answer.n != n
                    questions += 1
    return worst, wrong, questions


def noncentral(n: int, k: int, f2: float, alpha: float) -> float:
    """Power of F for k arms of n/k rows; for two arms it is the square of t."""
    return float(stats.ncf.sf(stats.f.isf(alpha, k - 1, n - k), k - 1, n - k, n * f2))


@dataclass(frozen=True)
class Trial:
    """One question with both answers."""

    name: str
    n: int | None
    low: int
    high: int
    brute: int
    seconds: float

    @property
    def agrees(self) -> bool:
        """Whether the interval holds the answer of brute force."""
        return self.low <= self.brute <= self.high


def far_points(designs: tuple[tuple[int, float], ...], replicates: int) -> list[Trial]:
    """Two questions a design: coverage within 94 to 96 %, and each tail within half of 2.5 to 7.5 %."""
    trials = []
    print(f"exponential errors, one far point; brute force: {replicates:,} replicates at each n")
    for number, (rows, far) in enumerate(designs):
        study = far_study(rows, far)
        for label, tolerance in (("coverage", COVERAGE), ("tails", TAILS)):
            started = time.perf_counter()
            answer = size_study(study, OLS, (EXPONENTIAL,), tolerance=tolerance, effort=Effort(seed=100 + number))
            seconds = time.perf_counter() - started
            size = answer.sizes[0]
            brute = by_brute_force(study, label, answer, replicates, number)
            trial = Trial(f"{rows} rows, far {far:g}, {label}", size.n, size.low or 0, size.high or 0, brute, seconds)
            told = f"n {trial.n} ({trial.low} to {trial.high}) in {seconds:.1f} s, brute force {brute}"
            print(f"  {trial.name}: {told}{'' if trial.agrees else '   DIFFERS'}", flush=True)
            trials.append(trial)
    return trials


def far_study(rows: int, far: float) -> Study:
    """A line through 0, 1, 2, ... and one far point."""
    x = np.append(np.arange(rows - 1.0), far)
    design = Design(np.column_stack([np.ones(rows), x]), ("Intercept", "x"), columns={"x": x})
    focus = Focus.coefficient("x", design.names)
    return Study(f"{rows} {far}", "y ~ x", design, (focus,), np.zeros(2), 1.0, FixedRows(design), digest=f"{rows} {far}")


def by_brute_force(study: Study, asked: str, answer: SizeAnswer, replicates: int, seed: int) -> int:
    """The smallest n from which on the misses stay within bounds, over a stretch that holds any answer within reach."""
    growth = growth_of(study)
    rng = np.random.default_rng(seed)
    size = answer.sizes[0]
    if asked == "coverage":
        reach = np.arange(study.n, 3 * study.n)
    else:
        # Every third n, well beyond the interval on both sides; the misses fall with n, and are smoothed so.
        reach = np.arange(max(study.n, int(0.6 * (size.low or study.n))), int(1.5 * (size.high or study.n)), 3)
    below, above = np.array([misses(growth.at(int(n)).design.columns["x"], replicates, rng) for n in reach]).T
    if asked == "coverage":
        failing = np.flatnonzero(below + above > 0.06)
    else:
        # The interval misses above the truth least where errors are skew to the right at the far point.
        falling = [-optimize.isotonic_regression(-share).x for share in (below, above)]
        failing = np.flatnonzero(max(falling, key=lambda share: float(share.max())) > 0.0375)
    return int(reach[failing[-1] + 1]) if failing.size else int(reach[0])


def misses(x: np.ndarray, replicates: int, rng: np.random.Generator) -> tuple[float, float]:
    """Shares of 95 % t intervals for the slope that lie wholly below and above it, exponential errors."""
    n = len(x)
    centred = x - x.mean()
    a = centred / (centred @ centred)
    critical = stats.t.isf(0.025, n - 2)
    below = above = 0
    width = 2000
    for _ in range(replicates // width):
        errors = rng.standard_exponential((width, n)) - 1.0
        slope = errors @ a
        mean = errors.mean(axis=1)
        rss = np.einsum("ij,ij->i", errors, errors) - n * mean**2 - slope**2 * (centred @ centred)
        t = slope / np.sqrt(rss / (n - 2) * (a @ a))
        below += int((t < -critical).sum())
        above += int((t > critical).sum())
    return below / replicates, above / replicates


def lamp_trial() -> float:
    """Seconds of the default question, everything at its default but two workers."""
    columns = {"lamp": Levels((0.0, 4.0, 8.0, 12.0)), "bench": Levels(("south", "north"))}
    plan = StudyPlan(40, columns, {"Intercept": 20.0, "lamp": 0.5}, error_sd=3.0)
    study = planned_study(plan, "yield_g ~ lamp + bench", focus="lamp", effect={"lamp": 0.5})
    started = time.perf_counter()
    procedures = tuple(make_procedure(name) for name in ("ols", "hc3", "hc2-bm"))
    worlds = (World(((Fan(along="lamp"), 3.0),)),)
    answer = size_study(study, procedures, worlds, targets=Targets(power=0.9), effort=Effort(workers=2))
    seconds = time.perf_counter() - started
    print("\nlamp trial")
    for sentence in answer.sentences:
        print(f"  {sentence}")
    print(f"  {seconds:.1f} s")
    return seconds


if __name__ == "__main__":
    sys.exit(main())
