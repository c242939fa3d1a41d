"""The number of rows and its power against noncentral t and F, which are exact when nothing is wrong."""

import numpy as np
import pytest
from scipy import special, stats

from withstand.departures import LevelSpread
from withstand.departures.world import World
from withstand.lab.size_plan import Targets
from withstand.lab.sizing import size_study
from withstand.procedures.base import make_procedure
from withstand.study.columns import Drawn, Levels, Shares
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study

OLS = (make_procedure("ols"),)
GROUPS = {"arm": Levels(("a", "b"))}


def two_arms(effect, level=0.95, sd=1.0):
    plan = StudyPlan(20, GROUPS, error_sd=sd)
    return planned_study(plan, "y ~ arm", focus="arm", effect={"arm": effect}, level=level)


def power_of_t(n, d, alpha=0.05):
    """Two arms of n/2: the noncentral t on n - 2 degrees of freedom, both tails."""
    return both_tails(n - 2, d * np.sqrt(n / 4), alpha)


def both_tails(df, shift, alpha=0.05):
    """Power of the two-sided t test; its square is F on 1 and df, whose noncentral law SciPy evaluates more safely."""
    return stats.ncf.sf(stats.t.isf(alpha / 2, df) ** 2, 1, df, shift**2)


def power_of_f(n, k, f, alpha=0.05):
    """One-way layout of k groups with effect size f."""
    return stats.ncf.sf(stats.f.isf(alpha, k - 1, n - k), k - 1, n - k, n * f**2)


def smallest(power, target, start, step):
    n = start
    while power(n) < target:
        n += step
    return n


def shown(answer, measure):
    rows = answer.curve[answer.curve["measure"] == measure]
    return dict(zip(rows["n"], rows["value"], strict=True))


@pytest.mark.parametrize(
    ("d", "each"),
    [
        (0.5, 64),  # Cohen (1988), table 2.4.1; the number is in the list of outside values
        (0.8, 26),  # the same table, from memory
    ],
)
def test_cohen(d, each):
    answer = size_study(two_arms(d), OLS, targets=Targets(holds=False, power=0.8))
    assert answer.n == 2 * each


@pytest.mark.parametrize("d", [0.3, 0.7, 1.3])
@pytest.mark.parametrize("power", [0.8, 0.95])
@pytest.mark.parametrize("level", [0.9, 0.99])
def test_two_arms_equal_the_noncentral_t(d, power, level):
    # Effect and error SD in units of their own: only their ratio counts.
    answer = size_study(two_arms(7.0 * d, level, sd=7.0), OLS, targets=Targets(power=power))
    size = answer.sizes[0]
    assert size.n == size.low == size.high == smallest(lambda n: power_of_t(n, d, 1 - level), power, 4, 2)
    assert size.method == "exact"
    for n, value in shown(answer, "power").items():
        assert value == pytest.approx(power_of_t(n, d, 1 - level), abs=1e-8)
    for value in shown(answer, "coverage").values():
        assert value == pytest.approx(level, abs=1e-8)


def test_one_way_layouts_equal_the_noncentral_f():
    k, f = 10, 0.25
    plan = StudyPlan(20, {"arm": Levels(tuple("abcdefghij"))}, error_sd=2.0)
    # Means that are equally far above and below: f is their SD in error SDs.
    means = 2.0 * f * np.array([1.0, -1.0] * 5)
    study = planned_study(plan, "y ~ arm", focus="arm", effect={"arm": list(means[1:] - means[0])})
    answer = size_study(study, OLS, targets=Targets(holds=False, power=0.95))
    found = shown(answer, "power")
    assert answer.n == smallest(lambda n: power_of_f(n, k, f), 0.95, 20, 10) == 390
    # N = 390: .95236, from a published worked example; in the list of outside values.
    assert found[390] == pytest.approx(0.95236, abs=5e-6)
    for n, value in found.items():
        assert value == pytest.approx(power_of_f(n, k, f), abs=1e-7)


