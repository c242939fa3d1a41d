"""Serial correlation on open data: macrodata, which ships with statsmodels."""

import numpy as np
import pytest
import statsmodels.api as sm

from withstand.procedures.base import make_procedure
from withstand.procedures.fixed_b import bartlett_quantile
from withstand.procedures.hac import Hac
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus

MACRO = sm.datasets.macrodata.load_pandas().data


def fit(procedure, X, y, names):
    """Estimates and standard errors of every coefficient, from a block of one replicate."""
    design = Design(X, names, order=np.arange(len(y), dtype=float))
    foci = [Focus.coefficient(name, names) for name in names]
    fits = procedure.prepare(design, foci, 0.95)(Sample(design, y[:, None], noise=None))
    return np.array([f.estimate[0, 0] for f in fits]), np.array([np.sqrt(f.variance[0]) for f in fits])


def test_newey_west():
    """Results of another package quoted in statsmodels' test suite (independent): growth of investment on growth of GDP and
    lagged real interest, lag 4, factor n/(n - k)."""
    y = 400 * np.diff(np.log(MACRO["realinv"]))
    X = np.column_stack([400 * np.diff(np.log(MACRO["realgdp"])), MACRO["realint"][:-1], np.ones(len(y))])
    b, se = fit(Hac(lag=4), X, y, ("gdp", "realint", "Intercept"))
    np.testing.assert_allclose(b, [4.37422166, -0.61399697, -9.48167277], atol=5e-9)
    np.testing.assert_allclose(se, [0.33125645, 0.29582348, 1.18593381], atol=5e-9)


def test_okun():
    """Okun regression (independent): slope -.06713, SE .00503; Newey-West with 4 lags .008620, given without the factor
    n/(n - p), which is taken out here."""
    y = np.diff(MACRO["unemp"])
    X = np.column_stack([np.ones(len(y)), 400 * np.diff(np.log(MACRO["realgdp"]))])
    b, se = fit(make_procedure("ols"), X, y, ("Intercept", "growth"))
    assert len(y) == 202
    assert b[1] == pytest.approx(-0.06713, abs=5e-6)
    assert se[1] == pytest.approx(0.00503, abs=5e-6)
    _, hac = fit(Hac(lag=4), X, y, ("Intercept", "growth"))
    assert hac[1] * np.sqrt(200 / 202) == pytest.approx(0.008620, abs=5e-7)


@pytest.mark.parametrize(("b", "quantile", "cubic"), [(0.1, 2.2343, 2.2606), (0.5, 3.4739, 3.4822), (1.0, 4.7711, 4.8130)])
def test_fixed_b_quantiles(b, quantile, cubic):
    """Bartlett t quantiles, 97.5 % (recomputed for T = 800; closed), and the cubic of Kiefer & Vogelsang (2005), from memory:
    1.9600 + 2.9694 b + 0.4160 b^2 - 0.5324 b^3, which runs up to 1.6 % high."""
    assert 1.96 + 2.9694 * b + 0.4160 * b**2 - 0.5324 * b**3 == pytest.approx(cubic, abs=1e-4)
    computed = bartlett_quantile(b, 0.95)
    assert computed == pytest.approx(quantile, abs=6e-5)
    assert 0.0 < cubic / computed - 1.0 < 0.016
