"""Outside values of residual statistics, each with its source."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from withstand.diagnostics.base import observed
from withstand.diagnostics.serial import BreuschGodfrey, DurbinWatson
from withstand.diagnostics.spread import BreuschPagan, GoldfeldQuandt, Koenker, White
from withstand.procedures.sample import Sample
from withstand.study.design import Design


@pytest.fixture(scope="module")
def engel():
    """Engel's food expenditure data (n = 235), shipped with statsmodels."""
    table = sm.datasets.engel.load_pandas().data
    income = table["income"].to_numpy()
    design = Design(
        X=np.column_stack([np.ones(len(income)), income]), names=("Intercept", "income"), columns={"income": income}
    )
    return design, observed(design, table["foodexp"].to_numpy())


@pytest.mark.parametrize(
    ("diagnostic", "value", "digits"),
    [
        # Independent implementation, two decimals as noted from its output.
        (BreuschPagan(), 635.96, 0.005),
        (Koenker(), 109.26, 0.005),
        (White(), 181.12, 0.005),
        (GoldfeldQuandt(along="income", drop=0.2), 10.220, 0.0005),
    ],
)
def test_engel_spread_statistics(engel, diagnostic, value, digits):
    _, sample = engel
    assert diagnostic.statistic(sample)[0] == pytest.approx(value, abs=digits)


def test_engel_degrees_of_freedom(engel):
    design, _ = engel
    assert White().p_values(design, np.array([181.12]))[0] == pytest.approx(stats.chi2.sf(181.12, 2))
    goldfeld_quandt = GoldfeldQuandt(along="income", drop=0.2)
    assert goldfeld_quandt.p_values(design, np.array([1.4]))[0] == pytest.approx(stats.f.sf(1.4, 92, 92))


def test_okun_serial_statistics():
    """Change in US unemployment on growth, n = 202 (macrodata, shipped with statsmodels). Independent implementation."""
    table = sm.datasets.macrodata.load_pandas().data
    growth = 400.0 * np.diff(np.log(table["realgdp"].to_numpy()))
    design = Design(
        X=np.column_stack([np.ones(len(growth)), growth]),
        names=("Intercept", "growth"),
        order=np.arange(len(growth), dtype=float),
    )
    sample = observed(design, np.diff(table["unemp"].to_numpy()))
    assert design.n == 202
    assert DurbinWatson().statistic(sample)[0] == pytest.approx(1.38553, abs=5e-6)
    assert BreuschGodfrey(lags=4).statistic(sample)[0] == pytest.approx(22.4335, abs=5e-5)


BOUNDS = [
    # Durbin-Watson 5 % bounds: Savin & White (1977), recomputed to five decimals. n, regressors, lower, upper.
    (15, 1, 1.07696, 1.36055),
    (20, 2, 1.10040, 1.53668),
    (50, 1, 1.50345, 1.58486),
    (100, 1, 1.65404, 1.69439),
]


@pytest.mark.parametrize(("n", "regressors", "lower", "upper"), BOUNDS)
def test_durbin_watson_bounds_are_reached_by_the_extreme_designs(n, regressors, lower, upper):
    """The bounds are 5 % points where the regressors are the slowest (upper) or fastest (lower) cosines of the order."""
    replicates = 40_000
    wave = np.cos(np.pi * np.outer(np.arange(n) + 0.5, np.arange(n)) / n)
    errors = np.random.default_rng(n).standard_normal((n, replicates))
    tolerance = 4.5 * np.sqrt(0.05 * 0.95 / replicates)
    for columns, bound in ((range(1, regressors + 1), upper), (range(n - regressors, n), lower)):
        X = np.column_stack([np.ones(n), wave[:, list(columns)]])
        design = Design(X=X, names=tuple("abc"[: X.shape[1]]), order=np.arange(n, dtype=float))
        below = np.mean(DurbinWatson().statistic(Sample(design, errors, None)) < bound)
        assert below == pytest.approx(0.05, abs=tolerance)


def test_size_under_laplace_errors():
    """Size at 5 %, n = 100, x = linspace(0, 10, 100), Laplace errors: .1831 (Breusch-Pagan) and .0480 (Koenker).

    Simulation; AkizumiFox 2026, 'Regression: From Projection to Distribution'. The published run is taken to have 100,000
    replicates.
    """
    replicates, published = 40_000, 100_000
    x = np.linspace(0.0, 10.0, 100)
    design = Design(X=np.column_stack([np.ones(100), x]), names=("Intercept", "x"))
    sample = Sample(design, np.random.default_rng(7).laplace(size=(100, replicates)), None)
    for diagnostic, size in ((BreuschPagan(), 0.1831), (Koenker(), 0.0480)):
        p = diagnostic.p_values(design, diagnostic.statistic(sample))
        tolerance = 4.5 * np.sqrt(size * (1.0 - size) * (1.0 / replicates + 1.0 / published))
        assert np.mean(p < 0.05) == pytest.approx(size, abs=tolerance)


def test_large_sample_limit_of_breusch_pagan_under_laplace_errors():
    """Closed form: P(chi2_1 > c / ((kappa - 1) / 2)) = .2151, c the 5 % point of chi2_1 and kappa = 6 for Laplace errors."""
    limit = stats.chi2.sf(stats.chi2.isf(0.05, 1) / ((6.0 - 1.0) / 2.0), 1)
    assert limit == pytest.approx(0.2151, abs=5e-5)
    n, replicates = 2_000, 4_000
    x = np.linspace(0.0, 10.0, n)
    design = Design(X=np.column_stack([np.ones(n), x]), names=("Intercept", "x"))
    generator, rejected = np.random.default_rng(8), 0
    for _ in range(10):
        sample = Sample(design, generator.laplace(size=(n, replicates // 10)), None)
        rejected += np.count_nonzero(BreuschPagan().p_values(design, BreuschPagan().statistic(sample)) < 0.05)
    # At n = 100 the size is .032 below the limit; at 2,000 rows a twentieth of that is left, beside the Monte Carlo error.
    tolerance = 0.032 / 20 + 4.5 * np.sqrt(limit * (1.0 - limit) / replicates)
    assert rejected / replicates == pytest.approx(limit, abs=tolerance)
