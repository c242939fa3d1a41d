"""Exact answers against responses drawn here, fitted by least squares and judged one by one with plain formulas.

Tolerances are 4.5 Monte Carlo standard errors; with some 600 comparisons a false alarm has probability 0.004.
"""

import numpy as np
import pytest
from scipy import stats

from withstand.exact import coverage, moments, power
from withstand.study.focus import Focus, FocusKind

from .cases import DEPENDENCES, PROCEDURES, disturb, ingredients, random_case

REPLICATES = 40_000
ALLOWED = 4.5


def draw(rng, case):
    """Responses (n, replicates); a new response is their last row."""
    mean, covariance, *_ = ingredients(case)
    return mean[:, None] + np.linalg.cholesky(covariance) @ rng.standard_normal((len(mean), REPLICATES))


def agree(found, hits):
    """Whether a probability agrees with the mean of 0/1 outcomes."""
    return abs(np.mean(hits) - found) <= ALLOWED * np.sqrt(found * (1 - found) / len(hits))


@pytest.mark.parametrize("kind", DEPENDENCES)
@pytest.mark.parametrize("procedure", PROCEDURES)
def test_cells(procedure, kind):
    rng = np.random.default_rng([41, len(procedure), len(kind)])
    new = kind == "clusters" and procedure != "known-weights"
    case = random_case(rng, 24, 3, procedure, kind, mean=kind != "none", new=new)
    _, _, a, K, critical = ingredients(case)
    Y = draw(rng, case)
    estimates = a @ Y
    claimed = np.einsum("ib,ib->b", Y, K @ Y)
    half = critical * np.sqrt(claimed)
    found = coverage(*case.ask)
    assert agree(found.coverage, np.abs(estimates) <= half)
    assert agree(found.miss_below, estimates + half < 0)
    assert agree(found.miss_above, estimates - half > 0)
    widths = 2 * half
    assert abs(widths.mean() - found.width) <= ALLOWED * widths.std() / np.sqrt(REPLICATES)
    second = moments(*case.ask[:-1])
    sd = estimates.std()
    assert abs(estimates.mean() - second.bias) <= ALLOWED * sd / np.sqrt(REPLICATES)
    squares = (estimates - second.bias) ** 2
    assert abs(squares.mean() - second.variance) <= ALLOWED * squares.std() / np.sqrt(REPLICATES)
    assert abs(claimed.mean() - second.claimed_variance) <= ALLOWED * claimed.std() / np.sqrt(REPLICATES)
    if not new:
        effect = 2.5 * case.unit
        assert agree(power(*case.ask, np.array([effect]))[0], np.abs(estimates + effect) > half)


@pytest.mark.parametrize("kind", DEPENDENCES)
def test_joint_region_and_power(kind):
    rng = np.random.default_rng([43, len(kind)])
    case = random_case(rng, 24, 4, "ols", kind, mean=True)
    L = rng.standard_normal((2, 4))
    Y = draw(rng, case)
    X = case.design.X
    A = L @ np.linalg.solve(X.T @ X, X.T)
    residuals = Y - X @ np.linalg.solve(X.T @ X, X.T @ Y)
    inverse = np.linalg.inv(A @ A.T)

    def statistic(effect):
        off = A @ Y + effect[:, None]
        return np.einsum("kb,kl,lb->b", off, inverse, off) / 2 / (np.sum(residuals**2, axis=0) / 20)

    focus = Focus("two", FocusKind.JOINT, L, np.zeros(2))
    critical = stats.f.isf(0.05, 2, 20)
    assert agree(
        coverage(case.procedure, case.design, focus, case.disturbance, 0.95).coverage, statistic(np.zeros(2)) <= critical
    )
    effect = np.array([1.0, -2.0]) * np.sqrt(np.diag(A @ A.T))
    found = power(case.procedure, case.design, focus, case.disturbance, 0.95, effect[None])[0]
    assert agree(found, statistic(effect) > critical)


@pytest.mark.parametrize("procedure", ["ols", "hc3", "cr1"])
def test_moments_hold_for_errors_that_are_not_normal(procedure):
    """Bias, true and claimed variance only take the first two moments of the errors: here exponential and uniform ones."""
    rng = np.random.default_rng(47)
    case = random_case(rng, 24, 3, procedure, "none")
    spread = case.disturbance.spread[:, None]
    found = moments(case.procedure, case.design, case.focus, disturb(case.design, spread=case.disturbance.spread))
    _, _, a, K, _ = ingredients(case)
    shape = (24, REPLICATES)
    for u in (rng.exponential(size=shape) - 1.0, rng.uniform(-np.sqrt(3), np.sqrt(3), shape)):
        Y = spread * u
        squares, claimed = (a @ Y) ** 2, np.einsum("ib,ib->b", Y, K @ Y)
        assert abs(squares.mean() - found.variance) <= ALLOWED * squares.std() / np.sqrt(REPLICATES)
        assert abs(claimed.mean() - found.claimed_variance) <= ALLOWED * claimed.std() / np.sqrt(REPLICATES)
