"""Linear procedures against statsmodels, one data set at a time; those it lacks against plain references with full matrices."""

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from withstand.procedures import Hac, HacCosine, make_procedure

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

TOLERANCE = 1e-8
LEVELS = (0.5, 0.9, 0.99)
VALUE = 0.4
"""A value of every focal quantity to test."""

PACKAGED = {
    "ols": ("ols", {}),
    "hc0": ("hc0", {"cov_type": "HC0"}),
    "hc1": ("hc1", {"cov_type": "HC1"}),
    "hc2": ("hc2", {"cov_type": "HC2"}),
    "hc3": ("hc3", {"cov_type": "HC3"}),
    "hac": (Hac(), {"cov_type": "HAC", "cov_kwds": {"maxlags": None, "use_correction": True}}),
    "hac, one lag": (Hac(lag=1), {"cov_type": "HAC", "cov_kwds": {"maxlags": 1, "use_correction": True}}),
    "cr0": ("cr0", {"cov_type": "cluster", "cov_kwds": {"use_correction": False}}),
    "cr1": ("cr1", {"cov_type": "cluster", "cov_kwds": {"use_correction": True}}),
    "known-weights": ("known-weights", {}),
}


def designs():
    """Designs with errors and coefficients; each column of errors is a data set."""
    for kind, seed in CASES:
        design, errors = make(kind, seed)
        rng = np.random.default_rng(seed)
        yield replace(design, weights=rng.uniform(0.2, 5.0, design.n)), errors, rng.normal(size=design.p)


def fits_of(procedure, design, foci, errors, level):
    usable = [focus for focus in foci if procedure.not_applicable(design, focus) is None]
    return zip(usable, procedure.prepare(design, usable, level)(sample_of(design, errors)), strict=True) if usable else ()


def packaged(name, design, y):
    """The same fit by statsmodels."""
    if name == "known-weights":
        return sm.WLS(y, design.X, weights=design.weights).fit()
    options = dict(PACKAGED[name][1])
    if "cov_type" not in options:
        return sm.OLS(y, design.X).fit()
    keywords = dict(options.get("cov_kwds", {}))
    if name == "hac":
        keywords["maxlags"] = int(4 * (design.n / 100) ** (2 / 9))
    if options["cov_type"] == "cluster":
        keywords["groups"] = design.groups
    return sm.OLS(y, design.X).fit(cov_type=options["cov_type"], cov_kwds=keywords or None, use_t=True)


def near(actual, expected):
    return actual == pytest.approx(expected, rel=TOLERANCE, abs=TOLERANCE)


@pytest.mark.parametrize("name", PACKAGED)
def test_estimates_intervals_and_p_values_of_single_quantities(name):
    procedure = make_procedure(PACKAGED[name][0])
    compared = 0
    for design, errors, beta in designs():
        for level in LEVELS:
            for focus, fit in fits_of(procedure, design, [slope(design), mean_at(design)], errors, level):
                for b in range(errors.shape[1]):
                    theirs = packaged(name, design, design.X @ beta + errors[:, b]).t_test(focus.L)
                    estimate = fit.estimate[0, b] + focus.L[0] @ beta
                    low, high = theirs.conf_int(alpha=1 - level)[0]
                    assert near(estimate, theirs.effect[0])
                    assert near(np.sqrt(fit.variance[b]), theirs.sd.item())
                    assert near(fit.width[b], high - low)
                    truth = np.array([VALUE]) - focus.L[0] @ beta
                    below, above = (side[b] for side in fit.misses(truth))
                    assert (below, above) == (high < VALUE, low > VALUE)
                    p = packaged(name, design, design.X @ beta + errors[:, b]).t_test((focus.L, [VALUE])).pvalue.item()
                    assert fit.rejects(truth)[b] == (p < 1 - level)
                    compared += 1
    assert compared >= 600


