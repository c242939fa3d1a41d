"""Bootstraps and the permutation test against plain refits of every drawn data set."""

import itertools

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import linalg

from withstand.errors import ScenarioError
from withstand.procedures import (
    PairsBootstrap,
    Permutation,
    ResidualBootstrap,
    WildBootstrap,
    WildClusterBootstrap,
    make_procedure,
)
from withstand.procedures.base import Answer
from withstand.procedures.multipliers import exceeded, kth_largest, rademacher, wald, webb
from withstand.study.design import Design
from withstand.study.focus import Focus

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL, ALPHA, DRAWS = 0.9, 0.1, 39
POWER = {"hc3": 1.0, "hc2": 0.5, "hc0": 0.0}


def generator(sample, name):
    return sample.noise.procedure_generator(name)


def ols(X, y):
    b = np.linalg.lstsq(X, y, rcond=None)[0]
    return b, y - X @ b


def hat(X):
    return np.diag(X @ np.linalg.pinv(X))


def sandwich(X, e, L, power=0.0, factor=1.0):
    """L V L' of a sandwich with residuals divided by a power of 1 - h."""
    bread = np.linalg.inv(X.T @ X)
    e = e / (1.0 - hat(X)) ** power if power else e
    return factor * L @ bread @ (X.T * e**2) @ X @ bread @ L.T


def cr1(X, e, L, groups):
    n, p = X.shape
    bread = np.linalg.inv(X.T @ X)
    scores = np.array([X[groups == g].T @ e[groups == g] for g in np.unique(groups)])
    G = len(scores)
    return G / (G - 1) * (n - 1) / (n - p) * L @ bread @ scores.T @ scores @ bread @ L.T


def statistic(distance, covariance):
    return float(distance @ np.linalg.solve(covariance, distance))


def restricted(X, y, L, value):
    """Coefficients, residuals and leverages of least squares under L b = value, through a basis of the free directions."""
    free = linalg.null_space(L)
    particular = np.linalg.pinv(L) @ value
    e = ols(X @ free, y - X @ particular)[1]
    return e, hat(X @ free)


def significant(drawn, observed, alpha=ALPHA):
    return (1 + np.sum(np.asarray(drawn) >= observed * (1 - 1e-9))) / (1 + len(drawn)) <= alpha + 1e-9


VALUES = (0.0, 0.4, -1.5)


def same_tests(fit, focus, reference):
    for value in VALUES:
        asked = np.full(focus.k, value)
        np.testing.assert_array_equal(fit.rejects(asked), [reference(b, asked) for b in range(len(fit.estimate[0]))])


