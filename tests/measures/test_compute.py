"""Measures against plain formulas on the raw replicates, and their errors against the spread of repeated runs."""

import numpy as np
import pytest
from scipy import stats

from withstand.engine.tally import FEATURES, Feature, Questions, Tally, record
from withstand.measures.compute import MEASURES, clopper_pearson, measure
from withstand.procedures.fit import WaldFit

NAMES = list(MEASURES)


def simulate(generator, count, sd=1.0, fail=0.0):
    """Means of 5 normals with t intervals, and the same with errors of another SD: a world and its baseline."""
    data = generator.standard_normal((5, count))
    pair = np.empty((2 * FEATURES, count))
    failed = generator.random(count) < fail if fail else None
    raw = {}
    for half, scale in ((0, sd), (FEATURES, 1.0)):
        sample = 0.1 * (scale - 1.0) + data * np.array([scale, 1, 1, 1, 1])[:, None]
        estimate = sample.mean(axis=0)
        variance = sample.var(axis=0, ddof=1) / 5
        fit = WaldFit(estimate[None], failed, variance[None, None], stats.t.isf(0.025, 4))
        record(pair[half : half + FEATURES], fit, Questions(np.zeros(1), np.zeros(1), np.array([1.0])))
        raw[half] = estimate, variance
    return pair, raw


def test_values_are_the_plain_formulas():
    pair, raw = simulate(np.random.default_rng(1), 4000, sd=3.0)
    found = measure(Tally.of_block(pair, fresh=False), NAMES, unit=2.0)
    estimate, variance = raw[0]
    base, _ = raw[FEATURES]
    half = stats.t.isf(0.025, 4) * np.sqrt(variance)
    assert found["bias"].value == pytest.approx(2 * estimate.mean())
    assert found["bias"].shift == pytest.approx(2 * (estimate - base).mean())
    assert found["bias"].shift_se == pytest.approx(2 * (estimate - base).std(ddof=1) / np.sqrt(4000))
    assert found["bias"].mc_se == pytest.approx(2 * estimate.std(ddof=1) / np.sqrt(4000))
    assert found["empirical_sd"].value == pytest.approx(2 * estimate.std())
    assert found["claimed_sd"].value == pytest.approx(2 * np.sqrt(variance.mean()))
    assert found["se_ratio"].value == pytest.approx(np.sqrt(variance.mean()) / estimate.std())
    assert found["rmse"].value == pytest.approx(2 * np.sqrt(np.mean(estimate**2)))
    assert found["coverage"].value == np.mean(np.abs(estimate) <= half)
    assert found["size"].value == pytest.approx(1 - found["coverage"].value)
    assert found["miss_below"].value == np.mean(estimate < -half)
    assert found["power"].value == np.mean(np.abs(estimate - 1.0) > half)
    assert found["width"].value == pytest.approx(2 * 2 * half.mean())
    p = found["coverage"].value
    assert found["coverage"].mc_se == pytest.approx(np.sqrt(p * (1 - p) / 4000), rel=1e-3)


def test_paired_shift_has_the_error_of_discordant_replicates():
    """Variance (n10 + n01 - (n10 - n01)^2 / N) / N^2 of a difference of paired proportions."""
    pair, _ = simulate(np.random.default_rng(2), 3000, sd=2.0)
    found = measure(Tally.of_block(pair, fresh=False), ["coverage"])["coverage"]
    world, base = pair[Feature.COVERED], pair[FEATURES + Feature.COVERED]
    n10, n01 = np.sum((world == 1) & (base == 0)), np.sum((world == 0) & (base == 1))
    expected = np.sqrt((n10 + n01 - (n10 - n01) ** 2 / 3000) / 3000**2)
    assert found.shift == pytest.approx((n10 - n01) / 3000)
    assert found.shift_se == pytest.approx(expected, rel=1e-3)