def test_an_interaction_is_a_target_like_any_other():
    plan = StudyPlan(16, {"lamp": Levels(("low", "high")), "bench": Levels(("south", "north"))}, error_sd=1.0)
    study = planned_study(plan, "y ~ lamp * bench", focus="lamp[high]:bench[north]", effect={"lamp[high]:bench[north]": 1.0})
    answer = size_study(study, OLS, targets=Targets(power=0.9))

    def power(n):
        # The difference of two differences of cell means of n/4 rows has variance 16/n.
        return both_tails(n - 4, np.sqrt(n / 16))

    assert answer.n == smallest(power, 0.9, 8, 4)


def test_half_width_is_the_mean_of_the_interval():
    answer = size_study(two_arms(1.0, sd=3.0), OLS, targets=Targets(holds=False, half_width=1.0))

    def half(n):
        df = n - 2
        mean_s = np.sqrt(2 / df) * np.exp(special.gammaln((df + 1) / 2) - special.gammaln(df / 2))
        return 3.0 * stats.t.isf(0.025, df) * mean_s * np.sqrt(4 / n)

    assert answer.n == smallest(lambda n: -half(n), -1.0, 4, 2)
    for n, value in shown(answer, "half_width").items():
        assert value == pytest.approx(half(n), rel=1e-7)


@pytest.mark.parametrize(("r", "effect"), [(0.0, 0.8), (0.6, 1.0)])
def test_drawn_predictors_with_correlation(r, effect):
    """Given z, the sum of squares of x about its line on z is (1 - r^2) chi-square on n - 2 degrees of freedom."""
    columns = {"x": Drawn("normal", mean=0, sd=1, correlated={"z": r}), "z": Drawn("normal", mean=0, sd=1)}
    study = planned_study(StudyPlan(20, columns, error_sd=1.0), "y ~ x + z", focus="x", effect={"x": effect})

    def power(n):
        s = stats.chi2.ppf((np.arange(2000) + 0.5) / 2000, n - 2)
        return float(np.mean(both_tails(n - 3, effect * np.sqrt((1 - r**2) * s))))

    answer = size_study(study, OLS, targets=Targets(holds=False, power=0.8))
    size = answer.sizes[0]
    assert size.low <= smallest(power, 0.8, 8, 1) <= size.high
    rows = answer.curve[answer.curve["measure"] == "power"]
    # Near 0 and 1 the law of the power over tables is too skew for a standard error from 24 of them.
    rows = rows[rows["value"].between(0.25, 0.95)]
    assert len(rows) >= 5
    for row in rows.itertuples():
        # One false alarm in 150,000, with the standard error estimated from so many tables.
        assert abs(row.value - power(row.n)) <= stats.t.isf(3.4e-6, row.repetitions - 1) * row.mc_se + 1e-6


@pytest.mark.parametrize(
    ("shares", "noisy", "ratio", "miss"),
    [
        # Scheffe (1959), section 10.2: P = 2 Phi(-1.96 sqrt((R theta + 1)/(theta + R))), R = n1/n2, theta = var1/var2.
        ({"a": 2 / 3, "b": 1 / 3}, "b", np.sqrt(5.0), 0.1179),
        ({"a": 5 / 6, "b": 1 / 6}, "b", np.sqrt(2.0), 0.1179),
    ],
)
def test_no_number_of_rows_cures_unequal_variances(shares, noisy, ratio, miss):
    plan = StudyPlan(24, {"arm": Shares(shares, by_count=True)}, error_sd=1.0)
    study = planned_study(plan, "y ~ arm", focus="arm", effect={"arm": 1.0})
    world = World(((LevelSpread(along="arm", noisy=(noisy,)), ratio),))
    answer = size_study(study, (make_procedure("ols"), make_procedure("hc2-bm")), (world,))
    ols, robust = answer.sizes
    assert ols.no_cure
    assert ols.n is None
    assert 1.0 - ols.limit == pytest.approx(miss, abs=2e-3)
    assert "hc2-bm" in ols.instead
    assert "ols" not in ols.instead
    assert robust.n is not None
    assert answer.best.procedure == "hc2-bm"
    assert "no number of rows cures this" in answer.sentences[0]
