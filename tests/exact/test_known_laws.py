"""Exact answers where the distribution is known in closed form."""

import numpy as np
import pytest
from scipy import optimize, special, stats

from withstand.departures import Curvature, World
from withstand.errors import InputError, NumericalError
from withstand.exact import can_be_exact, closed, contour, coverage, detectable_effect, moments, path, power
from withstand.exact.moments import Moments
from withstand.exact.problem import pose
from withstand.exact.tilt import Tilt
from withstand.procedures import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind, Point

from .cases import disturb, random_design

OLS = make_procedure("ols")


@pytest.fixture(autouse=True, params=["general", "closed form"])
def route(request, monkeypatch):
    """Every value is asked of the integrals too, which the closed form of the ideal model otherwise keeps from being asked."""
    if request.param == "general":
        monkeypatch.setattr(closed, "closed_form", lambda problem: None)
    return request.param


@pytest.fixture
def design():
    return random_design(np.random.default_rng(1), 20, 4)


def ideal(design):
    return World().on(design)


def coefficient(design):
    return Focus.coefficient("x1", design.names)


def joint(design):
    return Focus("all", FocusKind.JOINT, np.eye(4)[1:], np.zeros(3))


def standard_error(design):
    return float(np.sqrt(np.linalg.inv(design.X.T @ design.X)[1, 1]))


@pytest.mark.parametrize("level", [0.5, 0.9, 0.99, 1 - 1e-6, 1 - 1e-12])
def test_nothing_wrong_gives_the_nominal_level_small_rates_to_their_leading_digits(design, level):
    for focus in (coefficient(design), joint(design)):
        found = coverage(OLS, design, focus, ideal(design), level)
        assert found.size == pytest.approx(1 - level, rel=1e-7, abs=0)
        assert found.coverage == pytest.approx(level, abs=1e-12)
    found = coverage(OLS, design, coefficient(design), ideal(design), level)
    assert found.miss_below == pytest.approx(found.size / 2, rel=1e-7)
    assert found.miss_above == pytest.approx(found.size / 2, rel=1e-7)


def test_new_response_has_the_nominal_level(design):
    L = np.array([[1.0, 0.3, -2.0, 1.0]])
    new = Focus("new", FocusKind.NEW, L, np.zeros(1), point=Point())
    assert coverage(OLS, design, new, ideal(design), 0.9).size == pytest.approx(0.1, abs=1e-10)
    found = moments(OLS, design, new, ideal(design))
    leverage = float((L @ np.linalg.inv(design.X.T @ design.X) @ L.T)[0, 0])
    assert found.variance == pytest.approx(1 + leverage)
    assert found.se_ratio == pytest.approx(1.0)
    mean = Focus("mean", FocusKind.MEAN, L, np.zeros(1), point=Point())
    assert coverage(OLS, design, mean, ideal(design), 0.9).size == pytest.approx(0.1, abs=1e-10)
    assert moments(OLS, design, mean, ideal(design)).variance == pytest.approx(leverage)


def test_power_is_that_of_the_noncentral_t(design):
    shifts = np.array([0.0, 0.3, 1.0, 2.5, 4.0, 7.0, -2.5])
    critical = stats.t.isf(0.025, 16)
    expected = stats.nct.sf(critical, 16, shifts) + stats.nct.cdf(-critical, 16, shifts)
    found = power(OLS, design, coefficient(design), ideal(design), 0.95, shifts * standard_error(design))
    assert found == pytest.approx(expected, abs=1e-9)


def test_joint_power_is_that_of_the_noncentral_f(design):
    inverse = np.linalg.inv(design.X.T @ design.X)[1:, 1:]
    effects = np.array([[0.1, 0.2, -0.3], [0.5, 0.5, 0.5], [0.0, 0.0, 0.0]])
    noncentral = np.einsum("ei,ij,ej->e", effects, np.linalg.inv(inverse), effects)
    critical = stats.f.isf(0.05, 3, 16)
    expected = [stats.ncf.sf(critical, 3, 16, nc) if nc else 0.05 for nc in noncentral]
    assert power(OLS, design, joint(design), ideal(design), 0.95, effects) == pytest.approx(expected, abs=1e-9)


