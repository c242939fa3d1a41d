"""Fitted weights, AR(1) fits, M-estimates and median regression against fits of one data set at a time."""

import warnings
from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from scipy.optimize import brentq, linprog
from statsmodels.robust import norms

from withstand.procedures import Bisquare, Gls, Huber, PraisWinsten, make_procedure
from withstand.procedures.fitted_weights import FittedWeights, FittedWeightsHc3
from withstand.study.focus import Focus, FocusKind, Point

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL = 0.9


def data_sets(*, order=None, groups=None):
    """Designs with errors; each column of errors is a data set, 112 in all."""
    for kind, seed in CASES:
        design, errors = make(kind, seed)
        changes = {}
        if order is not None:
            changes["order"] = order(np.random.default_rng(seed), design.n)
        if groups is not None:
            changes["groups"] = np.arange(design.n) % groups
        yield replace(design, **changes), errors


def fits_of(procedure, design, foci, errors):
    """Fits by focus, and where they failed."""
    usable = [focus for focus in foci if procedure.not_applicable(design, focus) is None]
    fits = procedure.prepare(design, usable, LEVEL)(sample_of(design, errors)) if usable else []
    return list(zip(usable, fits, strict=True))


def agree(fit, focus, b, params, covariance, df, *, rel, new=None):
    """Estimate, claimed covariance and interval or joint test of replicate b."""
    L = focus.L
    size = np.sqrt(np.diag(L @ covariance @ L.T))
    assert np.all(np.abs(fit.estimate[:, b] - L @ params) <= rel * size)
    expected = L @ covariance @ L.T + (0.0 if new is None else new)
    assert fit.covariance[:, :, b] == pytest.approx(expected, rel=rel, abs=rel * size.min() ** 2)
    if len(L) == 1:
        assert fit.width[b] == pytest.approx(2 * stats.t.ppf(0.95, df) * np.sqrt(expected[0, 0]), rel=rel)
    else:
        assert fit.critical == pytest.approx(stats.f.ppf(0.9, len(L), df))


# Fitted weights


@pytest.mark.parametrize("along", ["model", "x1"])
@pytest.mark.parametrize("kind", [FittedWeights, FittedWeightsHc3])
def test_fitted_weights(kind, along):
    """Two regressions by statsmodels. Extreme weights cost digits in both programs: those of the condition number of the normal
    matrix and, with HC3, of the share 1 - h of the row with the largest weighted leverage."""
    procedure, compared, failures = kind(along=along), 0, 0
    for design, errors in data_sets():
        Z = design.X if along == "model" else np.column_stack([np.ones(design.n), design.columns["x1"]])
        at = {"model": [1.0, *[0.3] * (design.p - 1)], "x1": [1.0, 0.3]}[along]
        new = replace(new_at(design), point=Point({"x1": 0.3}))
        for focus, fit in fits_of(procedure, design, [slope(design), mean_at(design), two_slopes(design), new], errors):
            for b in range(errors.shape[1]):
                y = errors[:, b]
                squares = sm.OLS(y, design.X).fit().resid ** 2
                if fit.failed[b]:
                    # Two rows more than columns can leave a weighted leverage of 1 or a residual of 0.
                    failures += 1
                    continue
                logs = sm.OLS(np.log(squares), Z).fit()
                w = np.exp(-logs.fittedvalues)
                model = sm.WLS(y, design.X, weights=w).fit(cov_type="HC3" if kind is FittedWeightsHc3 else "nonrobust")
                extra = model.scale * np.exp(logs.params @ at) if focus is new else None
                weighted = design.X * np.sqrt(w)[:, None]
                share = 1.0 - np.sum(np.linalg.qr(weighted)[0] ** 2, axis=1).max()
                loose = max(1e-8, 1e-13 * np.linalg.cond(weighted) ** 2 / (share if kind is FittedWeightsHc3 else 1.0))
                if loose < 1e-3:
                    agree(fit, focus, b, model.params, model.cov_params(), design.df, rel=loose, new=extra)
                    compared += 1
    assert compared >= 200
    assert failures <= 40


