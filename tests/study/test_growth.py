import numpy as np
import pandas as pd
import pytest

from withstand.errors import InputError, ScenarioError
from withstand.study.columns import Drawn, Levels
from withstand.study.growth import Extend, Planned, Resample, Stack, growth_of
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study
from withstand.study.study import Study


def frame(n=12, seed=3):
    rng = np.random.default_rng(seed)
    x = np.append(rng.normal(size=n - 1), 9.0)
    return pd.DataFrame(
        {
            "x": x,
            "site": (["a", "b", "c"] * n)[:n],
            "plot": np.repeat([f"p{i}" for i in range(n)], 3)[:n],
            "day": np.arange(1.0, n + 1) * 2,
            "y": x + rng.normal(size=n),
        }
    )


def study(formula="y ~ x + site", n=12, **options):
    return Study.from_frame(frame(n), formula, **options)


def test_copies_divide_every_leverage():
    data = study()
    grown = Stack(data).at(36)
    assert grown.design.leverage == pytest.approx(np.tile(data.design.leverage / 3, 3))
    assert "copies divide every leverage by c" in Stack(data).sentence
    assert grown.response is None
    assert grown.digest != data.digest


@pytest.mark.parametrize("rest", range(1, 12))
def test_the_remainder_is_balanced_over_cells_and_range(rest):
    data = study()
    design = Stack(data).at(12 + rest).design
    extra = np.bincount(design.factors["site"].codes, minlength=3) - 4
    assert extra.max() - extra.min() <= 1
    assert np.isin(design.columns["x"], data.design.columns["x"]).all()


def test_copies_of_a_group_are_new_groups():
    data = study("y ~ x", groups="plot")
    grown = Stack(data).at(24)
    assert data.design.group_count == 4
    assert grown.design.group_count == 8
    assert (np.bincount(grown.design.groups) == 3).all()
    # Half as many again: two of four groups, spread over the range of the fitted mean.
    more = Stack(data).at(18)
    assert more.design.group_count == 6
    means = np.bincount(data.design.groups, weights=data.design.fitted) / 3
    ranks = np.argsort(np.argsort(means))
    taken = {
        int(ranks[group])
        for group in range(4)
        if np.isin(more.design.columns["x"], data.design.columns["x"][data.design.groups == group]).sum() > 3
    }
    assert len(taken) == 2
    assert max(taken) >= 2 > min(taken)


def test_resampled_rows_are_rows_there_are():
    data = study("y ~ x", rows="resampled")
    growth = growth_of(data)
    assert isinstance(growth, Resample)
    grown = growth.at(30)
    assert not grown.rows.fixed
    a = grown.rows.draw(np.random.default_rng(1))
    assert a.n == 30
    assert np.isin(a.columns["x"], data.design.columns["x"]).all()
    assert "farthest row stays the farthest" in growth.sentence


def test_a_series_goes_on():
    data = study("y ~ day", order="day")
    growth = growth_of(data)
    assert isinstance(growth, Extend)
    grown = growth.at(30).design
    assert grown.order.tolist() == (2.0 * np.arange(1, 31)).tolist()
    assert grown.X[:, 1].tolist() == grown.order.tolist()
    assert grown.columns["day"].tolist() == grown.order.tolist()
    other = Extend(study("y ~ x", order="day")).at(30).design
    assert other.columns["x"].tolist() == np.resize(data.design.columns["x"], 30).tolist()


def test_a_plan_grows_by_itself_in_whole_sets_of_cells():
    columns = {"dose": Levels((0.0, 1.0, 2.0)), "site": Levels(("a", "b")), "x": Drawn("normal", mean=0, sd=1)}
    planned = planned_study(StudyPlan(12, columns, error_sd=1.0), "y ~ dose + site + x")
    growth = growth_of(planned)
    assert isinstance(growth, Planned)
    assert (growth.step, growth.smallest) == (6, 6)
    assert growth.at(18).n == 18
    assert "draws its random columns afresh" in growth.sentence
    with pytest.raises(ScenarioError, match="growth 'stack' is for data"):
        growth_of(planned, "stack")


def test_the_rule_suits_the_study():
    assert isinstance(growth_of(study()), Stack)
    assert isinstance(growth_of(study(order="day", groups="plot")), Stack)
    assert isinstance(growth_of(study(), "resample"), Resample)


@pytest.mark.parametrize(
    ("options", "rule", "words", "remedy"),
    [
        ({}, "stac", "'stac'", "stack"),
        ({"order": "day"}, "stack", "same place in the order", "extend"),
        ({"order": "day"}, "resample", "same place in the order", "extend"),
        ({}, "extend", "no order column", "order ="),
        ({"order": "day", "groups": "plot"}, "extend", "in groups", "stack"),
        ({"formula": "y ~ log(day)", "order": "day"}, "extend", "'log(day)'", "plan"),
    ],
)
def test_a_rule_that_does_not_suit_is_refused(options, rule, words, remedy):
    with pytest.raises(InputError) as caught:
        growth_of(study(**options), rule).at(30)
    assert words in caught.value.what
    assert remedy in caught.value.remedy
