import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from withstand.engine.tally import FEATURES, Feature, Questions, Tally, record
from withstand.errors import NumericalError
from withstand.procedures.fit import IntervalFit, WaldFit


def random_pair(seed, width=7):
    return np.random.default_rng(seed).integers(0, 3, (2 * FEATURES, width)).astype(float)


@given(st.lists(st.integers(0, 2**32 - 1), min_size=2, max_size=5), st.randoms())
@settings(max_examples=30)
def test_tallies_add_in_any_order(seeds, random):
    """Whole-number features make the sums exact, so associativity can be asked for to the last bit."""
    tallies = [Tally.of_block(random_pair(seed), fresh=False) for seed in seeds]
    shuffled = random.sample(tallies, len(tallies))
    left = sum(tallies[1:], tallies[0])
    right = sum(shuffled[1:], shuffled[0])
    assert left.replicates == right.replicates == 7 * len(seeds)
    assert np.array_equal(left.products, right.products)


@given(st.integers(0, 2**32 - 1), st.booleans())
@settings(max_examples=20)
def test_pack_and_unpack(seed, fresh):
    tally = Tally.of_block(np.random.default_rng(seed).standard_normal((2 * FEATURES, 9)), fresh)
    back = Tally.unpack(tally.pack())
    assert (back.replicates, back.units) == (tally.replicates, tally.units)
    upper = np.triu_indices(2 * FEATURES)
    assert np.array_equal(back.products[upper], tally.products[upper])


def test_values_that_are_not_finite_are_refused():
    pair = random_pair(1)
    pair[Feature.ERROR, 0] = np.nan
    with pytest.raises(NumericalError, match="not finite"):
        Tally.of_block(pair, fresh=False)


def test_features_of_an_interval():
    """Estimates 0, 1, 3 with half width 1 around a truth of 1.5: too low, covering, too high."""
    estimate = np.array([[0.0, 1.0, 3.0]])
    fit = WaldFit(estimate, None, np.full((1, 1, 3), 0.25), 2.0)
    out = np.empty((FEATURES, 3))
    record(out, fit, Questions(np.array([1.5]), np.array([1.5]), np.array([0.5])))
    assert out[Feature.BELOW].tolist() == [1, 0, 0]
    assert out[Feature.COVERED].tolist() == [0, 1, 0]
    assert out[Feature.ABOVE].tolist() == [0, 0, 1]
    assert out[Feature.REJECTED].tolist() == [1, 0, 1]
    assert out[Feature.POWERED].tolist() == [0, 0, 1]
    assert out[Feature.ERROR].tolist() == [-1.5, -0.5, 1.5]
    assert out[Feature.WIDTH].tolist() == [2, 2, 2]


def test_a_failure_covers_nothing_and_rejects_nothing():
    failed = np.array([False, True])
    fit = IntervalFit(np.array([[0.0, 0.0]]), failed, low=np.array([-1.0, -1.0]), high=np.array([1.0, 1.0]))
    out = np.empty((FEATURES, 2))
    record(out, fit, Questions(np.zeros(1), np.zeros(1), np.array([5.0])))
    assert out[:, 1].tolist() == [1.0] + [0.0] * (FEATURES - 1)
    assert out[Feature.OK, 0] == out[Feature.COVERED, 0] == out[Feature.POWERED, 0] == 1.0


def test_unit_scales_lengths():
    fit = WaldFit(np.array([[6.0]]), None, np.full((1, 1, 1), 4.0), 2.0)
    out = np.empty((FEATURES, 1))
    record(out, fit, Questions(np.array([2.0]), None, None, unit=2.0))
    assert out[Feature.ERROR, 0] == 2.0
    assert out[Feature.SQUARE, 0] == 4.0
    assert out[Feature.VARIANCE, 0] == 1.0
    assert out[Feature.WIDTH, 0] == 4.0