def test_a_miss_of_power_keeps_its_digits(design):
    """1 - power at a large effect, as the chance that the interval for a wrong value still covers it."""
    shift = 9.0
    problem = pose(OLS, design, coefficient(design), ideal(design), 0.95)
    found = contour.Inverter(problem).probabilities(problem.to_unit(np.array([[shift * standard_error(design)]])))
    # Given the chi, t within (-c, c) is a normal variable within an interval.
    chi = np.linspace(0.01, 12.0, 200_001)
    half = stats.t.isf(0.025, 16) * chi / 4.0
    inside = (stats.norm.cdf(half - shift) - stats.norm.cdf(-half - shift)) * stats.chi.pdf(chi, 16)
    assert found.within[0] == pytest.approx(np.sum(inside) * (chi[1] - chi[0]), rel=1e-6, abs=0)
    assert found.within[0] < 1e-6


@pytest.mark.parametrize("shift", [30.0, 1e3, 1e6])
def test_power_far_out_is_one(design, shift):
    assert power(OLS, design, coefficient(design), ideal(design), 0.95, np.array([shift * standard_error(design)])) == 1.0


def test_few_residual_degrees_of_freedom():
    """One degree of freedom: a noncentral t that is a ratio of normals, with tails that fall slowly."""
    design = random_design(np.random.default_rng(3), 5, 4)
    shifts = np.array([0.0, 1.0, 5.0, 50.0])
    half = stats.t.isf(0.025, 1)
    chi = np.linspace(0.0, 12.0, 400_001)[1:]
    inside = [stats.norm.cdf(half * chi - shift) - stats.norm.cdf(-half * chi - shift) for shift in shifts]
    weight = stats.chi.pdf(chi, 1) * (chi[1] - chi[0])
    found = power(OLS, design, coefficient(design), ideal(design), 0.95, shifts * standard_error(design))
    # The rectangle rule is off by half the weight at 0 times the width, where the interval is empty.
    assert found == pytest.approx(1 - np.array([np.sum(each * weight) for each in inside]), abs=1e-6)


@pytest.mark.parametrize("wanted", [0.5, 0.8, 0.95])
def test_detectable_effect_solves_the_noncentral_t(design, wanted):
    critical = stats.t.isf(0.025, 16)

    def short(shift):
        return stats.nct.sf(critical, 16, shift) + stats.nct.cdf(-critical, 16, shift) - wanted

    expected = optimize.brentq(short, 0.1, 6.0, xtol=1e-12) * standard_error(design)
    found = detectable_effect(OLS, design, coefficient(design), ideal(design), 0.95, power=wanted)
    assert found == pytest.approx(expected, rel=1e-7)


def test_detectable_effect_with_a_bias_reaches_the_power_wanted(design):
    rng = np.random.default_rng(2)
    for size in (0.3, 1.0, 1.0, 10.0, 1000.0):
        disturbance = disturb(design, mean=size * rng.standard_normal(20))
        focus = coefficient(design)
        found = detectable_effect(OLS, design, focus, disturbance, 0.95)
        at = power(OLS, design, focus, disturbance, 0.95, np.array([found, 1.5 * found]))
        assert at[0] == pytest.approx(0.8, abs=1e-7)
        assert at[1] > 0.8


def test_expected_width_is_that_of_a_chi(design):
    expected = 2 * stats.t.isf(0.025, 16) * standard_error(design) * stats.chi.mean(16) / 4.0
    assert coverage(OLS, design, coefficient(design), ideal(design), 0.95).width == pytest.approx(expected, rel=1e-8)


def test_two_groups_with_unequal_variances():
    """HC2 on two groups is Welch's statistic; V = s1^2/n1 + s2^2/n2, so E[sqrt V] is a double integral over two chi-squares."""
    X = np.column_stack([np.ones(9), np.repeat([0.0, 1.0], [4, 5])])
    design = Design(X, ("Intercept", "D"))
    disturbance = disturb(design, spread=np.repeat([1.0, 3.0], [4, 5]))
    v1, v2 = disturbance.spread[0] ** 2, disturbance.spread[-1] ** 2
    focus = Focus.coefficient("D", design.names)
    x, w = special.roots_genlaguerre(120, 0.5)
    y, u = special.roots_genlaguerre(120, 1.0)
    # Chi-squares with 3 and 4 degrees of freedom are twice gamma variables of shape 3/2 and 2.
    V = (v1 / 4 * 2 * x / 3)[:, None] + v2 / 5 * 2 * y / 4
    weight = np.outer(w / special.gamma(1.5), u / special.gamma(2.0))
    critical = stats.t.isf(0.025, 7)
    found = coverage(make_procedure("hc2"), design, focus, disturbance, 0.95)
    assert found.width == pytest.approx(2 * critical * np.sum(weight * np.sqrt(V)), rel=1e-6)
    spread = np.sqrt(v1 / 4 + v2 / 5)
    assert found.coverage == pytest.approx(np.sum(weight * (1 - 2 * stats.norm.sf(critical * np.sqrt(V) / spread))), abs=1e-6)


