"""Every batched statistic against an implementation that fits one data set at a time: statsmodels, scipy."""

import warnings

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats import diagnostic as smd
from statsmodels.stats import stattools

from withstand.diagnostics.base import observed
from withstand.diagnostics.groups import GroupF
from withstand.diagnostics.influence import LargestCook, LargestStudentised
from withstand.diagnostics.mean import AddedSquare, Reset
from withstand.diagnostics.serial import BreuschGodfrey, DurbinWatson, LagOne, LjungBox
from withstand.diagnostics.shape import JarqueBera, Kurtosis, Skewness
from withstand.diagnostics.shapiro import ShapiroWilk
from withstand.diagnostics.spread import BreuschPagan, GoldfeldQuandt, Koenker, White
from withstand.procedures.sample import Sample
from withstand.study.design import Design

DATA_SETS = 24
TOLERANCE = 1e-8


def designs():
    """Random designs from n = p + 3 up, with ties, a heavy-tailed predictor and predictors far from 0."""
    for number in range(DATA_SETS):
        rng = np.random.default_rng(1000 + number)
        n = int(rng.integers(7, 90)) if number else 7
        x = rng.normal(50.0, 3.0, n) if number % 2 else rng.integers(0, 6, n).astype(float) + 0.01 * np.arange(n)
        z = rng.standard_t(3, n)
        X = np.column_stack([np.ones(n), x, z, *([rng.normal(size=n)] if number % 3 == 0 and n > 10 else [])])
        groups = rng.permutation(np.arange(n) % max(2, n // 4)).astype(np.int64)
        design = Design(
            X=X,
            names=("Intercept", "x", "z", "w")[: X.shape[1]],
            columns={"x": x, "z": z},
            fitted=X @ np.ones(X.shape[1]),
            order=np.arange(n, dtype=float),
            groups=groups,
        )
        errors = rng.standard_t(2.5, (n, 3)) * (1.0 + np.abs(z))[:, None]
        beta = rng.normal(size=X.shape[1])
        yield design, errors, beta


def reference_koenker(design, y, fit):
    return smd.het_breuschpagan(fit.resid, design.X)[:2]


def reference_breusch_pagan(design, y, fit):
    return smd.het_breuschpagan(fit.resid, design.X, robust=False)[:2]


def reference_koenker_along(design, y, fit):
    return smd.het_breuschpagan(fit.resid, np.column_stack([np.ones(design.n), design.fitted]))[:2]


def reference_white(design, y, fit):
    return smd.het_white(fit.resid, design.X)[:2]


def reference_goldfeld_quandt(design, y, fit):
    n, drop = design.n, int(0.2 * design.n)
    half = (n - drop) // 2
    order = np.argsort(design.columns["x"], kind="stable")
    low, high = (sm.OLS(y[rows], design.X[rows]).fit() for rows in (order[:half], order[-half:]))
    value = high.mse_resid / low.mse_resid
    p = stats.f.sf(value, high.df_resid, low.df_resid)
    return value, p


def reference_ljung_box(design, y, fit):
    table = smd.acorr_ljungbox(fit.resid, lags=[2])
    return table.lb_stat.iloc[0], table.lb_pvalue.iloc[0]


def reference_breusch_godfrey(design, y, fit):
    with warnings.catch_warnings():
        # Newer releases announce another return type; the first two values stay what they are.
        warnings.simplefilter("ignore", FutureWarning)
        return smd.acorr_breusch_godfrey(fit, nlags=2)[:2]


def reference_jarque_bera(design, y, fit):
    return stattools.jarque_bera(fit.resid)[:2]


def reference_added_square(design, y, fit):
    more = sm.OLS(y, np.column_stack([design.X, (design.columns["x"] - design.columns["x"].mean()) ** 2])).fit()
    return more.tvalues[-1], more.pvalues[-1]


def reference_reset(design, y, fit):
    f = fit.fittedvalues - fit.fittedvalues.mean()
    more = sm.OLS(y, np.column_stack([design.X, f**2, f**3])).fit()
    value, p, _ = more.compare_f_test(fit)
    return value, p


def reference_group_f(design, y, fit):
    return stats.f_oneway(*[fit.resid[design.groups == g] for g in range(design.group_count)])


CASES = {
    "koenker": (Koenker(), reference_koenker),
    "koenker along fitted": (Koenker(along="fitted"), reference_koenker_along),
    "breusch-pagan": (BreuschPagan(), reference_breusch_pagan),
    "white": (White(), reference_white),
    "goldfeld-quandt": (GoldfeldQuandt(along="x"), reference_goldfeld_quandt),
    "durbin-watson": (DurbinWatson(), lambda d, y, fit: (stattools.durbin_watson(fit.resid), None)),
    "ljung-box": (LjungBox(lags=2), reference_ljung_box),
    "breusch-godfrey": (BreuschGodfrey(lags=2), reference_breusch_godfrey),
    "jarque-bera": (JarqueBera(), reference_jarque_bera),
    "skewness": (Skewness(), lambda d, y, fit: (stats.skew(fit.resid), None)),
    "kurtosis": (Kurtosis(), lambda d, y, fit: (stats.kurtosis(fit.resid, fisher=False), None)),
    "shapiro-wilk": (ShapiroWilk(), lambda d, y, fit: tuple(stats.shapiro(fit.resid))),
    "max-studentised": (
        LargestStudentised(),
        lambda d, y, fit: (np.abs(fit.get_influence().resid_studentized_external).max(), None),
    ),
    "max-cook": (LargestCook(), lambda d, y, fit: (fit.get_influence().cooks_distance[0].max(), None)),
    "added-square": (AddedSquare(along="x"), reference_added_square),
    "reset": (Reset(), reference_reset),
    "group-f": (GroupF(), reference_group_f),
}


@pytest.mark.parametrize("case", CASES)
def test_statistic_and_p_value_agree_on_random_data_sets(case):
    diagnostic, reference = CASES[case]
    compared = 0
    for design, errors, beta in designs():
        if diagnostic.not_applicable(design) is not None:
            continue
        block = Sample(design, errors, noise=None, coefficients=beta)
        values = diagnostic.statistic(block)
        printed = diagnostic.p_values(design, values)
        for b in range(errors.shape[1]):
            y = design.X @ beta + errors[:, b]
            fit = sm.OLS(y, design.X).fit()
            value, p = reference(design, y, fit)
            assert values[b] == pytest.approx(value, rel=TOLERANCE, abs=TOLERANCE)
            single = diagnostic.statistic(observed(design, y))[0]
            assert single == pytest.approx(value, rel=TOLERANCE, abs=TOLERANCE)
            if case != "max-studentised" and p is not None:
                assert printed is not None
                assert printed[b] == pytest.approx(p, rel=1e-7, abs=TOLERANCE)
            compared += 1
    assert compared >= 20 * 3


def test_lag_one_is_the_ratio_it_says_it_is():
    for design, errors, _ in designs():
        e = errors - design.Q @ (design.Q.T @ errors)
        expected = (e[1:] * e[:-1]).sum(axis=0) / (e**2).sum(axis=0)
        np.testing.assert_allclose(LagOne().statistic(Sample(design, errors, None)), expected, rtol=1e-10, atol=1e-12)


def test_lag_one_within_groups_pairs_neighbours_of_one_group_only():
    for design, errors, _ in designs():
        e = errors - design.Q @ (design.Q.T @ errors)
        expected = np.zeros(errors.shape[1])
        for g in range(design.group_count):
            part = e[design.groups == g]
            expected += (part[1:] * part[:-1]).sum(axis=0)
        values = LagOne(within=True).statistic(Sample(design, errors, None))
        np.testing.assert_allclose(values, expected / (e**2).sum(axis=0), rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("n", [3, 4, 5, 6, 11, 12, 50, 2000])
def test_shapiro_wilk_agrees_with_scipy_at_every_branch_of_the_approximation(n):
    rng = np.random.default_rng(n)
    design = Design(X=np.ones((n, 1)), names=("Intercept",))
    y = rng.exponential(size=n)
    value, p = stats.shapiro(y)
    w = ShapiroWilk().statistic(observed(design, y))
    assert w[0] == pytest.approx(value, abs=1e-8)
    assert ShapiroWilk().p_values(design, w)[0] == pytest.approx(p, rel=1e-5, abs=1e-10)
