"""Deletion of outlying rows, and the added square, against statsmodels on every data set."""

import numpy as np
import pytest
import statsmodels.api as sm

from withstand.departures import Curvature
from withstand.errors import ScenarioError
from withstand.procedures import AddSquare, DropOutliers, Ols, make_procedure
from withstand.procedures.drop_outliers import outlying
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind, Point

from .odd_data import CASES, make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL = 0.9


def same_as(result, foci, fits, b, design_row=lambda L: L):
    """Intervals and tests of a statsmodels result against those of replicate b."""
    t_fit, joint, mean, new = fits
    low, high = result.conf_int(alpha=1 - LEVEL)[1]
    shown = [t_fit.estimate[0, b], *ends(t_fit, b)]
    np.testing.assert_allclose(shown, [result.params[1], low, high], rtol=1e-7, atol=1e-9)
    assert joint.rejects(np.zeros(2))[b] == (result.f_test(design_row(foci[1].L)).pvalue < 1 - LEVEL)
    told = result.get_prediction(design_row(foci[2].L)).summary_frame(alpha=1 - LEVEL)
    for fit, kind in ((mean, "mean"), (new, "obs")):
        expected = told[[f"{kind}_ci_lower", f"{kind}_ci_upper"]].iloc[0].to_numpy()
        np.testing.assert_allclose(ends(fit, b), expected, rtol=1e-7, atol=1e-9)


def ends(fit, b):
    return fit.estimate[0, b] - fit.width[b] / 2, fit.estimate[0, b] + fit.width[b] / 2


@pytest.mark.parametrize("beyond", [3.0, 1.5])
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_drop_outliers_agrees_with_statsmodels(kind, seed, beyond):
    design, errors = make(kind, seed)
    foci = [slope(design), two_slopes(design), mean_at(design), new_at(design)]
    fits = DropOutliers(beyond).prepare(design, foci, LEVEL)(sample_of(design, errors))
    for b in range(errors.shape[1]):
        y = errors[:, b]
        studentised = sm.OLS(y, design.X).fit().get_influence().resid_studentized_external
        kept = np.abs(studentised) <= beyond
        too_few = kept.sum() <= design.p or np.linalg.matrix_rank(design.X[kept]) < design.p
        assert too_few == (fits[0].failed is not None and bool(fits[0].failed[b]))
        if not too_few:
            same_as(sm.OLS(y[kept], design.X[kept]).fit(), foci, fits, b)


def test_the_hard_sets_do_lose_rows():
    lost = {kind: 0 for kind, _ in CASES}
    for kind, seed in CASES:
        design, errors = make(kind, seed)
        lost[kind] += np.count_nonzero(outlying(design, sample_of(design, errors), 3.0))
    assert lost["outlying"] >= 16
    assert lost["smallest"] > 0


def test_without_outlying_rows_it_is_least_squares():
    design, errors = make("plain", 1)
    sample = sample_of(design, np.clip(errors, -1.5, 1.5))
    foci = [slope(design), new_at(design)]
    one, other = (procedure.prepare(design, foci, LEVEL)(sample) for procedure in (DropOutliers(50.0), Ols()))
    for fit, plain in zip(one, other, strict=True):
        np.testing.assert_allclose(fit.estimate, plain.estimate)
        np.testing.assert_allclose(fit.width, plain.width)


def test_a_level_that_loses_all_its_rows_is_a_failure():
    """Two rows carry a level; one is far out at no leverage of its own, so both studentised residuals are large."""
    n = 30
    level = (np.arange(n) >= n - 2).astype(float)
    design = Design(np.column_stack([np.ones(n), level]), ("Intercept", "x1"))
    errors = np.random.default_rng(1).standard_normal((n, 2))
    errors[-2:, 0] = [40.0, -40.0]
    fit = DropOutliers().prepare(design, [slope(design)], LEVEL)(sample_of(design, errors))[0]
    np.testing.assert_array_equal(fit.failed, [True, False])


def test_drop_outliers_refuses_what_makes_no_sense():
    with pytest.raises(ScenarioError, match=r"drop-outliers\.beyond: beyond is 0"):
        DropOutliers(0.0)
    tiny = Design(np.column_stack([np.ones(3), np.arange(3.0)]), ("Intercept", "x1"))
    assert "leaves no degree of freedom" in DropOutliers().not_applicable(tiny, slope(tiny))