def test_tails_of_a_biased_estimate_are_noncentral_t_tails(design):
    """A shift within the model space leaves residuals alone, so each tail is one tail of a noncentral t."""
    focus = coefficient(design)
    shift = design.X @ np.array([0.0, 0.4, 0.0, 0.0])
    found = coverage(OLS, design, focus, disturb(design, mean=shift), 0.95)
    noncentrality = 0.4 / standard_error(design)
    critical = stats.t.isf(0.025, 16)
    assert found.miss_above == pytest.approx(stats.nct.sf(critical, 16, noncentrality), abs=1e-9)
    assert found.miss_below == pytest.approx(stats.nct.cdf(-critical, 16, noncentrality), abs=1e-9)


def test_large_sample_coverage():
    """2 Phi(z r) - 1 without bias (Scheffe 1959, section 10.2, has it for two groups), 0 with a bias that stays."""
    moments = Moments(0.0, 4.0, 1.0)
    assert moments.large_sample_coverage(0.95) == pytest.approx(1 - 2 * stats.norm.sf(stats.norm.isf(0.025) / 2))
    assert Moments(0.1, 4.0, 1.0).large_sample_coverage(0.95) == 0.0
    half = stats.norm.isf(0.025)
    kept = Moments(1.0, 4.0, 4.0, vanishing=False).large_sample_coverage(0.95)
    assert kept == pytest.approx(stats.norm.cdf(half - 0.5) - stats.norm.cdf(-half - 0.5))


def test_an_accuracy_that_is_not_reached_is_an_error(design, monkeypatch):
    monkeypatch.setattr(path, "_LEVELS", 1)
    monkeypatch.setattr(path, "_STEP", 4.0)
    with pytest.raises(NumericalError, match="was reached to"):
        coverage(make_procedure("hc3"), design, coefficient(design), ideal(design), 0.95)


def test_questions_without_an_answer(design):
    new = Focus("new", FocusKind.NEW, np.array([[1.0, 0.0, 0.0, 0.0]]), np.zeros(1), point=Point())
    with pytest.raises(InputError, match="no test and so no power"):
        power(OLS, design, new, ideal(design), 0.95, np.zeros(1))
    with pytest.raises(InputError, match="3 components"):
        detectable_effect(OLS, design, joint(design), ideal(design), 0.95)
    with pytest.raises(InputError, match="power is 1"):
        detectable_effect(OLS, design, coefficient(design), ideal(design), 0.95, power=1.0)


def test_reasons_against_exact_answers(design):
    assert can_be_exact(OLS, coefficient(design), ideal(design)) is None
    assert "not linear" in can_be_exact(make_procedure("huber"), coefficient(design), ideal(design))
    assert "not a quadratic form" in can_be_exact(make_procedure("hc3"), joint(design), ideal(design))
    assert can_be_exact(OLS, joint(design), ideal(design)) is None
    bare = Design(design.X, design.names)
    assert "no groups" in can_be_exact(make_procedure("cr1"), coefficient(bare), ideal(bare))


def test_no_integral_at_the_very_end_of_its_range():
    """The precision has eigenvalues 0.5 and 1, and at s = 0.25 nothing is left of the smaller one."""
    precision = np.array([[[0.75, 0.25], [0.25, 0.75]]] * 3)
    law = Tilt(np.zeros(3), precision, np.zeros((3, 2)))
    found = law.log_integral(np.array([0.0, 0.25, 0.26]), np.zeros((1, 2)))[0]
    assert found[0] == pytest.approx(-0.5 * np.log(0.5), rel=1e-12)
    assert not np.isfinite(found[1:]).any()


def test_a_bias_of_many_errors_that_inflates_the_interval_beyond_all_misses():
    """The integral fails where the saddle is at the end of its range; Chernoff's bound says that there is nothing to find."""
    lamp = np.tile([4.0, 8.0, 12.0, 16.0], 188)
    design = Design(np.column_stack([np.ones(752), lamp]), ("Intercept", "lamp"), columns={"lamp": lamp})
    disturbance = World(((Curvature(along="lamp"), 12.6),)).on(design)
    found = coverage(make_procedure("hc2-bm"), design, Focus.coefficient("lamp", design.names), disturbance, 0.99)
    assert found.coverage == 1.0
    assert found.size < 1e-100
    assert found.error < 1e-100
