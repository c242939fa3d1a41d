"""Serial correlation and clusters, without simulation."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import stats

from withstand.departures import Clusters, Serial, World
from withstand.departures.world import Disturbance
from withstand.exact import coverage, moments
from withstand.procedures import make_procedure
from withstand.procedures.hac import Hac
from withstand.study.design import Design

from .simulation import coefficient, line

OLS = make_procedure("ols")


def test_trend_with_autoregressive_errors():
    """AkizumiFox (2026), Regression: From Projection to Distribution, ch. 19, re-derived (closed): n = 20, x = 1..20, rho = .6:
    claimed/true variance .2563, Var(GLS)/Var(OLS) .9055, coverage of the nominal 95 % interval .68953."""
    design = line(20)
    focus = coefficient(design, "x")
    disturbance = World(((Serial((0.6,)), 0.6),)).on(design)
    found = moments(OLS, design, focus, disturbance)
    assert found.se_ratio**2 == pytest.approx(0.2563, abs=5.1e-5)
    covariance = disturbance.covariance(np.eye(20))
    gls = np.linalg.inv(design.X.T @ np.linalg.solve(covariance, design.X))[1, 1]
    assert gls / found.variance == pytest.approx(0.9055, abs=5.1e-5)
    assert coverage(OLS, design, focus, disturbance, 0.95).coverage == pytest.approx(0.68953, abs=5.1e-6)


@pytest.mark.parametrize(("rho", "phi"), [(0.6, 0.8), (0.4, -0.5), (-0.3, 0.6)])
def test_variance_inflation_of_an_autoregressive_regressor(rho, phi):
    """(1 + rho phi)/(1 - rho phi) in large samples (closed), here the mean over 40 drawn regressors of 4,000 rows."""
    rng = np.random.default_rng(5)
    ratios = []
    for _ in range(40):
        e = rng.standard_normal(4000) * np.sqrt(1 - phi**2)
        x = np.empty(4000)
        x[0] = rng.standard_normal()
        for t in range(1, 4000):
            x[t] = phi * x[t - 1] + e[t]
        design = Design(np.column_stack([np.ones(4000), x]), ("Intercept", "x"), order=np.arange(4000.0))
        found = moments(OLS, design, coefficient(design, "x"), World(((Serial((rho,)), rho),)).on(design))
        ratios.append(found.variance * np.sum((x - x.mean()) ** 2))
    assert abs(np.mean(ratios) - (1 + rho * phi) / (1 - rho * phi)) <= 4.5 * np.std(ratios) / np.sqrt(40)


@dataclass(frozen=True)
class OneLag:
    """Correlation rho of neighbours and none beyond."""

    rho: float

    def correlate(self, M):
        result = M.copy()
        result[1:] += self.rho * M[:-1]
        result[:-1] += self.rho * M[1:]
        return result


@pytest.mark.parametrize(("rho", "miss"), [(0.3, 0.12126), (-0.3, 0.00194)])
def test_mean_of_a_series(rho, miss):
    """Scheffe (1959): P(miss) = 2 Phi(-1.96 / sqrt(1 + 2 rho)) in large samples (closed)."""
    assert 2 * stats.norm.sf(1.96 / np.sqrt(1 + 2 * rho)) == pytest.approx(miss, abs=5.1e-6)

    def world(n):
        design = Design(np.ones((n, 1)), ("Intercept",))
        return design, Disturbance(World(), design, None, None, 1.0, None, OneLag(rho), ())

    design, disturbance = world(1_000_000)
    found = moments(OLS, design, coefficient(design, "Intercept"), disturbance)
    assert found.se_ratio**2 == pytest.approx(1 / (1 + 2 * rho), rel=1e-5)
    assert 1 - found.large_sample_coverage(0.95) == pytest.approx(miss, abs=1e-5)
    # At a finite n the miss rate is off by order 1/n: two sizes extrapolate to the limit.
    sizes = [
        coverage(OLS, *(design, coefficient(design, "Intercept"), found), 0.95).size for design, found in map(world, (200, 400))
    ]
    assert abs(sizes[1] - miss) < abs(sizes[0] - miss)
    assert 2 * sizes[1] - sizes[0] == pytest.approx(miss, abs=2e-5)


@dataclass(frozen=True)
class AtQuantile(Hac):
    """Bartlett lags with a critical value of one's own."""

    quantile: float = 2.0

    def critical(self, design, A, level):
        return self.quantile


@pytest.mark.parametrize(("b", "quantile"), [(0.1, 2.2343), (0.5, 3.4739), (1.0, 4.7711)])
def test_fixed_b_quantiles(b, quantile):
    """Bartlett t quantiles for the mean of a series, 97.5 %, recomputed for T = 800 (closed; Kiefer & Vogelsang 2005 have the
    limit): at them the test rejects in 5 %."""
    design = Design(np.ones((800, 1)), ("Intercept",), order=np.arange(800.0))
    focus = coefficient(design, "Intercept")
    procedure = AtQuantile(lag=round(800 * b) - 1, quantile=quantile * np.sqrt(799 / 800))
    found = coverage(procedure, design, focus, World().on(design), 0.95)
    # Half a unit of the last digit moves the rate by the density there.
    other = coverage(AtQuantile(lag=procedure.lag, quantile=procedure.quantile + 1e-4), design, focus, World().on(design), 0.95)
    assert abs(found.size - 0.05) <= 0.51 * abs(other.size - found.size)


@pytest.mark.parametrize(("kind", "effect"), [("cluster-level", 2.60), ("centred", 0.60)])
def test_design_effect(kind, effect):
    """40 clusters of 5, rho = .4: the variance of the slope against independent errors (closed): 1 + 4 rho, and 1 - rho."""
    codes = np.repeat(np.arange(40), 5)
    x = np.arange(40.0)[codes] if kind == "cluster-level" else np.tile(np.arange(5.0) - 2.0, 40)
    design = Design(np.column_stack([np.ones(200), x]), ("Intercept", "x"), groups=codes)
    found = moments(OLS, design, coefficient(design, "x"), World(((Clusters((0.4,)), 0.4),)).on(design))
    assert found.variance * np.sum((x - x.mean()) ** 2) == pytest.approx(effect, rel=1e-9)
