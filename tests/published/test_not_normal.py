"""Coverage and power when the errors are not normal. All values are simulated unless said otherwise."""

import numpy as np
import pytest

from withstand.departures import HeavyTails, Serial, Skew
from withstand.departures.base import LawDeparture, Layer
from withstand.departures.law import tabulate
from withstand.study.design import Design

from .simulation import agrees, coefficient, groups, line, simulate
from .test_unequal_variances import Laplace


@pytest.mark.parametrize(
    ("departure", "n", "published", "recomputed"),
    [
        (Skew((2.0,)), 10, 0.955, 0.9548),
        (Skew((2.0,)), 40, 0.953, 0.9515),
        (HeavyTails(df=[3]), 10, 0.955, 0.9546),
    ],
)
def test_slope_of_a_line(departure, n, published, recomputed):
    """AkizumiFox (2026), Regression: From Projection to Distribution, ch. 19: x = 1..n, 95 % t interval, 100,000 replicates;
    recomputed with 1,000,000. Errors are exponential (skewness 2) and t with 3 df."""
    design = line(n)
    found = simulate(design, coefficient(design, "x"), ((departure, departure.ladder[0]),), ["ols"], replicates=200_000)
    coverage = found["ols"]["coverage"]
    assert abs(coverage.value - recomputed) <= 4.5 * np.hypot(coverage.mc_se, np.sqrt(0.95 * 0.05 / 1e6)) + 5e-5
    assert abs(coverage.value - published) <= 4.5 * np.hypot(coverage.mc_se, np.sqrt(0.95 * 0.05 / 1e5)) + 5e-4


def test_mean_of_five_exponentials():
    """Recomputed with 4,000,000 replicates: covers .88270, too low .11352, too high .00378."""
    design = Design(np.ones((5, 1)), ("Intercept",))
    found = simulate(design, coefficient(design, "Intercept"), ((Skew((2.0,)), 2.0),), ["ols"], replicates=400_000)["ols"]
    assert agrees(found["coverage"], 0.88270, published_replicates=4_000_000)
    assert agrees(found["miss_below"], 0.11352, published_replicates=4_000_000)
    assert agrees(found["miss_above"], 0.00378, published_replicates=4_000_000)


class Uniform(LawDeparture):
    """Uniform errors; enough of a departure for the test, not registered."""

    kind = "uniform"
    layer = Layer.LAW
    title = unit = construction = source = "uniform"
    neutral = 0.0
    default_ladder = (1.0,)

    def check(self, severity):
        """Accept anything."""

    def law(self, severity):
        from scipy.special import ndtr

        return tabulate("uniform", ndtr, skewness=0.0, kurtosis=1.8)


def test_mean_of_five_uniforms():
    """Recomputed with 4,000,000 replicates: covers .93416."""
    design = Design(np.ones((5, 1)), ("Intercept",))
    found = simulate(design, coefficient(design, "Intercept"), ((Uniform((1.0,)), 1.0),), ["ols"], replicates=400_000)["ols"]
    assert agrees(found["coverage"], 0.93416, published_replicates=4_000_000)


def test_power_with_laplace_errors():
    """Behavior Genetics 39:580, table 4: two groups of 25, difference .5 SD, pooled t at 5 %: .42706 (recomputed .42710)."""
    design = groups([25, 25])
    found = simulate(design, coefficient(design, "group1", 0.5), ((Laplace((1.0,)), 1.0),), ["ols"], replicates=200_000)
    power = found["ols"]["power"]
    assert abs(power.value - 0.42710) <= 4.5 * power.mc_se + 5e-5
    assert abs(power.value - 0.42706) <= 4.5 * np.hypot(power.mc_se, np.sqrt(0.4271 * 0.5729 / 1e5)) + 5e-5


def test_trend_with_serial_errors():
    """AkizumiFox (2026), ch. 19, re-derived (closed): n = 20, x = 1..20, AR(1) rho = .6: claimed/true variance .2563, coverage
    of the nominal 95 % interval .68953."""
    design = line(20)
    found = simulate(design, coefficient(design, "x"), ((Serial((0.6,)), 0.6),), ["ols"], replicates=200_000)["ols"]
    assert agrees(found["coverage"], 0.68953)
    assert abs(found["se_ratio"].value - np.sqrt(0.2563)) <= 4.5 * found["se_ratio"].mc_se + 5e-5