def with_points(design):
    """Foci whose point names the predictor, as add-square needs it."""
    point = Point(columns={"x1": 0.3})
    mean, new = mean_at(design), new_at(design)
    return [
        slope(design),
        two_slopes(design),
        Focus("mean", FocusKind.MEAN, mean.L, np.zeros(1), None, point),
        Focus("new", FocusKind.NEW, new.L, np.zeros(1), None, point),
    ]


@pytest.mark.parametrize("errors_of", ["ols", "hc3"])
@pytest.mark.parametrize(("kind", "seed"), CASES)
def test_add_square_agrees_with_statsmodels(kind, seed, errors_of):
    design, errors = make(kind, seed)
    foci = with_points(design)
    procedure = AddSquare(errors=errors_of)
    assert all(procedure.not_applicable(design, focus) is None for focus in foci)
    fits = procedure.prepare(design, foci, LEVEL)(sample_of(design, errors))
    x = design.X[:, 1]
    # v^2 less its regression on (1, v), by its own least squares.
    line = np.polynomial.polynomial.polyfit(x, x**2, 1)
    curved = x**2 - np.polynomial.polynomial.polyval(x, line)
    at = 0.3**2 - float(np.polynomial.polynomial.polyval(0.3, line))
    wide = np.column_stack([design.X, curved])

    def widened(L):
        return np.column_stack([L, np.full(len(L), at if L[0, 0] == 1.0 else 0.0)])

    for b in range(errors.shape[1]):
        result = sm.OLS(errors[:, b], wide).fit()
        if errors_of == "ols":
            same_as(result, foci, fits, b, widened)
        else:
            robust = result.get_robustcov_results("HC3", use_t=True)
            low, high = robust.conf_int(alpha=1 - LEVEL)[1]
            np.testing.assert_allclose(ends(fits[0], b), [low, high], rtol=1e-7, atol=1e-9)
            assert fits[1].rejects(np.zeros(2))[b] == (robust.f_test(widened(foci[1].L)).pvalue < 1 - LEVEL)


def test_add_square_takes_a_curved_mean_away():
    """A curved mean shifts the estimate of least squares where predictors are correlated, and leaves this one alone."""
    rng = np.random.default_rng(3)
    x = rng.uniform(0.0, 4.0, 40)
    z = (x - 2.0) ** 2 + 0.3 * rng.standard_normal(40)
    design = Design(np.column_stack([np.ones(40), x, z]), ("Intercept", "x1", "x2"), columns={"x1": x, "x2": z})
    mean = Curvature(along="x1").shift(design, 3.0)[:, None]
    sample = sample_of(design, mean)
    foci = [Focus.coefficient("x2", design.names)]
    assert abs(Ols().prepare(design, foci, LEVEL)(sample)[0].estimate[0, 0]) > 0.5
    assert abs(AddSquare("x1").prepare(design, foci, LEVEL)(sample)[0].estimate[0, 0]) < 1e-10


def test_add_square_chooses_a_column_that_can_be_squared():
    """The first numeric column has two values; the second can bend."""
    rng = np.random.default_rng(4)
    two, x = (np.arange(20) % 2).astype(float), rng.standard_normal(20)
    design = Design(np.column_stack([np.ones(20), two, x]), ("Intercept", "a", "x1"), columns={"a": two, "x1": x})
    sample = sample_of(design, rng.standard_normal((20, 3)))
    chosen, named = (AddSquare(along).prepare(design, [slope(design)], LEVEL)(sample)[0] for along in ("", "x1"))
    np.testing.assert_array_equal(chosen.estimate, named.estimate)


def test_add_square_says_why_not():
    x = np.arange(6.0)
    line = Design(np.column_stack([np.ones(6), x]), ("Intercept", "x1"), columns={"x1": x, "two": x % 2})
    assert "takes 2 values" in AddSquare("two").not_applicable(line, slope(line))
    bare = Design(line.X, line.names)
    assert "no numeric predictor whose square could be added" in AddSquare().not_applicable(bare, slope(bare))
    assert "no degree of freedom" in AddSquare().not_applicable(line.rows(np.arange(3)), slope(line))
    elsewhere = Focus("mean", FocusKind.MEAN, np.array([[1.0, 2.0]]), np.zeros(1), None, Point())
    assert "gives no value for 'x1'" in AddSquare().not_applicable(line, elsewhere)
    with pytest.raises(ScenarioError, match=r"add-square\.along: 'add-square' along 'x2': there is no numeric column 'x2'"):
        AddSquare("x2").not_applicable(line, slope(line))
    with pytest.raises(ScenarioError, match="errors is 'hc9'"):
        make_procedure("add-square", errors="hc9")
