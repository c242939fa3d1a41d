"""Log-linear models against statsmodels, one data set at a time."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from withstand.procedures import GammaLog, PoissonLog
from withstand.study.design import Design

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL = 0.9
FAMILIES = {"gamma-log": sm.families.Gamma(sm.families.links.Log()), "poisson-log": sm.families.Poisson()}


def response(kind, seed, name):
    """Positive with heavy tails for the gamma model; whole numbers with zeros for the Poisson model."""
    design, errors = make(kind, seed)
    mean = np.exp(1.0 + 0.3 * np.clip(design.X[:, 1:2], -4.0, 4.0))
    y = mean * np.exp(0.5 * np.clip(errors, -6.0, 6.0))
    return design, y if name == "gamma-log" else np.floor(y)


def fits_of(procedure, design, y, foci):
    return procedure.prepare(design, foci, LEVEL)(sample_of(design, y, coefficients=np.zeros(design.p)))


def reference(X, y, name):
    """Newton's method of statsmodels from its own starting values, dispersion by Pearson's statistic."""
    model = sm.GLM(y, X, family=FAMILIES[name])
    start = model.fit(maxiter=20, tol=1e-3).params
    return model.fit(start_params=start, maxiter=400, tol=1e-13, scale="X2")


@pytest.mark.filterwarnings("ignore::statsmodels.tools.sm_exceptions.ConvergenceWarning")  # of the rough first fit
@pytest.mark.parametrize("procedure", [GammaLog(), PoissonLog()], ids=lambda p: p.name)
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_agrees_with_statsmodels(kind, seed, procedure):
    design, y = response(kind, seed, procedure.name)
    foci = [slope(design), two_slopes(design), mean_at(design)]
    t_test, f_test, mean = fits_of(procedure, design, y, foci)
    compared = 0
    for b in range(y.shape[1]):
        if mean.failed is not None and mean.failed[b]:
            continue
        result = reference(design.X, y[:, b], procedure.name)
        t = stats.t.isf((1 - LEVEL) / 2, design.df)
        L, covariance = foci[2].L[0], result.cov_params()
        eta, half = L @ result.params, t * np.sqrt(L @ covariance @ L)
        expected = np.exp([eta, eta - half, eta + half])
        np.testing.assert_allclose([mean.estimate[0, b], mean.low[b], mean.high[b]], expected, rtol=1e-5)
        wald = result.params[1] / np.sqrt(covariance[1, 1])
        assert t_test.rejects(np.zeros(1))[b] == (abs(wald) > t)
        joint = foci[1].L @ result.params
        f = joint @ np.linalg.solve(foci[1].L @ covariance @ foci[1].L.T, joint) / 2
        assert f_test.rejects(np.zeros(2))[b] == (f > stats.f.isf(1 - LEVEL, 2, design.df))
        compared += 1
    # Failures are for sets that cannot be fitted, such as those below; some of the smallest sets of whole numbers are such.
    assert compared == y.shape[1] or (procedure.name == "poisson-log" and kind == "smallest" and compared >= 4)


@pytest.mark.parametrize("procedure", [GammaLog(), PoissonLog()], ids=lambda p: p.name)
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_the_score_equations_hold(kind, seed, procedure):
    """At the estimate X'(y - mu) = 0 (Poisson) or X'((y - mu)/mu) = 0 (gamma), to rounding."""
    design, y = response(kind, seed, procedure.name)
    c, converged = procedure.converge(design, y)
    mu = np.exp(design.Q @ c[:, converged])
    score = y[:, converged] - mu if procedure.name == "poisson-log" else y[:, converged] / mu - 1.0
    size = np.abs(score).sum(axis=0)
    assert np.abs(design.Q.T @ score).max(initial=0.0) <= 1e-9 * max(1.0, float(size.max(initial=0.0)))


def test_responses_outside_the_range_count_as_failures():
    design, y = response("plain", 1, "gamma-log")
    y[3, [0, 5]] = 0.0
    gamma = fits_of(GammaLog(), design, y, [slope(design)])[0]
    np.testing.assert_array_equal(np.flatnonzero(gamma.failed), [0, 5])
    assert not gamma.rejects(np.zeros(1))[[0, 5]].any()
    assert fits_of(PoissonLog(), design, y, [slope(design)])[0].failed is None
    y[3, 5] = -1.0
    np.testing.assert_array_equal(np.flatnonzero(fits_of(PoissonLog(), design, y, [slope(design)])[0].failed), [5])


def test_a_level_without_events_does_not_converge():
    """All zeros in one level send its mean to 0: no estimate exists."""
    n = 24
    level = (np.arange(n) % 3 == 0).astype(float)
    design = Design(np.column_stack([np.ones(n), level]), ("Intercept", "x1"))
    y = np.random.default_rng(2).poisson(3.0, (n, 6)).astype(float)
    y[level == 1.0, :3] = 0.0
    y[:, 5] = 0.0
    fit = fits_of(PoissonLog(), design, y, [slope(design)])[0]
    np.testing.assert_array_equal(fit.failed, [True, True, True, False, False, True])


def test_an_outlier_far_out_still_converges():
    """One response a million times the others: steps are halved instead of lost."""
    design, y = response("plain", 1, "gamma-log")
    y[5] *= 1e6
    for procedure, score in ((GammaLog(), lambda y, mu: y / mu - 1), (PoissonLog(), lambda y, mu: y - mu)):
        c, converged = procedure.converge(design, y)
        assert converged.all()
        mu = np.exp(design.Q @ c)
        assert np.abs(design.Q.T @ score(y, mu)).max() <= 1e-8 * np.abs(score(y, mu)).sum(axis=0).max()


def test_size_of_the_gamma_test_is_near_nominal_when_the_model_holds():
    n, count = 60, 4000
    rng = np.random.default_rng(5)
    design = Design(np.column_stack([np.ones(n), rng.standard_normal(n)]), ("Intercept", "x1"))
    y = rng.gamma(5.0, 1.0, (n, count))
    size = fits_of(GammaLog(), design, y, [slope(design)])[0].rejects(np.zeros(1)).mean()
    # A large-sample test at n = 60: 0.01 beside 4.5 Monte Carlo standard errors.
    assert size == pytest.approx(1 - LEVEL, abs=0.01 + 4.5 * np.sqrt(0.09 / count))


def test_a_new_response_has_no_law():
    design, _ = make("plain", 1)
    assert "no law for a new response" in GammaLog().not_applicable(design, new_at(design))
