import numpy as np
import pytest
from scipy.stats import chi2

from withstand.departures import Outliers, Skew, World
from withstand.departures.outliers import distinct_rows
from withstand.engine.noise import BlockNoise
from withstand.errors import ScenarioError


def shifts(departure, severity, design, width=200):
    errors = np.zeros((design.n, width))
    departure.outliers(design, severity).add(errors, BlockNoise(4, 1, width))
    return errors


@pytest.mark.parametrize("sign", ["one-sided", "alternating", "random"])
@pytest.mark.parametrize("placement", ["random", "leverage"])
def test_so_many_distinct_rows_by_so_much(sign, placement, design):
    o = shifts(Outliers(count=4, sign=sign, placement=placement), 5.0, design)
    assert np.array_equal(np.count_nonzero(o, axis=0), np.full(200, 4))
    assert set(np.unique(np.abs(o))) == {0.0, 5.0}
    total = o.sum(axis=0) / 5.0
    if sign == "one-sided":
        assert np.all(total == 4)
    elif sign == "alternating":
        assert np.all(total == 0)
        assert np.all(np.diff(np.sign(o.T[o.T != 0]).reshape(200, 4)) != 0)
    else:
        assert set(total) == {-4.0, -2.0, 0.0, 2.0, 4.0}


def test_the_rows_do_not_depend_on_the_severity(design):
    departure = Outliers(count=3, sign="random")
    assert np.array_equal(shifts(departure, 3.0, design) / 3.0, shifts(departure, 12.0, design) / 12.0)


def test_high_leverage_rows_are_struck(design):
    o = shifts(Outliers(count=3, placement="leverage"), 5.0, design)
    struck = np.flatnonzero(o[:, 0])
    assert np.all(o == o[:, :1])
    assert set(struck) == set(np.argsort(design.leverage)[-3:])


def test_a_share_is_rounded_to_rows(design):
    assert Outliers(share=0.1).struck(design) == 4
    assert Outliers(share=0.001).struck(design) == 1
    assert Outliers().struck(design) == 1


@pytest.mark.parametrize("width", [1, 50_000])
def test_every_set_of_rows_is_equally_likely(width):
    """All 10 pairs of 5 rows, drawn one at a time or together; chi-square below its 1 - 1e-6 quantile."""
    generator = np.random.default_rng(8)
    drawn = np.hstack([distinct_rows(generator, 5, 2, width) for _ in range(50_000 // width)])
    counts = np.bincount(5 * drawn[0] + drawn[1], minlength=25)
    pairs = counts[counts > 0]
    assert pairs.size == 10
    assert np.all(drawn[0] < drawn[1])
    assert np.sum((pairs - 5000) ** 2 / 5000) < chi2.ppf(1 - 1e-6, 9)


def test_all_rows_can_be_drawn():
    assert np.array_equal(distinct_rows(np.random.default_rng(1), 6, 6, 3), np.repeat(np.arange(6)[:, None], 3, axis=1))


def test_outliers_come_on_top_of_a_law(design):
    noise = BlockNoise(4, 1, 50)
    law = World(((Skew(), 2.0),)).on(design).draw(noise, np.empty((design.n, 50)))
    both = World(((Skew(), 2.0), (Outliers(), 8.0))).on(design).draw(noise, np.empty((design.n, 50)))
    o = both - law
    assert np.allclose(o.max(axis=0), 8.0)
    assert np.count_nonzero(np.abs(o) > 1e-9) == 50


def test_labels():
    assert Outliers().label(3.0) == "1 row by 3 SD"
    assert Outliers(count=2).label(3.0) == "2 rows by 3 SD"
    assert Outliers(share=0.05).label(12.0) == "5 % of rows by 12 SD"


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"count": 0}, "count 0 is out of range"),
        ({"count": 1.5}, r"count 1\.5 is out of range"),
        ({"share": 0.0}, "share 0 is out of range"),
        ({"share": 0.6}, r"share 0\.6 is out of range"),
        ({"count": 1, "share": 0.1}, "both a count and a share"),
        ({"placement": "edge"}, r"unknown placement 'edge'.*leverage, random|unknown placement 'edge'.*random, leverage"),
        ({"sign": "up"}, "unknown sign 'up'.*alternating"),
    ],
)
def test_wrong_options_are_refused(options, message):
    with pytest.raises(ScenarioError, match=message):
        Outliers(**options)


def test_more_than_half_the_rows_are_no_outliers(design):
    assert "21 of 40 rows" in Outliers(count=21).not_applicable(design)
    assert Outliers(count=20).not_applicable(design) is None
    with pytest.raises(ScenarioError, match="strikes 41 rows of 40"):
        Outliers(count=41).outliers(design, 3.0)
