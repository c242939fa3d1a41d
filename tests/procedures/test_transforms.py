"""Transformed responses against plain fits of every data set."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from withstand.departures.base import NoiseStream
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.engine.noise import BlockNoise
from withstand.errors import ScenarioError
from withstand.measures.compute import measure
from withstand.procedures import BoxCox, LogResponse, SqrtResponse, make_procedure
from withstand.procedures.base import Answer
from withstand.procedures.transforms import likely_power
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind
from withstand.study.rows import FixedRows
from withstand.study.study import Study

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL = 0.9


def positive_response(kind, seed):
    """A positive response (n, 8): the exponential of a tamed error, with its ties."""
    design, errors = make(kind, seed)
    y = np.exp(0.3 + 0.4 * np.clip(errors, -6.0, 6.0) + 0.2 * np.clip(design.X[:, 1:2], -4.0, 4.0))
    return design, y


def fits_of(procedure, design, y, foci):
    zero = np.zeros(design.p)
    return procedure.prepare(design, foci, LEVEL)(sample_of(design, y, coefficients=zero, error_sd=1.0))


def log_likelihood(X, y, lam):
    """Profile log likelihood of the Box-Cox exponent, from its definition."""
    z = np.log(y) if lam == 0.0 else (y**lam - 1.0) / lam
    e = z - X @ np.linalg.lstsq(X, z, rcond=None)[0]
    return -len(y) / 2.0 * np.log(e @ e / len(y)) + (lam - 1.0) * np.sum(np.log(y))


def scale(name, y, lam=None):
    """Transformed response, inverse, and derivative of the transformation, from their definitions."""
    if name == "log-response":
        return np.log(y), np.exp, lambda m: 1.0 / m
    if name == "sqrt-response":
        return np.sqrt(y), lambda z: np.maximum(z, 0.0) ** 2, lambda m: 0.5 / np.sqrt(m)
    # Beyond the range of a negative power the response is infinite.
    inverse = lambda z: np.where(1.0 + lam * z > 0.0, np.abs(1.0 + lam * z) ** (1.0 / lam), 0.0 if lam > 0.0 else np.inf)  # noqa: E731  # three short inverses side by side
    return (y**lam - 1.0) / lam, inverse, lambda m: m ** (lam - 1.0)


@pytest.mark.parametrize("procedure", [LogResponse(), SqrtResponse(), BoxCox()], ids=lambda p: p.name)
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_agrees_with_statsmodels(kind, seed, procedure):
    design, y = positive_response(kind, seed)
    foci = [slope(design), two_slopes(design), new_at(design), mean_at(design)]
    t_test, f_test, new, mean = fits_of(procedure, design, y, foci)
    X = design.X
    powers = likely_power(design, np.log(y) - np.log(y).mean(axis=0)) if procedure.name == "box-cox" else [None] * y.shape[1]
    for b, lam in enumerate(powers):
        z, inverse, derivative = scale(procedure.name, y[:, b], lam)
        result = sm.OLS(z, X).fit()
        assert t_test.rejects(np.zeros(1))[b] == (result.pvalues[1] < 1 - LEVEL)
        assert f_test.rejects(np.zeros(2))[b] == (result.f_test(foci[1].L).pvalue < 1 - LEVEL)
        told = result.get_prediction(foci[2].L).summary_frame(alpha=1 - LEVEL)
        ends = [float(inverse(told[column].iloc[0])) for column in ("mean", "obs_ci_lower", "obs_ci_upper")]
        if np.isfinite(ends).all():
            np.testing.assert_allclose([new.estimate[0, b], new.low[b], new.high[b]], ends, rtol=1e-6, atol=1e-9)
        else:
            assert new.failed[b]
        smeared = float(np.mean(inverse(told["mean"].iloc[0] + result.resid)))
        if np.isfinite(smeared) and smeared > 0.0:
            spread = numerical_spread(design, result, inverse, foci[3].L[0])
            half = stats.t.isf((1 - LEVEL) / 2, design.df) * spread * derivative(smeared)
            centre = scale(procedure.name, np.array([smeared]), lam)[0][0]
            ends = [smeared, float(inverse(centre - half)), float(inverse(centre + half))]
            if np.isfinite(ends).all():
                np.testing.assert_allclose([mean.estimate[0, b], mean.low[b], mean.high[b]], ends, rtol=2e-4, atol=1e-6)
            else:
                assert mean.failed[b]


def numerical_spread(design, result, inverse, point):
    """SE of the smearing estimate: its numerical derivative in each error that moves coefficients, and its sampled part."""
    X, e, b = design.X, result.resid, result.params
    A = np.linalg.pinv(X)

    def smeared(coefficients):
        # Residuals follow the coefficients; the errors themselves stay.
        return np.mean(inverse(point @ coefficients + (result.model.endog - X @ coefficients)))

    step = 1e-6 * np.maximum(1.0, np.abs(b))
    moves = np.diag(step)
    gradient = np.array([smeared(b + move) - smeared(b - move) for move in moves]) / (2 * step)
    response = inverse(point @ b + e)
    centred = response - response.mean()
    loading = gradient @ A
    n, df = len(e), result.df_resid
    variance = loading @ loading * (e @ e) / df + centred @ centred / (n * df) + 2.0 * loading.sum() * (e @ centred) / (n * df)
    return np.sqrt(variance)


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_the_power_is_the_most_likely_one(kind, seed):
    """Against the profile likelihood from its definition, on a grid of 801 exponents in [-2, 2]."""
    design, y = positive_response(kind, seed)
    powers = likely_power(design, np.log(y) - np.log(y).mean(axis=0))
    grid = np.linspace(-2.0, 2.0, 801)
    for b, lam in enumerate(powers):
        best = max(log_likelihood(design.X, y[:, b], g) for g in grid)
        # Where the likelihood has two peaks between neighbours of the coarse grid, the lower can be taken: by next to nothing.
        assert log_likelihood(design.X, y[:, b], lam) >= best - 1e-6 * max(1.0, abs(best))
        assert -2.0 <= lam <= 2.0


def test_the_power_agrees_with_scipy_without_predictors():
    """scipy.stats.boxcox maximises the same likelihood for a mean alone."""
    rng = np.random.default_rng(8)
    y = np.exp(0.5 * rng.standard_normal((40, 20))) + 0.2
    design = Design(np.ones((40, 1)), ("Intercept",))
    powers = likely_power(design, np.log(y) - np.log(y).mean(axis=0))
    expected = [stats.boxcox_normmax(y[:, b], method="mle") for b in range(20)]
    inside = np.abs(expected) < 2.0
    assert inside.sum() >= 10
    np.testing.assert_allclose(powers[inside], np.array(expected)[inside], atol=1e-5)


def test_lognormal_mean_is_covered():
    """Under lognormal errors of equal log variance the smearing interval covers the true mean at its level."""
    n, count, sd = 200, 4000, 0.6
    rng = np.random.default_rng(9)
    x = np.linspace(0.0, 1.0, n)
    design = Design(np.column_stack([np.ones(n), x]), ("Intercept", "x1"))
    y = np.exp((0.5 + x)[:, None] + sd * rng.standard_normal((n, count)))
    focus = mean_at(design, 0.5)
    fit = LogResponse().prepare(design, [focus], 0.95)(sample_of(design, y, coefficients=np.zeros(2)))[0]
    truth = np.exp(0.5 + 0.5 + sd**2 / 2)
    below, above = fit.misses(np.array([truth]))
    covered = 1.0 - np.mean(below | above)
    # 4.5 standard errors, and 0.01 for the smearing variance being a large-sample one.
    assert covered == pytest.approx(0.95, abs=0.01 + 4.5 * np.sqrt(0.95 * 0.05 / count))
    assert fit.estimate[0].mean() == pytest.approx(truth, rel=4.5 * fit.estimate[0].std() / truth / np.sqrt(count) + 0.002)


@pytest.mark.parametrize(("name", "worst"), [("log-response", 0.0), ("box-cox", 0.0), ("sqrt-response", -0.1)])
def test_responses_outside_the_range_count_as_failures(name, worst):
    design, y = positive_response("plain", 1)
    y[4, [1, 3]] = worst
    for fit in fits_of(make_procedure(name), design, y, [slope(design), mean_at(design), new_at(design)]):
        np.testing.assert_array_equal(fit.failed[:4], [False, True, False, True])
    assert SqrtResponse().prepare(design, [slope(design)], LEVEL)(
        sample_of(design, np.abs(y), coefficients=np.zeros(design.p))
    )[0].failed is None  # fmt: skip


def test_the_kernel_counts_failures_in_any_world_it_needs():
    """A test needs the reference world, the null world and the effect world; a mean response the first alone."""
    design, _ = make("plain", 1)
    foci = (Focus.coefficient("x1", design.names, 1.0), mean_at(design))
    beta, sd = np.array([3.0, 0.5, 0.0]), 1.0
    study = Study("t", "", design, foci, beta, sd, FixedRows(design), digest="t")
    job = Job(study, (), (LogResponse(),), 4)
    found = Kernel(job).run(range(1), {BASELINE: [0]})[BASELINE, 0]
    errors = BlockNoise(4, 0, job.width).normal(NoiseStream.ERRORS, design.n)
    # The nearest coefficients with another slope: moved along (X'X)^-1 l.
    step = np.linalg.inv(design.X.T @ design.X)[:, 1]
    worlds = [beta + step / step[1] * (slope - beta[1]) for slope in (0.5, 0.0, 1.0)]
    lacking = [np.any((design.X @ b)[:, None] + sd * errors <= 0.0, axis=0) for b in worlds]
    for tally, failed in zip(found, (np.logical_or.reduce(lacking), lacking[0]), strict=True):
        rate = measure(tally, ["failure_rate"])["failure_rate"]
        assert 0.0 < failed.mean() < 1.0
        assert rate.value == pytest.approx(failed.mean())
    covered = measure(found[1], ["coverage"])["coverage"].value
    assert covered <= 1.0 - lacking[0].mean()


@pytest.mark.parametrize("name", ["log-response", "sqrt-response", "box-cox", "gamma-log", "poisson-log"])
def test_what_is_not_comparable_is_not_answered(name):
    design, _ = make("plain", 1)
    procedure = make_procedure(name)
    assert procedure.answers(slope(design)) == {Answer.TEST}
    assert procedure.answers(two_slopes(design)) == {Answer.TEST}
    assert procedure.answers(mean_at(design)) == {Answer.ESTIMATE, Answer.INTERVAL}
    elsewhere = Focus("x1", FocusKind.COEFFICIENT, slope(design).L, np.array([0.5]))
    assert "'no effect' (a null value of 0)" in procedure.not_applicable(design, elsewhere)
    assert not procedure.equivariant


def test_without_an_intercept_there_is_no_power():
    x = np.arange(1.0, 12.0)
    bare = Design(x[:, None], ("x1",))
    assert "without an intercept" in BoxCox().not_applicable(bare, slope(bare))
    assert LogResponse().not_applicable(bare, slope(bare)) is None
    with pytest.raises(ScenarioError, match="unknown procedure 'log-respons'"):
        make_procedure("log-respons")