def test_a_residual_of_zero_is_a_failure():
    """The two rows of a dummy that is 0 elsewhere have equal squared residuals; equal responses make them zero."""
    design, errors = make("plain", 1)
    X = design.X.copy()
    X[:, 2] = 0.0
    X[:2, 1:] = [0.0, 1.0]
    errors[1] = errors[0]
    errors[1, 4] += 1.0
    fit = make_procedure("fitted-weights").prepare(replace(design, X=X), [slope(design)], LEVEL)(
        sample_of(replace(design, X=X), errors)
    )
    assert fit[0].failed.tolist() == [True] * 4 + [False] + [True] * 3


# First-order autoregression


def gaps_of(design, within):
    """Row before each row of the same series, or none, and the gap in units of the smallest."""
    last, before = {}, np.full(design.n, -1)
    for t in range(design.n):
        series = design.groups[t] if within else 0
        before[t] = last.get(series, -1)
        last[series] = t
    rows = np.flatnonzero(before >= 0)
    steps = design.order[rows] - design.order[before[rows]]
    return rows, before[rows], steps / steps.min()


def correlation_matrix(design, within, rho, unit):
    distance = np.abs(design.order[:, None] - design.order[None, :]) / unit
    R = np.sign(rho) ** np.rint(distance) * np.abs(rho) ** distance if rho < 0 else rho**distance
    return np.where(design.groups[:, None] == design.groups[None, :], R, 0.0) if within else R


def rho_of(e, t, s, gaps):
    """Estimate of rho from residuals e, by its definition; nan where there is none."""
    if abs(e[t] @ e[s]) >= e[s] @ e[s]:
        return np.nan
    if np.ptp(gaps) < 1e-9:
        return e[t] @ e[s] / (e[s] @ e[s])
    return brentq(lambda r: e[s] @ (e[t] - r**gaps * e[s]), 0.0, 1.0, xtol=1e-15) if e[t] @ e[s] > 0.0 else 0.0


ORDERS = {
    "regular": (None, None, None),
    "regular within groups": (None, 2, "groups"),
    "whole gaps": (lambda rng, n: np.cumsum(rng.integers(1, 4, n)).astype(float), None, None),
    "any gaps": (lambda rng, n: np.cumsum(rng.uniform(0.5, 2.0, n)), None, None),
    "any gaps within groups": (lambda rng, n: np.cumsum(rng.uniform(0.5, 2.0, n)), 2, "groups"),
}


@pytest.mark.parametrize("iterate", [True, False])
@pytest.mark.parametrize("name", ORDERS)
def test_prais_winsten(name, iterate):
    """Generalised least squares with the whole correlation matrix, by statsmodels, in turn with the estimate of rho.

    Plain repetition need not settle, or settles elsewhere, where the map from rho to its next estimate is steep; there the
    result is checked to be a fixed point of that map. A failure must be one in the loop too: an estimate of 1 or more, or no
    settling within 300 rounds.
    """
    order, count, within = ORDERS[name]
    procedure, compared, elsewhere, failures = PraisWinsten(within=within, iterate=iterate), 0, 0, 0
    for design, errors in data_sets(order=order, groups=count):
        t, s, gaps = gaps_of(design, within)
        unit = np.min(design.order[t] - design.order[s])

        def step(rho, y, design=design, t=t, s=s, gaps=gaps, unit=unit):
            model = sm.GLS(y, design.X, sigma=correlation_matrix(design, within, rho, unit)).fit()
            return model, rho_of(y - design.X @ model.params, t, s, gaps)

        fits = fits_of(procedure, design, [slope(design), two_slopes(design), new_at(design)], errors)
        for b in range(errors.shape[1]):
            y = errors[:, b]
            rho, previous, path = rho_of(sm.OLS(y, design.X).fit().resid, t, s, gaps), np.inf, []
            while iterate and np.isfinite(rho) and abs(rho - previous) > 1e-13 and len(path) < 300:
                previous, path = rho, [*path, rho]
                rho = step(rho, y)[1]
            if np.isnan(rho) or len(path) == 300:
                failures += fits[0][1].failed[b]
                continue
            assert not fits[0][1].failed[b]
            model = step(rho, y)[0]
            if iterate and abs(fits[0][1].estimate[0, b] - model.params[1]) > 1e-7 * model.bse[1]:
                elsewhere += 1
                continue
            for focus, fit in fits:
                new = model.scale if focus.name == "new" else None
                agree(fit, focus, b, model.params, model.cov_params(), design.df, rel=1e-6, new=new)
            compared += 1
    assert compared >= 80
    assert elsewhere <= 2


