"""Size-adjusted power against the eigenvalues of matrices written out, with the critical value found there."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import brentq

from withstand.departures import Fan, World
from withstand.exact import adjusted_power, coverage, power
from withstand.procedures import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind

from .cases import dense_size, random_case


@pytest.mark.parametrize("kind", ["none", "serial", "clusters"])
@pytest.mark.parametrize("procedure", ["ols", "hc3", "cr1"])
@pytest.mark.parametrize("mean", [False, True])
def test_a_critical_value_of_the_nominal_size(procedure, kind, mean):
    """The level of intervals that cover 95 % there is found on the slow route; power at that level is the adjusted one."""
    case = random_case(np.random.default_rng([len(procedure), len(kind), mean]), 30, 3, procedure, kind, mean=mean)
    effects = np.array([1.0, 2.5]) * case.unit

    def at(logit):
        return replace(case, level=1.0 / (1.0 + np.exp(-logit)))

    level = brentq(lambda logit: dense_size(at(logit)) - 0.05, -3.0, 25.0, xtol=1e-9)
    expected = [dense_size(at(level), effect) for effect in effects]
    assert adjusted_power(*case.ask, effects) == pytest.approx(expected, abs=1e-6)


def test_a_test_of_nominal_size_keeps_its_power():
    rng = np.random.default_rng(3)
    X = np.column_stack([np.ones(25), np.exp(rng.standard_normal(25)), rng.standard_normal(25)])
    design = Design(X, ("Intercept", "x1", "x2"), columns={"x1": X[:, 1]})
    joint = Focus("slopes", FocusKind.JOINT, np.eye(3)[1:], np.zeros(2))
    for focus, effects in ((Focus.coefficient("x1", design.names), np.array([0.15])), (joint, np.array([[0.1, 0.2]]))):
        ask = make_procedure("ols"), design, focus, World().on(design), 0.95
        assert adjusted_power(*ask, effects) == pytest.approx(power(*ask, effects), abs=1e-7)
        fan = World(((Fan(along="x1"), 5.0),)).on(design)
        ask = *ask[:3], fan, 0.95
        # The fan makes the test reject too often, and part of its power comes from there.
        assert coverage(*ask).size > 0.06
        assert adjusted_power(*ask, effects)[0] < power(*ask, effects)[0] - 0.02