@pytest.mark.parametrize("name", PACKAGED)
def test_joint_tests(name):
    procedure = make_procedure(PACKAGED[name][0])
    compared = 0
    for design, errors, beta in designs():
        focus = two_slopes(design)
        for _, fit in fits_of(procedure, design, [focus], errors, 0.9):
            value = focus.L @ beta + VALUE
            for b in range(errors.shape[1]):
                model = packaged(name, design, design.X @ beta + errors[:, b])
                theirs = model.f_test((focus.L, value))
                distance = fit.estimate[:, b] - VALUE
                covariance = focus.L @ model.cov_params() @ focus.L.T
                assert fit.covariance[:, :, b] == pytest.approx(covariance, rel=TOLERANCE, abs=TOLERANCE)
                # Near a singular covariance the statistic magnifies the last digits of either program.
                loose = TOLERANCE * max(1.0, np.linalg.cond(covariance) * 1e-6)
                statistic = distance @ np.linalg.solve(fit.covariance[:, :, b], distance) / 2
                assert statistic == pytest.approx(float(theirs.fvalue), rel=loose)
                if not abs(theirs.pvalue - 0.1) < 1e-6:
                    assert fit.rejects(np.full(2, VALUE))[b] == (theirs.pvalue < 0.1)
                compared += 1
    assert compared >= 50


@pytest.mark.parametrize("name", ["ols", "hc0", "hc3", "hac, one lag", "cr1"])
def test_intervals_of_new_responses(name):
    """For clusters statsmodels takes t(n - p) in predictions and t(G - 1) elsewhere; here it is t(G - 1) throughout."""
    procedure = make_procedure(PACKAGED[name][0])
    compared = 0
    for design, errors, beta in designs():
        for focus, fit in fits_of(procedure, design, [new_at(design)], errors, 0.9):
            for b in range(errors.shape[1]):
                model = packaged(name, design, design.X @ beta + errors[:, b])
                theirs = model.get_prediction(focus.L)
                low, high = theirs.conf_int(obs=True, alpha=0.1)[0]
                again = (
                    stats.t.ppf(0.95, model.df_resid_inference) / stats.t.ppf(0.95, model.df_resid) if name == "cr1" else 1.0
                )
                assert near(fit.estimate[0, b] + focus.L[0] @ beta, theirs.predicted_mean[0])
                assert near(fit.width[b], again * (high - low))
                compared += 1
    assert compared >= 50


def hat(X):
    return X @ np.linalg.pinv(X)


def satterthwaite(M, D):
    """Degrees of freedom of u' M D M u under independent normal errors: twice the squared mean over the variance."""
    S = M @ D @ M
    return np.trace(S) ** 2 / np.trace(S @ S)


def reference_sandwich(name, design, A, e):
    h = np.diag(hat(design.X))
    ratio = h / h.mean()
    power = {
        "hc2-bm": np.ones(design.n),
        "hc4": np.minimum(4.0, ratio),
        "hc4m": np.minimum(1.0, ratio) + np.minimum(1.5, ratio),
        "hc5": np.minimum(ratio, max(4.0, 0.7 * ratio.max())) / 2,
    }[name]
    D = np.diag(e**2 / (1 - h) ** power)
    df = design.n - design.p
    if name == "hc2-bm":
        df = satterthwaite(np.eye(design.n) - hat(design.X), np.diag(A[0] ** 2 / (1 - h)))
    return A @ D @ A.T, df


def reference_cosine(design, A, e):
    n = design.n
    nu = max(1, int(0.4 * n ** (2 / 3)))
    t = np.arange(1, n + 1)
    sums = np.array([np.sqrt(2) * (A * e) @ np.cos(np.pi * j * (t - 0.5) / n) for j in range(1, nu + 1)])
    return sums.T @ sums / nu, nu


def adjusted(design, A):
    """Scores (I - H_gg)^(-1/2) a_g from the whole matrices, with a pseudo-inverse."""
    H = hat(design.X)
    b = np.zeros_like(A)
    for g in np.unique(design.groups):
        rows = np.flatnonzero(design.groups == g)
        values, vectors = np.linalg.eigh(np.eye(rows.size) - H[np.ix_(rows, rows)])
        root = np.where(values > 1e-10, 1 / np.sqrt(np.maximum(values, 1e-10)), 0.0)
        b[:, rows] = A[:, rows] @ vectors @ np.diag(root) @ vectors.T
    return b