@pytest.mark.parametrize(
    ("weights", "residuals"), [("rademacher", "hc3"), ("webb", "hc3"), ("rademacher", "hc2"), ("webb", "hc0")]
)
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_wild_bootstrap(kind, seed, weights, residuals):
    design, errors = make(kind, seed)
    procedure = WildBootstrap(weights, DRAWS, residuals)
    sample = sample_of(design, errors)
    foci = [slope(design), two_slopes(design)]
    fits = procedure.prepare(design, foci, LEVEL)(sample)
    law = {"rademacher": rademacher, "webb": webb}[weights]
    V = law(generator(sample, procedure.name), (DRAWS, design.n))
    X, power = design.X, POWER[residuals]

    def drawn(L, u):
        found = []
        for v in V:
            b, e = ols(X, v * u)
            found.append(statistic(L @ b, sandwich(X, e, L, power)))
        return found

    for focus, fit in zip(foci, fits, strict=True):
        L = focus.L

        def reference(replicate, value, L=L):
            y = errors[:, replicate]
            b, e = ols(X, y)
            under, h = restricted(X, y, L, value)
            observed = statistic(L @ b - value, sandwich(X, e, L, power))
            return significant(drawn(L, under / (1 - h) ** power), observed)

        same_tests(fit, focus, reference)
    for replicate in range(errors.shape[1]):
        b, e = ols(X, errors[:, replicate])
        L = foci[0].L
        critical = np.sort(drawn(L, e / (1 - hat(X)) ** power))[round((DRAWS + 1) * LEVEL) - 1]
        half = np.sqrt(critical * sandwich(X, e, L, power)[0, 0])
        assert fits[0].low[replicate] == pytest.approx((L @ b)[0] - half, rel=1e-6)
        assert fits[0].high[replicate] == pytest.approx((L @ b)[0] + half, rel=1e-6)


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_wild_cluster_bootstrap(kind, seed):
    design, errors = make(kind, seed)
    procedure = WildClusterBootstrap("webb", DRAWS)
    sample = sample_of(design, errors)
    foci = [focus for focus in (slope(design), two_slopes(design)) if procedure.not_applicable(design, focus) is None]
    fits = procedure.prepare(design, foci, LEVEL)(sample)
    V = webb(generator(sample, procedure.name), (DRAWS, design.group_count))[:, design.groups]
    X, groups = design.X, design.groups

    def reference(replicate, value, L):
        y = errors[:, replicate]
        b, e = ols(X, y)
        under, _ = restricted(X, y, L, value)
        drawn = []
        for v in V:
            b_drawn, e_drawn = ols(X, v * under)
            drawn.append(statistic(L @ b_drawn, cr1(X, e_drawn, L, groups)))
        return significant(drawn, statistic(L @ b - value, cr1(X, e, L, groups)))

    for focus, fit in zip(foci, fits, strict=True):
        same_tests(fit, focus, lambda replicate, value, L=focus.L: reference(replicate, value, L))
    # The ends are where the test turns: accepted just inside, rejected just outside.
    fit, L = fits[0], foci[0].L
    nudge = 1e-4 * np.sqrt(fit.claimed)
    for replicate in range(0 if fit.failed is not None else errors.shape[1]):
        for end, outwards in ((fit.low, -1.0), (fit.high, 1.0)):
            assert reference(replicate, np.array([end[replicate] + outwards * nudge[replicate]]), L)
            assert not reference(replicate, np.array([end[replicate] - outwards * nudge[replicate]]), L)


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_pairs_bootstrap(kind, seed):
    design, errors = make(kind, seed)
    procedure = PairsBootstrap(DRAWS)
    sample = sample_of(design, errors)
    foci = [slope(design), two_slopes(design)]
    fits = procedure.prepare(design, foci, LEVEL)(sample)
    counts = procedure._draw(design, generator(sample, procedure.name)).counts
    X, n = design.X, design.n
    factor = n / design.df
    np.testing.assert_array_equal(counts.sum(axis=1), n)
    for replicate in range(errors.shape[1]):
        y = errors[:, replicate]
        b, e = ols(X, y)
        for focus, fit in zip(foci, fits, strict=True):
            L, found = focus.L, []
            for count in counts.astype(int):
                rows = np.repeat(np.arange(n), count)
                b_drawn, e_drawn = ols(X[rows], y[rows])
                found.append((L @ (b_drawn - b), sandwich(X[rows], e_drawn, L, factor=factor)))
            claimed = sandwich(X, e, L, factor=factor)
            if focus.scalar:
                t = np.sort([float(d[0] / np.sqrt(v[0, 0])) for d, v in found])
                # 39 drawn values: the ends of a 90 % interval are the second from each side.
                low, high = (L @ b)[0] - t[[-2, 1]] * np.sqrt(claimed[0, 0])
                np.testing.assert_allclose([fit.low[replicate], fit.high[replicate]], [low, high], rtol=1e-5, atol=1e-9)
            else:
                drawn = [statistic(d, v) for d, v in found]
                for value in VALUES:
                    observed = statistic(L @ b - value, claimed)
                    assert fit.rejects(np.full(2, value))[replicate] == significant(drawn, observed)


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_pairs_bootstrap_with_percentile_intervals(kind, seed):
    design, errors = make(kind, seed)
    procedure = PairsBootstrap(DRAWS, interval="percentile")
    sample = sample_of(design, errors)
    focus, X = slope(design), design.X
    fit = procedure.prepare(design, [focus], LEVEL)(sample)[0]
    counts = procedure._draw(design, generator(sample, procedure.name)).counts.astype(int)
    for replicate in range(errors.shape[1]):
        y = errors[:, replicate]
        drawn = [(focus.L @ ols(np.repeat(X, count, axis=0), np.repeat(y, count))[0])[0] for count in counts]
        np.testing.assert_allclose([fit.low[replicate], fit.high[replicate]], np.sort(drawn)[[1, -2]], rtol=1e-5, atol=1e-9)
        assert fit.claimed[replicate] == pytest.approx(np.var(drawn, ddof=1), rel=1e-5)
        np.testing.assert_array_equal(fit.rejects(np.zeros(1))[replicate], not np.sort(drawn)[1] <= 0.0 <= np.sort(drawn)[-2])


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_residual_bootstrap(kind, seed):
    design, errors = make(kind, seed)
    procedure = ResidualBootstrap(DRAWS)
    sample = sample_of(design, errors)
    foci = [slope(design), two_slopes(design), new_at(design)]
    fits = procedure.prepare(design, foci, LEVEL)(sample)
    draws = generator(sample, procedure.name)
    codes, new = draws.integers(0, design.n, (DRAWS, design.n)), draws.integers(0, design.n, DRAWS)
    X, bread = design.X, np.linalg.inv(design.X.T @ design.X)
    for replicate in range(errors.shape[1]):
        b, e = ols(X, errors[:, replicate])
        pool = e / np.sqrt(1 - hat(X))
        pool = pool - pool.mean()
        for focus, fit in zip(foci, fits, strict=True):
            L = focus.L
            fresh = focus.name == "new"
            shape = L @ bread @ L.T + fresh
            found = []
            for code, one in zip(codes, new, strict=True):
                b_drawn, e_drawn = ols(X, X @ b + pool[code])
                found.append((L @ (b_drawn - b) - fresh * pool[one], e_drawn @ e_drawn / design.df))
            s2 = e @ e / design.df
            if focus.scalar:
                t = np.sort([float(d[0] / np.sqrt(v * shape[0, 0])) for d, v in found])
                low, high = (L @ b)[0] - t[[-2, 1]] * np.sqrt(s2 * shape[0, 0])
                np.testing.assert_allclose([fit.low[replicate], fit.high[replicate]], [low, high], rtol=1e-6, atol=1e-9)
            else:
                drawn = [statistic(d, v * shape) for d, v in found]
                for value in VALUES:
                    observed = statistic(L @ b - value, s2 * shape)
                    assert fit.rejects(np.full(2, value))[replicate] == significant(drawn, observed)


