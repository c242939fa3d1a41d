"""Test statistics over critical values, for every shape of fit: above 1 exactly where the test rejects."""

import numpy as np
import pytest

from withstand.diagnostics.pretest import ChosenFit
from withstand.procedures.fit import IntervalFit, WaldFit

RNG = np.random.default_rng(2)
COUNT = 200
ESTIMATE = RNG.standard_normal((1, COUNT))
WALD = WaldFit(ESTIMATE, None, RNG.exponential(size=(1, 1, COUNT)), 1.3)
LOPSIDED = IntervalFit(ESTIMATE, None, ESTIMATE[0] - RNG.exponential(size=COUNT), ESTIMATE[0] + 3 * RNG.exponential(size=COUNT))
ROOTS = RNG.standard_normal((2, 2, COUNT))
JOINT = WaldFit(RNG.standard_normal((2, COUNT)), None, np.einsum("ijb,kjb->ikb", ROOTS, ROOTS), 2.0)
CHOSEN = ChosenFit(ESTIMATE, None, RNG.random(COUNT) < 0.5, WALD, LOPSIDED)


@pytest.mark.parametrize("fit", [WALD, LOPSIDED, JOINT, CHOSEN], ids=["wald", "lopsided", "joint", "chosen"])
def test_above_one_where_it_rejects(fit):
    for value in (-1.0, 0.0, 0.7):
        asked = np.full(len(fit.estimate), value)
        ratio, rejected = fit.ratio(asked), fit.rejects(asked)
        np.testing.assert_array_equal(ratio > 1.0, rejected)
        assert 0 < rejected.sum() < COUNT


def test_twice_the_critical_value_halves_the_ratio():
    wider = WaldFit(WALD.estimate, None, WALD.covariance, 2.6)
    np.testing.assert_allclose(wider.ratio(np.zeros(1)), WALD.ratio(np.zeros(1)) / 2.0)
    np.testing.assert_allclose(
        WaldFit(JOINT.estimate, None, JOINT.covariance, 4.0).ratio(np.zeros(2)), JOINT.ratio(np.zeros(2)) / 2.0
    )


def test_an_interval_without_width_rejects_all_but_its_estimate():
    fit = WaldFit(np.array([[0.0, 1.0]]), None, np.zeros((1, 1, 2)), 2.0)
    np.testing.assert_array_equal(fit.ratio(np.zeros(1)), [0.0, np.inf])


def test_a_test_of_its_own_has_no_ratio():
    low, high = ESTIMATE[0] - 1.0, ESTIMATE[0] + 1.0
    fit = IntervalFit(ESTIMATE, None, low, high, test=lambda value: low > value[0])
    assert fit.ratio(np.zeros(1)) is None
    assert ChosenFit(ESTIMATE, None, np.ones(COUNT, dtype=bool), WALD, fit).ratio(np.zeros(1)) is None
