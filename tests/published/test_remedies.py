"""Robust and feasible fits on open data, and efficiencies known in closed form."""

from itertools import pairwise

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import integrate, stats

from withstand.departures import Serial
from withstand.procedures import Bisquare, Gls, Huber, PraisWinsten, make_procedure
from withstand.procedures.reweighting import mad
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus

from .simulation import ALLOWED, agrees, coefficient, line, simulate

MACRO = sm.datasets.macrodata.load_pandas().data
STACK = sm.datasets.stackloss.load_pandas()


def fit(procedure, X, y, names):
    """Estimates and standard errors of every coefficient, from a block of one replicate."""
    design = Design(X, names, order=np.arange(len(y), dtype=float))
    foci = [Focus.coefficient(name, names) for name in names]
    fits = procedure.prepare(design, foci, 0.95)(Sample(design, y[:, None], noise=None))
    assert fits[0].failed is None or not fits[0].failed.any()
    return np.array([f.estimate[0, 0] for f in fits]), np.array([np.sqrt(f.variance[0]) for f in fits])


def stack_loss(procedure):
    X = np.column_stack([np.ones(21), STACK.exog.to_numpy()])
    y = STACK.endog.to_numpy()
    b, se = fit(procedure, X, y, ("Intercept", "air", "water", "acid"))
    return b, se, y - X @ b


# Serial correlation


def test_prais_winsten_two_step_on_the_okun_regression():
    """Difference of unemployment on growth, macrodata of statsmodels, n = 202 (independent; values of another implementation):
    rho .3026, two-step slope -.05063, SE .004897."""
    y = np.diff(MACRO["unemp"])
    X = np.column_stack([np.ones(len(y)), 400 * np.diff(np.log(MACRO["realgdp"]))])
    b, se = fit(PraisWinsten(iterate=False), X, y, ("Intercept", "growth"))
    assert b[1] == pytest.approx(-0.05063, abs=5e-6)
    assert se[1] == pytest.approx(0.004897, abs=5e-7)
    # Given the rho of the two-step fit, least squares with known correlation is that same fit.
    known, known_se = fit(Gls(rho=0.30260486), X, y, ("Intercept", "growth"))
    assert known[1] == pytest.approx(b[1], abs=1e-9)
    assert known_se[1] == pytest.approx(se[1], abs=1e-9)


def test_variance_of_gls_against_ols():
    """Line on x = 1..20, AR(1) errors, rho = .6 (closed; worked example in 'Regression: From Projection to Distribution',
    chapter 19): Var(GLS)/Var(OLS) = .9055 for the slope. Least squares that know rho have it; the simulated fits follow."""
    design = line(20)
    R = 0.6 ** np.abs(np.subtract.outer(np.arange(20), np.arange(20)))
    a = np.linalg.pinv(design.X)[1]
    ratio = np.linalg.inv(design.X.T @ np.linalg.solve(R, design.X))[1, 1] / (a @ R @ a)
    assert ratio == pytest.approx(0.9055, abs=5e-5)
    focus = coefficient(design, "x")
    found = simulate(design, focus, ((Serial(), 0.6),), ["ols", Gls(rho=0.6)], replicates=20_000)
    sd = {name: measures["empirical_sd"] for name, measures in found.items()}
    names = list(found)
    error = 2 * ratio * np.sqrt(sum((sd[name].mc_se / sd[name].value) ** 2 for name in names))
    assert abs((sd[names[1]].value / sd[names[0]].value) ** 2 - ratio) < ALLOWED * error
    assert agrees(found[names[1]]["coverage"], 0.95)


# Robust fits


def test_huber_on_stack_loss():
    """Coefficients, SE and scale from another package, which stops early (tolerance 1e-4) and divides the variance of psi' in
    the covariance by n - 1, where statsmodels and this program divide by n."""
    b, se, r = stack_loss(Huber())
    np.testing.assert_allclose(b, [-41.0265, 0.829384, 0.926066, -0.127847], rtol=1e-4)
    scale = mad(np.abs(r)[None])[0]
    assert scale == pytest.approx(2.44071, rel=1e-4)
    slope = (np.abs(r) <= 1.345 * scale).astype(float)
    K = [1 + 4 / 21 * np.var(slope, ddof=ddof) / slope.mean() ** 2 for ddof in (0, 1)]
    np.testing.assert_allclose(se * K[1] / K[0], [9.80735, 0.111180, 0.303408, 0.128853], rtol=1e-4)


