import numpy as np
import pandas as pd
import pytest

from withstand.errors import ScenarioError
from withstand.study.columns import Blocks, Drawn, InSequence, Levels, Shares
from withstand.study.layout import Layout


def table(columns, n, seed=1, attrition=0.0):
    return Layout(columns, attrition).table(n, np.random.default_rng(seed))


def test_level_columns_are_crossed_and_balanced():
    frame = table({"lamp": Levels((0.0, 4.0, 8.0, 12.0)), "bench": Levels(("south", "north"))}, 24)
    assert (frame.groupby(["lamp", "bench"], observed=False).size() == 3).all()
    assert list(frame["bench"].cat.categories) == ["south", "north"]


def test_a_longer_table_begins_with_the_shorter_one():
    columns = {"lamp": Levels((0.0, 4.0)), "plot": Blocks(4), "week": InSequence(), "x": Drawn("normal", mean=0, sd=1)}
    short, long = table(columns, 10), table(columns, 25)
    for name in ("lamp", "week", "x"):
        assert short[name].tolist() == long[name].tolist()[:10]
    assert short["plot"].astype(str).tolist() == long["plot"].astype(str).tolist()[:10]
    assert short["plot"].astype(str).tolist() == ["b1"] * 4 + ["b2"] * 4 + ["b3"] * 2


def test_correlations_are_met_with_drawn_and_with_fixed_columns():
    n = 200_000
    columns = {
        "dose": Levels((0.0, 1.0, 2.0, 4.0)),
        "age": Drawn("normal", mean=50, sd=12, correlated={"dose": 0.3, "height": -0.5}),
        "height": Drawn("normal", mean=1.7, sd=0.1, correlated={"dose": 0.2}),
    }
    r = np.corrcoef(table(columns, n).to_numpy(dtype=float).T)
    # The standard error of a correlation r is (1 - r^2)/sqrt(n) for normal columns, textbook.
    for i, j, rho in ((0, 1, 0.3), (1, 2, -0.5), (0, 2, 0.2)):
        assert abs(r[i, j] - rho) < 4.5 * (1 - rho**2) / np.sqrt(n)


def test_shares_are_drawn_by_chance_or_by_count():
    by_chance = table({"site": Shares({"a": 0.7, "b": 0.3})}, 100_000)
    assert abs((by_chance["site"] == "a").mean() - 0.7) < 4.5 * np.sqrt(0.21 / 100_000)
    by_count = table({"site": Shares({"a": 0.7, "b": 0.3}, by_count=True)}, 50)
    assert (by_count["site"] == "a").sum() == 35


def test_attrition_loses_rows_anywhere():
    columns = {"week": InSequence()}
    assert Layout(columns, 0.2).analysed(50) == 40
    lost = np.zeros(50)
    for seed in range(400):
        frame = table(columns, 50, seed, attrition=0.2)
        assert len(frame) == 40
        assert frame["week"].is_monotonic_increasing
        lost += ~np.isin(np.arange(1.0, 51.0), frame["week"])
    assert np.abs(lost / 400 - 0.2).max() < 4.5 * np.sqrt(0.16 / 400)


def test_a_level_that_does_not_occur_is_still_a_level():
    frame = table({"site": Shares({"a": 0.999, "b": 0.001})}, 5)
    assert list(frame["site"].cat.categories) == ["a", "b"]


def test_the_same_generator_gives_the_same_table():
    columns = {"x": Drawn("uniform", low=0, high=1), "g": Shares({"a": 0.5, "b": 0.5})}
    pd.testing.assert_frame_equal(table(columns, 20, 5), table(columns, 20, 5))
    assert not table(columns, 20, 5).equals(table(columns, 20, 6))


@pytest.mark.parametrize(
    ("columns", "attrition", "value"),
    [
        ({}, 0.0, "no columns"),
        ({"a": InSequence()}, 1.0, "attrition is 1"),
        ({name: Levels(tuple(float(i) for i in range(30))) for name in "abc"}, 0.0, "27000 cells"),
        ({"x": Drawn("normal", mean=0, sd=1, correlated={"z": 0.1})}, 0.0, "'z'"),
        ({"x": Drawn("normal", mean=0, sd=1, correlated={"x": 0.1})}, 0.0, "'x'"),
        ({"x": Drawn("normal", mean=0, sd=1, correlated={"w": 1.0}), "w": InSequence()}, 0.0, "is 1"),
        (
            {
                "x": Drawn("normal", mean=0, sd=1, correlated={"z": 0.1}),
                "z": Drawn("normal", mean=0, sd=1, correlated={"x": 0.2}),
            },
            0.0,
            "0.1 and as 0.2",
        ),
        (
            {
                "x": Drawn("normal", mean=0, sd=1, correlated={"z": 0.9, "w": 0.9}),
                "z": Drawn("normal", mean=0, sd=1, correlated={"w": -0.9}),
                "w": Drawn("normal", mean=0, sd=1),
            },
            0.0,
            "cannot all hold",
        ),
    ],
)
def test_what_cannot_be_laid_out_is_refused_at_once(columns, attrition, value):
    with pytest.raises(ScenarioError) as caught:
        Layout(columns, attrition)
    assert value in caught.value.what
    assert caught.value.remedy


def test_correlations_with_fixed_columns_that_contradict_each_other_are_refused():
    columns = {
        "dose": Levels((0.0, 1.0)),
        "week": InSequence(),
        "x": Drawn("normal", mean=0, sd=1, correlated={"dose": 0.9, "week": 0.9}),
    }
    with pytest.raises(ScenarioError, match="correlations with dose, week cannot all hold"):
        table(columns, 40)
    with pytest.raises(ScenarioError, match="'dose' is the same in every row"):
        table({"dose": Levels((0.0, 1.0)), "x": Drawn("normal", mean=0, sd=1, correlated={"dose": 0.5})}, 1)
