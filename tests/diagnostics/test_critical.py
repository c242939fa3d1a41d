"""Critical values by simulation, and the statistic that answers to each departure."""

import numpy as np
import pytest
from scipy import stats

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.level_spread import LevelSpread
from withstand.departures.mean import Curvature
from withstand.departures.outliers import Outliers
from withstand.departures.power_spread import PowerSpread
from withstand.departures.shape import Contaminated, HeavyTails, Skew
from withstand.departures.spread import Bowtie, Fan
from withstand.departures.world import World
from withstand.diagnostics.base import Tail
from withstand.diagnostics.critical import Critical
from withstand.diagnostics.for_departure import statistic_for
from withstand.diagnostics.spread import Koenker
from withstand.engine.noise import BlockNoise
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Factor

N = 48


def design():
    rng = np.random.default_rng(9)
    x = rng.uniform(1.0, 5.0, N)
    X = np.column_stack([np.ones(N), x])
    return Design(
        X=X,
        names=("Intercept", "x"),
        columns={"x": x},
        factors={"site": Factor((np.arange(N) % 3).astype(np.int64), ("a", "b", "c"))},
        fitted=X @ np.array([1.0, 2.0]),
        order=np.arange(N, dtype=float),
        groups=(np.arange(N) // 4).astype(np.int64),
    )


def test_order_statistics_make_the_test_exact():
    """With B = 99 values and one more from the same law, each rank is as likely: the upper 5 % are exactly ranks 96 to 100."""
    values = np.arange(99.0)
    upper = Critical.of(values, Tail.UPPER, 0.05)
    assert (upper.low, upper.high) == (-np.inf, 94.0)
    assert upper.rejects(np.array([94.0, 94.5])).tolist() == [False, True]
    lower = Critical.of(values, Tail.LOWER, 0.05)
    assert (lower.low, lower.high) == (4.0, np.inf)
    both = Critical.of(np.arange(199.0), Tail.BOTH, 0.05)
    assert (both.low, both.high) == (4.0, 194.0)


def test_too_few_values_never_reject():
    few = Critical.of(np.arange(10.0), Tail.BOTH, 0.05)
    assert (few.low, few.high) == (-np.inf, np.inf)


def test_power_is_a_share_with_its_error():
    power, se = Critical(-np.inf, 1.0, 0.05, 99).power(np.array([0.0, 2.0, 3.0, 0.5]))
    assert power == 0.5
    assert se == pytest.approx(0.25)


def test_simulated_critical_value_agrees_with_the_exact_law_of_an_added_term():
    """The t of an added column is exactly t(n - p - 1) under the ideal model."""
    chosen = statistic_for(Curvature(along="x"), design())
    width = 40_000
    errors = np.random.default_rng(4).standard_normal((N, width))
    values = np.abs(chosen.statistic(Sample(design(), errors, None)))
    critical = Critical.of(values, Tail.UPPER, 0.05).high
    exact = stats.t.isf(0.025, N - 3)
    # SE of a quantile: sqrt(a (1 - a) / B) / density, density of |t|.
    se = np.sqrt(0.05 * 0.95 / width) / (2.0 * stats.t.pdf(exact, N - 3))
    assert critical == pytest.approx(exact, abs=4.5 * se)


STRONG = [
    (Curvature(along="x"), 2.0),
    (Fan(along="x"), 8.0),
    (Fan(along="fitted", direction="down"), 8.0),
    (Bowtie(along="x"), 6.0),
    (PowerSpread(along="x"), 2.0),
    (LevelSpread(along="site", noisy=("b",)), 6.0),
    (Serial(), 0.8),
    (Clusters(), 0.7),
    (HeavyTails(), 0.45),
    (Contaminated(), 10.0),
    (Skew(), 3.0),
    (Outliers(), 10.0),
]


@pytest.mark.parametrize(("departure", "severity"), STRONG, ids=lambda value: getattr(value, "name", ""))
def test_every_departure_moves_its_own_statistic(departure, severity):
    """At a severity nobody would miss the statistic is larger than without it in nine of ten data sets on the same noise."""
    d = design()
    chosen = statistic_for(departure, d)
    noise = BlockNoise(1, 0, 400)
    values = []
    for world in (World(), World(((departure, severity),))):
        sample = Sample(d, world.on(d).draw(noise, np.empty((N, 400))), noise)
        values.append(chosen.statistic(sample))
    clean, struck = np.abs(values) if chosen.mirrored else values
    assert np.mean(struck > clean) > 0.9


@pytest.mark.parametrize(
    ("up", "turned"), [(Fan(along="x"), Fan(along="x", direction="down")), (Bowtie(along="x"), Bowtie(along="x", spindle=True))]
)
def test_a_departure_turned_round_has_the_opposite_sign(up, turned):
    sample = Sample(design(), np.random.default_rng(3).normal(size=(N, 5)), None)
    one, other = (statistic_for(departure, design()).statistic(sample) for departure in (up, turned))
    np.testing.assert_allclose(one, -other, rtol=1e-10)


def test_the_signed_score_squared_is_koenkers_statistic():
    sample = Sample(design(), np.random.default_rng(3).normal(size=(N, 5)), None)
    root = statistic_for(Fan(along="x"), design()).statistic(sample)
    np.testing.assert_allclose(root**2, Koenker(along="x").statistic(sample), rtol=1e-9)


def test_no_statistic_where_the_residuals_cannot_tell():
    bare = Design(X=np.ones((5, 1)), names=("Intercept",), columns={"x": np.arange(5.0)})
    assert statistic_for(Serial(), bare) is None
    assert statistic_for(Clusters(), bare) is None
    tight = Design(X=np.column_stack([np.ones(3), np.arange(3.0)]), names=("Intercept", "x"), columns={"x": np.arange(3.0)})
    assert statistic_for(Curvature(along="x"), tight) is None