@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_permutation(kind, seed):
    design, errors = make(kind, seed)
    procedure = Permutation(DRAWS)
    sample = sample_of(design, errors)
    foci = [slope(design), two_slopes(design)]
    fits = procedure.prepare(design, foci, LEVEL)(sample)
    codes = generator(sample, procedure.name).permuted(np.tile(np.arange(design.n), (DRAWS, 1)), axis=1)
    X, bread = design.X, np.linalg.inv(design.X.T @ design.X)
    for focus, fit in zip(foci, fits, strict=True):
        L = focus.L

        def f_ratio(y, value, L=L):
            b, e = ols(X, y)
            return statistic(L @ b - value, L @ bread @ L.T) / (e @ e)

        def reference(replicate, value, L=L, f_ratio=f_ratio):
            y = errors[:, replicate]
            under, _ = restricted(X, y, L, value)
            return significant([f_ratio(y - under + under[code], value) for code in codes], f_ratio(y, value))

        same_tests(fit, focus, reference)
        assert fit.misses(np.zeros(1)) is None
        assert procedure.answers(focus) == {Answer.TEST}


def test_the_plain_references_agree_with_statsmodels():
    """The sandwich and cluster variances above, on one data set, against a general package."""
    design, errors = make("plain", 1)
    X, y, L = design.X, errors[:, 0], np.eye(design.p)
    e = ols(X, y)[1]
    model = sm.OLS(y, X)
    np.testing.assert_allclose(sandwich(X, e, L, 1.0), model.fit(cov_type="HC3").cov_params(), rtol=1e-9)
    np.testing.assert_allclose(sandwich(X, e, L, 0.5), model.fit(cov_type="HC2").cov_params(), rtol=1e-9)
    clustered = model.fit(cov_type="cluster", cov_kwds={"groups": design.groups})
    np.testing.assert_allclose(cr1(X, e, L, design.groups), clustered.cov_params(), rtol=1e-9)


@pytest.mark.parametrize("residuals", ["hc0", "hc2", "hc3"])
def test_over_all_signs_the_wild_estimate_has_the_sandwich_variance(residuals):
    """u = e gives HC0, e/sqrt(1-h) HC2, e/(1-h) HC3: an identity in the 2^n sign vectors."""
    rng = np.random.default_rng(4)
    design = Design(np.column_stack([np.ones(9), rng.standard_normal((9, 1))]), ("Intercept", "x1"))
    sample = sample_of(design, rng.standard_normal((9, 3)))
    signs = np.array(list(itertools.product((-1.0, 1.0), repeat=9)))
    a = design.estimator(slope(design).L)[0]
    u = sample.residuals / (1 - design.leverage[:, None]) ** POWER[residuals]
    mean_square = np.mean((signs @ (a[:, None] * u)) ** 2, axis=0)
    claimed = make_procedure(residuals).prepare(design, [slope(design)], LEVEL)(sample)[0].variance
    np.testing.assert_allclose(mean_square, claimed, rtol=1e-12)


def test_weights_have_mean_zero_and_variance_one():
    for law, fourth in ((rademacher, 1.0), (webb, (0.25 + 1.0 + 2.25) / 3.0)):
        values = law(np.random.default_rng(1), (200, 500))
        count = values.size
        assert abs(values.mean()) < 4.5 / np.sqrt(count)
        assert abs(np.mean(values**2) - 1.0) <= 4.5 * np.sqrt((fourth - 1.0) / count)
    np.testing.assert_allclose(np.unique(webb(np.random.default_rng(1), (50, 50))) ** 2, [1.5, 1.0, 0.5, 0.5, 1.0, 1.5])


