from itertools import product

import numpy as np
import pytest

from withstand.departures import Fan, World, WorstFan
from withstand.errors import ScenarioError
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind


def exaggeration(design, a, spread):
    """True over claimed variance of a'y, both for errors of SD `spread`."""
    true = np.sum(a**2 * spread**2)
    claimed = a @ a * np.sum((1 - design.leverage) * spread**2) / design.df
    return true / claimed


def some_design(n, seed, p=2):
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), np.exp(rng.standard_normal((n, p - 1)))])
    return Design(X=X, names=tuple(f"c{i}" for i in range(p)), columns={"x": X[:, 1]})


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("ratio", [1.5, 5.0])
def test_no_two_valued_profile_does_worse(seed, ratio):
    design = some_design(9, seed, p=3)
    row = (0.3, 1.0, -0.5)
    a = design.estimator(np.array([row]))[0]
    worst = exaggeration(design, a, WorstFan(row=row).profile(design, ratio))
    brute = max(exaggeration(design, a, np.array(s)) for s in product([1.0, ratio], repeat=9))
    assert worst == pytest.approx(brute, rel=1e-12)


def test_no_profile_between_the_bounds_does_worse():
    design = some_design(50, 7)
    a = design.estimator(np.array([[0.0, 1.0]]))[0]
    worst = exaggeration(design, a, WorstFan(row=(0.0, 1.0)).profile(design, 3.0))
    rng = np.random.default_rng(2)
    others = [exaggeration(design, a, rng.uniform(1.0, 3.0, 50)) for _ in range(300)]
    others += [exaggeration(design, a, rng.choice([1.0, 3.0], 50)) for _ in range(300)]
    others.append(exaggeration(design, a, Fan(along="x").profile(design, 3.0)))
    assert worst > max(others) > 1.0


def test_a_new_response_counts_itself():
    design = some_design(8, 3)
    row = (1.0, 2.0)
    a = design.estimator(np.array([row]))[0]
    focus = Focus("at 2", FocusKind.NEW, np.array([row]), np.zeros(1))
    departure = WorstFan().for_focus(focus)
    assert (departure.new, departure.row, departure.against) == (True, row, "at 2")

    def ratio(s, own):
        claimed = (1 + a @ a) * np.sum((1 - design.leverage) * s**2) / design.df
        return (own**2 + np.sum(a**2 * s**2)) / claimed

    brute = max(ratio(np.array(s), own) for s in product([1.0, 2.0], repeat=8) for own in (1.0, 2.0))
    assert ratio(departure.profile(design, 2.0), departure.profile_at(design, None, 2.0)) == pytest.approx(brute)


def test_a_row_that_fits_itself_is_noisy_only_if_it_matters():
    X = np.column_stack([np.ones(6), np.arange(6.0), np.arange(6) == 2]).astype(float)
    design = Design(X=X, names=("Intercept", "x", "third"))
    assert design.saturated_rows.tolist() == [2]
    assert WorstFan(row=(0.0, 0.0, 1.0)).profile(design, 4.0)[2] == 4.0
    assert WorstFan(row=(0.0, 1.0, 0.0)).profile(design, 4.0)[2] == 1.0


def test_a_mean_alone_has_no_worst_profile():
    design = Design(X=np.ones((5, 1)), names=("Intercept",))
    assert "no spread profile" in WorstFan(row=(1.0,)).not_applicable(design)


def test_it_must_be_told_its_focal_quantity(line):
    with pytest.raises(ScenarioError, match=r"not been told which focal quantity.*against ="):
        World(((WorstFan(), 2.0),)).on(line)
    with pytest.raises(ScenarioError, match="row of length 3 for a model with 2 columns"):
        WorstFan(row=(1.0, 0.0, 0.0)).not_applicable(line)
    joint = Focus("both", FocusKind.JOINT, np.eye(2), np.zeros(2))
    with pytest.raises(ScenarioError, match="focus 'both' has 2"):
        WorstFan().for_focus(joint)
