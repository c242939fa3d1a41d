import numpy as np
import pytest
from scipy import stats

from withstand.errors import ScenarioError
from withstand.study.balance import crossing, spread_evenly
from withstand.study.columns import Blocks, Drawn, InSequence, Levels, Shares, labels_of

N = 200_000
ALLOWED = 4.5
"""Standard errors allowed for a mean over N draws."""


@pytest.mark.parametrize(
    ("column", "mean", "sd"),
    [
        (Drawn("normal", mean=50, sd=12), 50.0, 12.0),
        (Drawn("lognormal", mean=3, sd=2), 3.0, 2.0),
        (Drawn("uniform", low=-1, high=5), 2.0, 6.0 / np.sqrt(12.0)),
        (Drawn("integers", low=1, high=6), 3.5, np.sqrt(35.0 / 12.0)),
    ],
)
def test_a_law_has_its_mean_and_sd(column, mean, sd):
    values = column.values(np.random.default_rng(3).standard_normal(N))
    assert abs(values.mean() - mean) < ALLOWED * sd / np.sqrt(N)
    kurtosis = stats.kurtosis(values, fisher=False)
    assert abs(values.var() - sd**2) < ALLOWED * sd**2 * np.sqrt((kurtosis - 1.0) / N)


def test_integers_are_whole_and_equally_likely():
    values = Drawn("integers", low=-2, high=3).values(np.random.default_rng(4).standard_normal(N))
    found, counts = np.unique(values, return_counts=True)
    assert found.tolist() == [-2, -1, 0, 1, 2, 3]
    assert stats.chisquare(counts).pvalue > 1e-5


@pytest.mark.parametrize("sizes", [(2, 2), (4, 2), (3, 2, 2), (5,)])
def test_every_beginning_of_a_crossing_is_balanced(sizes):
    order = crossing(sizes)
    assert len(np.unique(order, axis=0)) == np.prod(sizes)
    for factor, size in enumerate(sizes):
        for n in range(1, len(order) + 1):
            counts = np.bincount(order[:n, factor], minlength=size)
            assert counts.max() - counts.min() <= (1 if len(sizes) < 3 else 2)


def test_counts_follow_the_shares_at_every_length():
    shares = np.array([0.7, 0.2, 0.1])
    codes = spread_evenly(shares, 200)
    for n in range(1, 201):
        assert np.abs(np.bincount(codes[:n], minlength=3) - n * shares).max() <= 1.0


def test_labels_of_numbers_that_stand_in_c():
    assert labels_of("dose", Levels((4.0, 0.5, 1.0))) == ("0.5", "1", "4")
    assert labels_of("die", Drawn("integers", low=1, high=3)) == ("1", "2", "3")
    with pytest.raises(ScenarioError, match="'age' stands in C\\(\\)"):
        labels_of("age", Drawn("normal", mean=1, sd=1))


@pytest.mark.parametrize(
    ("column", "place", "value"),
    [
        (Levels((1.0,)), "levels", "[1.0]"),
        (Levels((1.0, 1.0)), "levels", "[1.0, 1.0]"),
        (Levels(("a", 2.0)), "levels", "'a', 2.0"),
        (Blocks(1), "blocks_of", "1 rows"),
        (Shares({"a": 0.5, "b": 0.4}), "shares", "b = 0.4"),
        (Shares({"a": 1.2, "b": -0.2}), "shares", "b = -0.2"),
        (Drawn("gamma", mean=1, sd=1), "law", "gamma"),
        (Drawn("normal", mean=1), "sd", "sd is missing"),
        (Drawn("normal", mean=1, sd=1, low=0), "low", "low = 0"),
        (Drawn("normal", mean=1, sd=-2), "sd", "-2"),
        (Drawn("normal", mean=np.inf, sd=2), "mean", "inf"),
        (Drawn("lognormal", mean=-1, sd=2), "mean", "-1"),
        (Drawn("uniform", low=4, high=2), "low", "4 to 2"),
        (Drawn("integers", low=0.5, high=2), "low", "0.5 to 2"),
    ],
)
def test_a_column_that_cannot_be_laid_out_is_refused(column, place, value):
    with pytest.raises(ScenarioError) as caught:
        column.check("thing")
    assert caught.value.where == f"study.plan.columns.thing.{place}"
    assert value in caught.value.what
    assert caught.value.remedy


def test_what_is_drawn_and_what_is_a_number():
    assert [c.random for c in (Levels((1.0, 2.0)), Blocks(4), InSequence(), Shares({"a": 1.0}, by_count=True))] == [False] * 4
    assert Shares({"a": 0.5, "b": 0.5}).random
    assert not Levels(("a", "b")).numeric
    assert Levels((1.0, 2.0)).numeric
