"""The laws at hand against the distributions of SciPy, which are another way to the same numbers."""

import numpy as np
import pytest
from scipy import stats

from withstand import tails

P = np.array([1e-12, 1e-4, 0.005, 0.025, 0.3, 0.5, 0.8, 0.999])
X = np.array([-4.0, -0.3, 0.0, 0.7, 2.5, 9.0])
DF = np.array([1.0, 2.6, 7.0, 31.0, 400.5, 1e6])


def near(value, expected):
    np.testing.assert_allclose(value, expected, rtol=1e-10, atol=1e-300)


def test_normal():
    near(tails.normal_pdf(X), stats.norm.pdf(X))
    near(tails.normal_cdf(X), stats.norm.cdf(X))
    near(tails.normal_sf(X), stats.norm.sf(X))
    near(tails.normal_sf(X, 1.5, 0.3), stats.norm.sf(X, 1.5, 0.3))
    near(tails.normal_ppf(P), stats.norm.ppf(P))
    near(tails.normal_isf(P), stats.norm.isf(P))


@pytest.mark.parametrize("df", DF)
def test_student(df):
    near(tails.t_sf(X, df), stats.t.sf(X, df))
    near(tails.t_isf(P, df), stats.t.isf(P, df))


@pytest.mark.parametrize("numerator", [1.0, 2.0, 5.0])
@pytest.mark.parametrize("df", DF)
def test_f(numerator, df):
    near(tails.f_sf(X, numerator, df), stats.f.sf(X, numerator, df))
    near(tails.f_isf(P, numerator, df), stats.f.isf(P, numerator, df))


@pytest.mark.parametrize(("a", "b"), [(1.0, 400.0), (23.0, 4.0), (9_500.0, 501.0), (159_999.0, 2.0)])
def test_beta(a, b):
    near(tails.beta_ppf(P, a, b), stats.beta.ppf(P, a, b))
    near(tails.beta_isf(P, a, b), stats.beta.isf(P, a, b))


def test_arrays_of_degrees():
    near(tails.t_isf(0.025, DF), stats.t.isf(0.025, DF))
    near(tails.f_isf(0.05, 2, DF), stats.f.isf(0.05, 2, DF))


@pytest.mark.parametrize("bad", [0.0, -2.0, np.nan])
def test_no_degrees_of_freedom_give_no_number(bad):
    assert np.isnan(tails.t_isf(0.025, bad))
    assert np.isnan(tails.f_isf(0.05, 2, bad))
    assert np.isnan(tails.t_sf(1.0, bad))


@pytest.mark.parametrize("df", DF)
def test_chi_square(df):
    near(tails.chi2_sf(X, df), stats.chi2.sf(X, df))
    near(tails.chi2_ppf(P, df), stats.chi2.ppf(P, df))
    near(tails.chi2_isf(P, df), stats.chi2.isf(P, df))
