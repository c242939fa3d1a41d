"""Sandwich errors in small samples, without simulation.

Source of the table: Angrist & Pischke (2009), Mostly Harmless Econometrics, table 8.1.1, 25,000 replicates (tier: simulation);
the closed values were recomputed by inversion of the characteristic function (tier: closed form). The published rates share one
seed and lie .003 to .005 low together, so .006 is allowed for them. The recomputed mean SEs are up to .0003 from the double
integral over the two chi-squares that is taken below, and are compared to .0004; the integral is matched to nine digits.
"""

import numpy as np
import pytest
from scipy import special, stats

from withstand.departures import World
from withstand.departures.world import Disturbance
from withstand.exact import coverage
from withstand.procedures import make_procedure
from withstand.study.design import Design

from .simulation import ALLOWED, coefficient
from .test_small_sample_sandwich import TABLE, treated, world


@pytest.mark.parametrize(("s", "name", "se_published", "se", "published", "closed"), TABLE)
def test_table(s, name, se_published, se, published, closed):
    design = treated()
    found = coverage(make_procedure(name), design, coefficient(design, "D"), World(world(s)).on(design), 0.95)
    rms = np.sqrt((3 + 27 * s**2) / 30)  # errors have mean square 1
    mean_se = found.width / (2 * stats.t.isf(0.025, 28)) * rms
    assert mean_se == pytest.approx(se, abs=4e-4)
    assert mean_se == pytest.approx(se_published, abs=0.0035)
    assert found.size == pytest.approx(closed, abs=5.1e-5)
    assert abs(found.size - published) <= 0.006 + ALLOWED * np.sqrt(closed * (1 - closed) / 25_000)


@pytest.mark.parametrize("s", [0.5, 1.0])
@pytest.mark.parametrize(("name", "power"), [("hc0", 0), ("hc2", 1), ("hc3", 2)])
def test_mean_standard_error(s, name, power):
    """V = w1 S1 + w0 s^2 S0 with chi-squares S1, S0 on 2 and 26 degrees of freedom, leverages 1/3 and 1/27."""
    w1, w0 = 3.0**-2 * (1 - 1 / 3) ** -power, 27.0**-2 * (1 - 1 / 27) ** -power * s**2
    x, u = special.roots_legendre(200)
    # The root of a chi-square runs over 0..9 and 0..13 but for a probability below 1e-15.
    a, b = 4.5 * (x + 1), 6.5 * (x + 1)
    weight = np.outer(4.5 * u * stats.chi.pdf(a, 2), 6.5 * u * stats.chi.pdf(b, 26))
    closed = np.sum(weight * np.sqrt(w1 * a[:, None] ** 2 + w0 * b**2))
    design = treated()
    found = coverage(make_procedure(name), design, coefficient(design, "D"), World(world(s)).on(design), 0.95)
    mean_se = found.width / (2 * stats.t.isf(0.025, 28)) * np.sqrt((3 + 27 * s**2) / 30)
    assert mean_se == pytest.approx(closed, rel=1e-9)


@pytest.mark.parametrize(("s", "closed"), [(0.5, 0.9468), (1.0, 0.9694), (2.0, 0.9911)])
def test_bell_mccaffrey(s, closed):
    """HC2 with 2.4668 degrees of freedom on the same design (Imbens & Kolesar 2016 discuss it); closed, recomputed."""
    design = treated()
    found = coverage(make_procedure("hc2-bm"), design, coefficient(design, "D"), World(world(s)).on(design), 0.95)
    assert found.coverage == pytest.approx(closed, abs=5.1e-5)


@pytest.mark.parametrize(("name", "closed"), [("hc2", 0.8569), ("ols", 0.7868)])
def test_spread_that_follows_a_lognormal_predictor(name, closed):
    """x_i = exp(.5 Phi^-1((i - .5)/20)), errors N(0, 1) x / rms(x), slope, nominal 95 % with t(18); closed, recomputed."""
    x = np.exp(0.5 * special.ndtri((np.arange(1, 21) - 0.5) / 20))
    design = Design(np.column_stack([np.ones(20), x]), ("Intercept", "x"))
    spread = x / np.sqrt(np.mean(x**2))
    disturbance = Disturbance(World(), design, None, spread, 1.0, None, None, ())
    found = coverage(make_procedure(name), design, coefficient(design, "x"), disturbance, 0.95)
    assert found.coverage == pytest.approx(closed, abs=5.1e-5)