def blocks(design, one, other):
    """Symmetric matrix of sum_g (one_g' u_g)(other_g' u_g)."""
    B = np.outer(one, other) * (design.groups[:, None] == design.groups[None, :])
    return (B + B.T) / 2


def reference_cr2(design, A, e):
    b = adjusted(design, A)
    V = np.array([[e @ blocks(design, one, other) @ e for other in b] for one in b])
    M = np.eye(design.n) - hat(design.X)
    if len(A) == 1:
        return V, satterthwaite(M, blocks(design, b[0], b[0]))
    # Total variance of the covariance of orthonormal quantities, matched to that of a Wishart matrix.
    b = adjusted(design, np.linalg.inv(np.linalg.cholesky(A @ A.T)) @ A)
    total = 0.0
    for one in b:
        for other in b:
            S = M @ blocks(design, one, other) @ M
            total += 2 * np.trace(S @ S)
    return V, len(A) * (len(A) + 1) / total


REFERENCES = {
    "hc2-bm": lambda d, A, e: reference_sandwich("hc2-bm", d, A, e),
    "hc4": lambda d, A, e: reference_sandwich("hc4", d, A, e),
    "hc4m": lambda d, A, e: reference_sandwich("hc4m", d, A, e),
    "hc5": lambda d, A, e: reference_sandwich("hc5", d, A, e),
    "hac-cosine": reference_cosine,
    "cr2": reference_cr2,
}


@pytest.mark.parametrize("name", REFERENCES)
def test_procedures_no_package_has(name):
    procedure = make_procedure(name)
    compared = 0
    for design, errors, _ in designs():
        for focus, fit in fits_of(procedure, design, [slope(design), mean_at(design)], errors, 0.9):
            A = focus.L @ np.linalg.pinv(design.X)
            for b in range(errors.shape[1]):
                e = errors[:, b] - hat(design.X) @ errors[:, b]
                V, df = REFERENCES[name](design, A, e)
                assert near(fit.estimate[0, b], (A @ errors[:, b])[0])
                assert near(fit.variance[b], V[0, 0])
                assert near(fit.width[b], 2 * stats.t.ppf(0.95, df) * np.sqrt(V[0, 0]))
                compared += 1
    assert compared >= 100


@pytest.mark.parametrize("name", ["hc4", "hc4m", "hc5", "hac-cosine", "cr2"])
def test_joint_tests_no_package_has(name):
    """Hotelling's law for the cosines and for CR2: nu/(nu - k + 1) times F(k, nu - k + 1) for the statistic over k."""
    procedure = make_procedure(name)
    compared = 0
    for design, errors, _ in designs():
        focus = two_slopes(design)
        for _, fit in fits_of(procedure, design, [focus], errors, 0.9):
            A = focus.L @ np.linalg.pinv(design.X)
            for b in range(errors.shape[1]):
                e = errors[:, b] - hat(design.X) @ errors[:, b]
                V, df = REFERENCES[name](design, A, e)
                assert fit.covariance[:, :, b] == pytest.approx(V, rel=TOLERANCE, abs=TOLERANCE)
                bound = stats.f.ppf(0.9, 2, df)
                if name in ("hac-cosine", "cr2"):
                    bound = stats.f.ppf(0.9, 2, df - 1) * df / (df - 1)
                assert fit.critical == pytest.approx(bound, rel=1e-7)
                compared += 1
    assert compared >= 50


def test_the_number_of_cosines_can_be_given():
    design = make("plain", 1)[0]
    A = design.estimator(slope(design).L)
    assert HacCosine(terms=5).degrees_of_freedom(design, A) == 5
    assert HacCosine().degrees_of_freedom(design, A) == int(0.4 * design.n ** (2 / 3))