@pytest.mark.parametrize("rho", [0.6, -0.4, 0.0])
@pytest.mark.parametrize("name", ORDERS)
def test_gls_with_known_correlation(name, rho):
    order, count, within = ORDERS[name]
    if rho < 0 and name.startswith("any"):
        rho = 0.2  # a negative correlation has no power at such gaps
    procedure, compared = Gls(rho=rho, within=within, step=1.0), 0
    for design, errors in data_sets(order=order, groups=count):
        R = correlation_matrix(design, within, rho, 1.0)
        for focus, fit in fits_of(procedure, design, [slope(design), two_slopes(design), new_at(design)], errors):
            for b in range(errors.shape[1]):
                model = sm.GLS(errors[:, b], design.X, sigma=R).fit()
                new = model.scale if focus.name == "new" else None
                agree(fit, focus, b, model.params, model.cov_params(), design.df, rel=1e-8, new=new)
                compared += 1
    assert compared >= 300


# M-estimates


@pytest.mark.parametrize(
    ("procedure", "norm"),
    [
        (Huber(), norms.HuberT()),
        (Huber(k=2.0), norms.HuberT(2.0)),
        (Bisquare(), norms.TukeyBiweight()),
        (Bisquare(c=6.0), norms.TukeyBiweight(6.0)),
    ],
    ids=lambda x: x.identity if hasattr(x, "identity") else "",
)
def test_m_estimates(procedure, norm):
    """statsmodels' RLM run until its coefficients settle. Where the fit is a failure here, RLM's own scale collapses, or it
    needs more than the 100 rounds that are given here."""
    compared, failures = 0, 0
    for design, errors in data_sets():
        fits = fits_of(procedure, design, [slope(design), mean_at(design), two_slopes(design)], errors)
        for b in range(errors.shape[1]):
            y, X = errors[:, b], design.X
            with warnings.catch_warnings():
                # It warns where the scale collapses.
                warnings.simplefilter("ignore")
                model = sm.RLM(y, X, M=norm).fit(conv="coefs", tol=1e-13, maxiter=1000)
            if fits[0][1].failed[b]:
                collapsed = model.scale < 1e-8 * np.std(y)
                assert collapsed or model.fit_history["iteration"] > 100
                failures += 1
                continue
            for focus, fit in fits:
                agree(fit, focus, b, model.params, model.cov_params(), design.df, rel=1e-6)
            compared += 1
    assert compared >= 100
    assert compared + failures == 112


# Median regression


def least_sum(X, y):
    """The least sum of absolute residuals, by linear programming."""
    n, p = X.shape
    cost = np.r_[np.zeros(p), np.ones(2 * n)]
    A = np.hstack([X, np.eye(n), -np.eye(n)])
    return linprog(cost, A_eq=A, b_eq=y, bounds=[(None, None)] * p + [(0, None)] * (2 * n), method="highs")


def reference_bandwidth(r, level):
    n = r.size
    z = stats.norm.ppf((1 + level) / 2)
    h = n ** (-1 / 3) * z ** (2 / 3) * (1.5 * stats.norm.pdf(0) ** 2) ** (1 / 3)
    while h >= 0.5:
        h /= 2
    quartiles = np.percentile(r, [25, 75])
    return min(np.std(r), (quartiles[1] - quartiles[0]) / 1.34) * (stats.norm.ppf(0.5 + h) - stats.norm.ppf(0.5 - h))