def test_errors_match_the_spread_of_repeated_runs():
    """400 runs of 1000: an SD estimated from 400 values has relative error 1/sqrt(798); 5 of those are allowed."""
    generator = np.random.default_rng(3)
    runs = [measure(Tally.of_block(simulate(generator, 1000, 2.0, 0.05)[0], False), NAMES) for _ in range(400)]
    for name in NAMES:
        values = np.array([run[name].value for run in runs])
        claimed = np.sqrt(np.mean([run[name].mc_se ** 2 for run in runs]))
        assert claimed == pytest.approx(values.std(ddof=1), rel=5 / np.sqrt(798)), name
        shifts = np.array([run[name].shift for run in runs])
        if shifts.std() > 0:
            claimed = np.sqrt(np.mean([run[name].shift_se ** 2 for run in runs]))
            assert claimed == pytest.approx(shifts.std(ddof=1), rel=5 / np.sqrt(798)), name


def test_fresh_designs_take_their_errors_from_the_blocks():
    generator = np.random.default_rng(4)
    blocks = [simulate(generator, 50, sd=1.0 + generator.random())[0] for _ in range(40)]
    tallies = [Tally.of_block(block, fresh=True) for block in blocks]
    found = measure(sum(tallies[1:], tallies[0]), ["coverage", "bias"])
    means = np.array([block[Feature.COVERED].mean() for block in blocks])
    assert found["coverage"].value == pytest.approx(means.mean())
    assert found["coverage"].mc_se == pytest.approx(means.std(ddof=1) / np.sqrt(40))
    errors = np.array([block[Feature.ERROR].mean() for block in blocks])
    assert found["bias"].mc_se == pytest.approx(errors.std(ddof=1) / np.sqrt(40), rel=1e-6)


def test_clopper_pearson_against_scipy():
    """scipy.stats.binomtest(...).proportion_ci(method='exact') is an independent implementation."""
    for hits, count in ((0, 20), (20, 20), (3, 50), (9500, 10000)):
        reference = stats.binomtest(hits, count).proportion_ci(0.95, method="exact")
        assert clopper_pearson(hits, count, 0.95) == pytest.approx((reference.low, reference.high), abs=1e-12)


def test_no_answer_at_all():
    pair = np.zeros((2 * FEATURES, 10))
    pair[[Feature.ONE, FEATURES]] = 1.0
    found = measure(Tally.of_block(pair, False), NAMES)
    assert found["failure_rate"].value == 1.0
    assert found["coverage"].value == 0.0
    assert "bias" not in found


def test_given_an_answer_against_a_simulation_of_its_own():
    """The failures are the replicates with the largest sample SD, so that those with an answer are another population."""
    rng = np.random.default_rng(8)
    count, t = 40_000, stats.t.isf(0.025, 4)

    def drawn():
        data = rng.standard_normal((5, count))
        return data.mean(axis=0), data.var(axis=0, ddof=1) / 5

    cut = stats.chi2.isf(0.4, 4) / 4 / 5
    estimate, variance = drawn()
    pair = np.zeros((2 * FEATURES, count))
    for half, failed in ((0, variance > cut), (FEATURES, None)):
        fit = WaldFit(estimate[None], failed, variance[None, None], t)
        record(pair[half : half + FEATURES], fit, Questions(np.zeros(1), np.zeros(1), np.array([1.0])))
    names = ["coverage", "size", "failure_rate", "coverage_given_answer", "size_given_answer"]
    found = measure(Tally.of_block(pair, fresh=False), names)
    other, spread = drawn()
    kept = spread <= cut
    covered = np.mean(np.abs(other[kept]) <= t * np.sqrt(spread[kept]))
    given = found["coverage_given_answer"]
    assert abs(given.value - covered) < 4.5 * np.hypot(given.mc_se, np.sqrt(covered * (1 - covered) / kept.sum()))
    assert given.value == pytest.approx(found["coverage"].value / (1 - found["failure_rate"].value))
    # Given the number of answers it is a plain proportion among them.
    answered = np.sum(variance <= cut)
    assert given.mc_se == pytest.approx(np.sqrt(given.value * (1 - given.value) / answered), rel=1e-3)
    assert given.low < given.value < given.high <= 1.0
    assert found["size_given_answer"].value == pytest.approx(1 - given.value)
    # Against all replicates of the baseline, where nothing failed.
    assert given.shift == pytest.approx(given.value - np.mean(np.abs(estimate) <= t * np.sqrt(variance)))
    nothing = measure(Tally.of_block(np.vstack([np.ones((1, 50)), np.zeros((2 * FEATURES - 1, 50))]), fresh=False), names)
    assert set(nothing) == {"coverage", "size", "failure_rate"}
