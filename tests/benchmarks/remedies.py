"""How fast the remedies are a replicate, against a statsmodels loop; n = 100, p = 5, normal errors.

    python tests/benchmarks/remedies.py [--json FILE] [--quick]

Everything is paired in one run on one thread: block and loop take turns, and the median of the ratios of their processor
times counts, so that other work on the machine matters less. Both get the same errors, drawn before; timed are the fit, its
interval for one coefficient and whether that covers.
"""

from __future__ import annotations

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import statistics
import sys
import time
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import statsmodels.api as sm
from statsmodels.robust import norms

sys.path.insert(0, str(Path(__file__).parent))
from bars import Bars, options

from withstand.engine.job import block_width
from withstand.engine.noise import BlockNoise
from withstand.procedures import make_procedure
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus

N, P, GROUPS = 100, 5, 20
NAMES = ("Intercept", *(f"x{i}" for i in range(1, P)))
Interval = tuple[float, float]


def make_design() -> Design:
    """A random design with an order and 20 groups."""
    X = np.column_stack([np.ones(N), np.random.default_rng(1).standard_normal((N, P - 1))])
    rows = np.arange(N)
    return Design(X, NAMES, columns={"x1": X[:, 1]}, order=rows.astype(float), groups=(rows * GROUPS // N).astype(np.int64))


def hac(y: np.ndarray, X: np.ndarray) -> Interval:
    """Newey-West with four lags."""
    options = {"maxlags": 4, "use_correction": True}
    return tuple(sm.OLS(y, X).fit(cov_type="HAC", cov_kwds=options, use_t=True).conf_int()[1])


def prais_winsten(y: np.ndarray, X: np.ndarray) -> Interval:
    """Iterated feasible least squares for AR(1)."""
    return tuple(sm.GLSAR(y, X, rho=1).iterative_fit(maxiter=50).conf_int()[1])


def huber(y: np.ndarray, X: np.ndarray) -> Interval:
    """Huber's M-estimate."""
    return tuple(sm.RLM(y, X, M=norms.HuberT()).fit().conf_int()[1])


def bisquare(y: np.ndarray, X: np.ndarray) -> Interval:
    """Tukey's bisquare."""
    return tuple(sm.RLM(y, X, M=norms.TukeyBiweight()).fit().conf_int()[1])


def lad(y: np.ndarray, X: np.ndarray) -> Interval:
    """Median regression with one sparsity."""
    return tuple(sm.QuantReg(y, X).fit(q=0.5, vcov="iid").conf_int()[1])


def fitted_weights(y: np.ndarray, X: np.ndarray) -> Interval:
    """Weights from the regression of the log squared residuals on the model."""
    logs = sm.OLS(np.log(sm.OLS(y, X).fit().resid ** 2), X).fit()
    return tuple(sm.WLS(y, X, weights=np.exp(-logs.fittedvalues)).fit().conf_int()[1])


LOOPS: dict[str, tuple[Callable[[np.ndarray, np.ndarray], Interval], float]] = {
    "hac": (hac, 400),
    "prais-winsten": (prais_winsten, 150),
    "huber": (huber, 150),
    "bisquare": (bisquare, 100),
    "lad": (lad, 100),
    "fitted-weights": (fitted_weights, 200),
}


class Block:
    """One procedure on blocks of one width."""

    def __init__(self, name: str, design: Design) -> None:
        self.design = design
        self.fitter = make_procedure(name).prepare(design, [Focus.coefficient("x1", NAMES)], 0.95)
        self.buffers: dict[str, np.ndarray] = {}

    def __call__(self, errors: np.ndarray, *, test: bool = False) -> tuple[float, float]:
        """Microseconds a replicate, and the share that covers."""
        width = errors.shape[1]
        start = time.thread_time()
        sample = Sample(self.design, errors, BlockNoise(1, 0, width), buffers=self.buffers)
        fit = self.fitter(sample)[0]
        missed = fit.misses(np.zeros(1))
        if test:
            fit.rejects(np.zeros(1))
        spent = time.thread_time() - start
        if missed is None:
            raise TypeError("every procedure timed here gives an interval")
        return spent / width * 1e6, 1.0 - float(np.mean(missed[0] | missed[1]))


def loop_time(fit: Callable[[np.ndarray, np.ndarray], Interval], X: np.ndarray, errors: np.ndarray) -> tuple[float, float]:
    """Microseconds a replicate, and the share that covers."""
    start = time.thread_time()
    covered = 0
    for b in range(errors.shape[1]):
        low, high = fit(errors[:, b], X)
        covered += low <= 0.0 <= high
    return (time.thread_time() - start) / errors.shape[1] * 1e6, covered / errors.shape[1]


def compare(bars: Bars, rounds: int, loops: int) -> None:
    """Block against loop, in turns."""
    design, rng = make_design(), np.random.default_rng(2)
    width = block_width(N)
    print(f"{'procedure':<16} {'block us':>9} {'loop us':>9} {'ratio':>7} {'covered':>8} {'by the loop':>12}")
    for name, (fit, needed) in LOOPS.items():
        block = Block(name, design)
        block(rng.standard_normal((N, width)))
        fast, slow, ratios, covered, covered_slow = [], [], [], [], []
        for _ in range(rounds):
            errors = rng.standard_normal((N, width))
            timings = [block(errors) for _ in range(3)]
            fast.append(statistics.median(spent for spent, _ in timings))
            covered.append(timings[0][1])
            spent, share = loop_time(fit, design.X, errors[:, :loops])
            slow.append(spent)
            covered_slow.append(share)
            ratios.append(spent / fast[-1])
        ratio = statistics.median(ratios)
        print(
            f"{name:<16} {statistics.median(fast):>9.2f} {statistics.median(slow):>9.0f} {ratio:>7.0f} "
            f"{statistics.mean(covered):>8.4f} {statistics.mean(covered_slow):>12.3f}"
        )
        bars.at_least(f"{name} against a statsmodels loop", ratio, needed)


def resampling_and_clusters(bars: Bars, rounds: int) -> None:
    """CR2 against CR1, and the wild bootstrap by itself."""
    design, rng = make_design(), np.random.default_rng(3)
    width = block_width(N)
    cr1, cr2, wild = (Block(name, design) for name in ("cr1", "cr2", "wild-bootstrap"))
    ratios, intervals, tests = [], [], []
    for turn in range(rounds + 1):
        errors = rng.standard_normal((N, width))
        pairs = [(cr1(errors)[0], cr2(errors)[0]) for _ in range(6)][1:]
        spent = wild(errors)[0]
        both = wild(errors, test=True)[0]
        if turn:
            ratios.append(statistics.median(reduced / plain for plain, reduced in pairs))
            intervals.append(spent)
            tests.append(both)
    print(f"\n{'CR2 over CR1, 20 groups':<40} {statistics.median(ratios):>8.2f}")
    print(f"{'wild bootstrap (399), interval, us':<40} {statistics.median(intervals):>8.1f}")
    print(f"{'wild bootstrap (399), with the test, us':<40} {statistics.median(tests):>8.1f}")
    bars.at_most("CR2 over CR1 with 20 groups", statistics.median(ratios), 4.0)
    bars.at_most("wild bootstrap (399) interval, us a replicate", statistics.median(intervals), 250.0)


def main() -> int:
    """Print the tables and the bars."""
    chosen = options(__doc__)
    bars = Bars(chosen)
    rounds, loops = (3, 20) if chosen.quick else (7, 100)
    # Median regression in the loop runs out of rounds now and then, and says so.
    warnings.simplefilter("ignore")
    compare(bars, rounds, loops)
    resampling_and_clusters(bars, rounds)
    return bars.close()


if __name__ == "__main__":
    sys.exit(main())
