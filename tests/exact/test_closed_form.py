"""The closed form of the ideal model against the integrals that answer everything else, and where it does not apply."""

from dataclasses import replace

import numpy as np
import pytest

from withstand.departures import World
from withstand.exact.closed import ClosedForm, answering_for, closed_form
from withstand.exact.contour import Inverter
from withstand.exact.moments import expected_claim
from withstand.exact.problem import pose
from withstand.exact.width import expected_root
from withstand.procedures import make_procedure
from withstand.study.focus import Focus, FocusKind, Point

from .cases import disturb, random_design

OLS = make_procedure("ols")
CASES = [(5, 4), (7, 2), (36, 5), (400, 6), (3000, 3)]


def foci(design, p):
    return Focus.coefficient("x1", design.names), Focus("all", FocusKind.JOINT, np.eye(p)[1:], np.zeros(p - 1))


@pytest.mark.parametrize("level", [0.5, 0.95, 1 - 1e-9])
@pytest.mark.parametrize(("n", "p"), CASES)
def test_closed_form_and_integrals_agree(n, p, level):
    design = random_design(np.random.default_rng(n), n, p)
    for focus in foci(design, p):
        problem = pose(OLS, design, focus, World().on(design), level)
        closed, general = closed_form(problem), Inverter(problem)
        effects = np.outer([0.0, 0.1, 1.0, 3.0, 9.0, 25.0], np.ones(problem.k) / np.sqrt(problem.k))
        one, other = closed.probabilities(effects), general.probabilities(effects)
        assert one.beyond == pytest.approx(other.beyond, abs=1e-9, rel=1e-7)
        assert one.within == pytest.approx(other.within, abs=1e-9)
        if problem.k == 1:
            one, other = (route.probabilities(np.zeros((1, 1)), sides=True) for route in (closed, general))
            assert [one.below[0], one.above[0]] == pytest.approx([other.below[0], other.above[0]], abs=1e-9, rel=1e-7)
            root = expected_root(problem, general.structure, expected_claim(problem))
            assert closed.expected_root() == pytest.approx(root, rel=1e-9)


def test_one_spread_for_all_rows_is_the_ideal_model_in_another_unit():
    design = random_design(np.random.default_rng(8), 30, 3)
    problem = replace(pose(OLS, design, foci(design, 3)[0], World().on(design), 0.95), spread=np.full(30, 2.0))
    effects = np.array([[0.0], [1.7]])
    closed, general = closed_form(problem), Inverter(problem)
    assert closed.probabilities(effects).beyond == pytest.approx(general.probabilities(effects).beyond, abs=1e-9)
    assert closed.expected_root() == pytest.approx(expected_root(problem, general.structure, expected_claim(problem)), rel=1e-9)


def test_what_has_no_closed_form():
    design = random_design(np.random.default_rng(8), 30, 3)
    focus = foci(design, 3)[0]

    def form(name="ols", focus=focus, **wrong):
        return closed_form(pose(make_procedure(name), design, focus, disturb(design, **wrong), 0.95))

    rng = np.random.default_rng(9)
    assert isinstance(form(), ClosedForm)
    assert form(spread=np.exp(rng.standard_normal(30))) is None
    assert form(mean=rng.standard_normal(30)) is None
    assert form(mean=design.X @ np.array([0.0, 0.4, 0.0])) is None
    assert form("hc3") is None
    assert form("cr1") is None
    new = Focus("new", FocusKind.NEW, np.array([[1.0, 0.3, -2.0]]), np.zeros(1), point=Point())
    assert form(focus=new) is None


def test_effects_beyond_its_sums_are_left_to_the_integrals():
    design = random_design(np.random.default_rng(8), 30, 3)
    problem = pose(OLS, design, foci(design, 3)[0], World().on(design), 0.95)
    assert isinstance(answering_for(problem, np.array([[31.0]])), ClosedForm)
    assert isinstance(answering_for(problem, np.array([[32.0]])), Inverter)