def test_slabs_of_a_wide_block_do_not_share_draws():
    design, _ = make("plain", 1)
    same = np.repeat(np.random.default_rng(2).standard_normal((design.n, 1)), 120, axis=1)
    low = WildBootstrap(draws=DRAWS).prepare(design, [slope(design)], LEVEL)(sample_of(design, same))[0].low
    assert len(np.unique(low.round(12))) == 3
    np.testing.assert_allclose(low[:50], low[0])


def test_wald_against_a_solve_and_at_singular_covariances():
    rng = np.random.default_rng(7)
    roots = rng.standard_normal((40, 3, 4))
    covariance = np.einsum("bij,bkj->ikb", roots, roots)
    distance = rng.standard_normal((3, 40))
    direct = [statistic(distance[:, b], covariance[:, :, b]) for b in range(40)]
    np.testing.assert_allclose(wald(distance, covariance), direct, rtol=1e-8)
    assert np.isinf(wald(np.ones((2, 1)), np.zeros((2, 2, 1)))).all()
    assert np.isinf(wald(np.ones((1, 1)), np.zeros((1, 1, 1)))).all()


def test_ranks_and_p_values_agree():
    drawn = np.random.default_rng(3).standard_normal((6, 99)) ** 2
    critical = kth_largest(drawn, 4)
    assert exceeded(drawn, critical * 1.001, 4).all()
    assert not exceeded(drawn, critical * 0.999, 4).any()


@pytest.mark.parametrize(
    ("name", "options", "told"),
    [
        ("wild-bootstrap", {"weights": "mammen"}, r"wild-bootstrap\.weights: weights is 'mammen'"),
        ("wild-bootstrap", {"residuals": "hc4"}, r"wild-bootstrap\.residuals: residuals is 'hc4'"),
        ("wild-cluster-bootstrap", {"weights": "none"}, "weights is 'none'"),
        ("pairs-bootstrap", {"draws": 9}, r"pairs-bootstrap\.draws: draws is 9"),
        ("pairs-bootstrap", {"interval": "bca"}, r"pairs-bootstrap\.interval: interval is 'bca'"),
        ("permutation", {"draws": 0}, "draws is 0"),
    ],
)
def test_options_out_of_range_are_refused(name, options, told):
    with pytest.raises(ScenarioError, match=told):
        make_procedure(name, **options)


def test_too_few_draws_for_the_level_are_refused():
    design, _ = make("plain", 1)
    for name in ("wild-bootstrap", "permutation", "residual-bootstrap"):
        with pytest.raises(ScenarioError, match=r"19 draws can never reject at 0\.0"):
            make_procedure(name, draws=19).prepare(design, [slope(design)], 0.99)


def test_not_applicable_says_why():
    design, _ = make("plain", 1)
    bare = Design(design.X, design.names)
    assert "new response" in WildBootstrap().not_applicable(design, new_at(design))
    assert "several coefficients" in PairsBootstrap(interval="percentile").not_applicable(design, two_slopes(design))
    assert "new response" in Permutation().not_applicable(design, new_at(design))
    assert "no groups" in WildClusterBootstrap().not_applicable(bare, slope(design))
    for focus in (mean_at(design), Focus.coefficient("Intercept", design.names)):
        assert "contains the level" in Permutation().not_applicable(design, focus)
    spike = Design(np.column_stack([np.ones(9), np.arange(9) == 4]).astype(float), ("Intercept", "x1"))
    assert "row 5 (in analysis order) has leverage 1" in WildBootstrap().not_applicable(spike, slope(spike))


def test_rows_that_can_hardly_be_drawn_count_as_failures():
    """With two rows more than 30 columns, next to no draw holds 31 different rows."""
    rng = np.random.default_rng(5)
    design = Design(
        np.column_stack([np.ones(32), rng.standard_normal((32, 29))]), ("Intercept", *(f"x{i}" for i in range(1, 30)))
    )
    fit = PairsBootstrap(19).prepare(design, [slope(design)], LEVEL)(sample_of(design, rng.standard_normal((32, 4))))[0]
    assert fit.failed.all()


def test_few_clusters_with_signs_alone_never_reject():
    """Four clusters have 16 sign vectors; two of them give t* = t, more than one in twenty."""
    rng = np.random.default_rng(6)
    design = Design(
        np.column_stack([np.ones(20), rng.standard_normal(20)]), ("Intercept", "x1"), groups=np.repeat(np.arange(4), 5)
    )
    sample = sample_of(design, rng.standard_normal((20, 30)))
    signs = WildClusterBootstrap("rademacher").prepare(design, [slope(design)], 0.95)(sample)[0]
    assert signs.failed.all()
    assert not signs.rejects(np.array([1e3])).any()
    assert WildClusterBootstrap().prepare(design, [slope(design)], 0.95)(sample)[0].failed is None