@pytest.mark.parametrize("name", ["lad", "lad-kernel"])
def test_median_regression_on_stack_loss(name):
    """Least absolute deviations on stack loss (independent; quoted to the digits shown)."""
    b, _, r = stack_loss(make_procedure(name))
    np.testing.assert_allclose(b, [-39.68986, 0.831884, 0.573913, -0.060870], atol=6e-6)
    assert np.sum(np.abs(r) < 1e-9) == 4


# Efficiencies


@pytest.mark.parametrize("procedure", [Huber(), Bisquare(c=4.6851)], ids=["huber", "bisquare"])
def test_efficiency_at_the_normal_in_closed_form(procedure):
    """(E psi')^2 / E psi^2 = 95 % at the constants in use (closed: Huber 1981; Holland & Welsch 1977)."""

    def mean(g):
        edges = sorted({0.0, procedure.tuning, 12.0})
        parts = [integrate.quad(lambda u: g(u) * stats.norm.pdf(u), low, high)[0] for low, high in pairwise(edges)]
        return 2 * sum(parts)

    def value(function, u):
        return function(np.array([u]), np.empty(1))[0]

    slope = mean(lambda u: value(procedure.slope, u))
    square = mean(lambda u: (u * value(procedure.weights, u)) ** 2)
    assert slope**2 / square == pytest.approx(0.95, abs=5e-5)


LAWS = {
    "normal": (lambda rng, size: rng.standard_normal(size), 2 / np.pi),
    "t3": (lambda rng, size: rng.standard_t(3, size) / np.sqrt(3), 1.6211),
    "t5": (lambda rng, size: rng.standard_t(5, size) / np.sqrt(5 / 3), 0.9607),
    "laplace": (lambda rng, size: rng.laplace(0, np.sqrt(0.5), size), 2.0),
}


@pytest.mark.parametrize("law", LAWS)
def test_median_against_mean(law):
    """Var(mean)/Var(median) in large samples, errors of variance 1 (closed): 4 f(0)^2. With 2001 rows what is left of order
    1/sqrt(n) in the variance of the median, for the peaked Laplace law, is below 2 %."""
    draw, efficiency = LAWS[law]
    n, replicates = 2001, 6000
    design = Design(np.ones((n, 1)), ("Intercept",))
    fitter = make_procedure("lad").prepare(design, [Focus.coefficient("Intercept", ("Intercept",))], 0.95)
    rng = np.random.default_rng(5)
    medians = np.concatenate(
        [fitter(Sample(design, draw(rng, (n, 500)), None))[0].estimate[0] for _ in range(replicates // 500)]
    )
    found = 1 / (n * np.mean(medians**2))
    slack = 0.02 if law == "laplace" else 0.0
    assert abs(found / efficiency - 1) < ALLOWED * np.sqrt(2 / replicates) + slack


@pytest.mark.parametrize("name", ["huber", "bisquare"])
def test_efficiency_of_slopes_in_simulation(name):
    """Var(OLS)/Var(M) of a slope with 400 rows and normal errors; the finite-sample part, of order p/n, is below 1 %."""
    rng = np.random.default_rng(6)
    n, replicates = 400, 6000
    X = np.column_stack([np.ones(n), rng.standard_normal(n)])
    design = Design(X, ("Intercept", "x"))
    foci = [Focus.coefficient("x", design.names)]
    fitters = [make_procedure(one).prepare(design, foci, 0.95) for one in ("ols", name)]
    pairs = []
    for _ in range(replicates // 500):
        sample = Sample(design, rng.standard_normal((n, 500)), None)
        pairs.append([fitter(sample)[0].estimate[0] for fitter in fitters])
    ols, robust = np.concatenate(pairs, axis=1)
    ratio = np.mean(ols**2) / np.mean(robust**2)
    # The two move together: the error of the ratio is that of the mean of the difference.
    error = np.std(ols**2 / np.mean(ols**2) - robust**2 / np.mean(robust**2)) / np.sqrt(replicates)
    assert abs(ratio / 0.95 - 1) < ALLOWED * error + 0.01