def coefficients(procedure, design, errors):
    """All coefficients (p, B) and where the fit failed."""
    unit = [replace_row(design, i) for i in range(design.p)]
    fits = procedure.prepare(design, unit, LEVEL)(sample_of(design, errors))
    return np.array([fit.estimate[0] for fit in fits]), fits[0].failed


def replace_row(design, i):
    return Focus(design.names[i], FocusKind.COEFFICIENT, np.eye(design.p)[i : i + 1], np.zeros(1))


@pytest.mark.parametrize("name", ["lad", "lad-kernel"])
def test_median_regression(name):
    """The minimum is that of linear programming; where it is unique the fit is. Covariances by their definition. A failure is
    a bandwidth of zero (half of the residuals are), or a singular kernel matrix."""
    procedure, compared, unique, failures = make_procedure(name), 0, 0, 0
    for design, errors in data_sets():
        fits = fits_of(procedure, design, [slope(design), mean_at(design), two_slopes(design)], errors)
        found, failed = coefficients(procedure, design, errors)
        for b in range(errors.shape[1]):
            y, X = errors[:, b], design.X
            program = least_sum(X, y)
            r = y - X @ found[:, b]
            if not failed[b] or r @ r > 0.0:
                assert np.abs(r).sum() == pytest.approx(program.fun, rel=1e-9, abs=1e-9)
            r[np.abs(r) < 1e-9 * np.std(y)] = 0.0
            h = reference_bandwidth(r, LEVEL)
            if failed[b]:
                failures += 1
                assert h <= 1e-9 * np.std(y)
                continue
            if np.sum(r == 0.0) == design.p and np.abs(found[:, b] - program.x[: design.p]).max() < 1e-6:
                unique += 1
            K = 0.75 * np.maximum(1 - (r / h) ** 2, 0.0)
            bread = np.linalg.inv(X.T @ X)
            covariance = 0.25 * bread / (K.sum() / (design.n * h)) ** 2
            if name == "lad-kernel":
                inner = np.linalg.inv((X.T * K) @ X / h)
                covariance = 0.25 * inner @ X.T @ X @ inner
            for focus, fit in fits:
                agree(fit, focus, b, found[:, b], covariance, design.df, rel=1e-7)
            compared += 1
    assert compared + failures == 112
    assert compared >= 90
    assert unique >= 60


def test_median_regression_against_reweighting():
    """statsmodels' QuantReg reweights until its coefficients move by less than 1e-6: never below the minimum found here, and
    where it comes near to it, so do its standard errors (one sparsity). Its bandwidth looks at the SD of the response where
    that is less than IQR/1.34 of the residuals, which depends on the coefficients; here it is the SD of the residuals."""
    compared = close = 0
    for design, errors in data_sets():
        procedure = make_procedure("lad")
        found, failed = coefficients(procedure, design, errors)
        fit = procedure.prepare(design, [slope(design)], 0.95)(sample_of(design, errors))[0]
        for b in np.flatnonzero(~failed):
            y, X = errors[:, b], design.X
            with warnings.catch_warnings():
                # It warns where it runs out of rounds.
                warnings.simplefilter("ignore")
                theirs = sm.QuantReg(y, X).fit(q=0.5, vcov="iid")
            r = y - X @ found[:, b]
            assert np.abs(r).sum() <= np.abs(y - X @ theirs.params).sum() * (1 + 1e-9) + 1e-9
            compared += 1
            by_quartiles = np.diff(np.percentile(r, [25, 75]))[0] / 1.34 < 0.99 * min(np.std(y), np.std(r))
            if by_quartiles and np.abs(found[:, b] - theirs.params).max() < 1e-5:
                assert np.sqrt(fit.variance[b]) == pytest.approx(theirs.bse[1], rel=1e-3)
                close += 1
    assert compared >= 90
    assert close >= 40
