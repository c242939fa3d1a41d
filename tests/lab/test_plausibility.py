import dataclasses
import math

import pytest

from withstand.departures.shape import Skew
from withstand.departures.spread import Fan
from withstand.judgement.plausible import plausible_severities
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis
from withstand.lab.plausibility import feared, points_of, residuals_of


@pytest.fixture(scope="module")
def residuals(study, make_plan):
    return residuals_of(Grid(study, make_plan()))


def test_the_users_residuals_are_asked_about_every_axis(study, make_plan, residuals):
    plan = make_plan()
    direct = plausible_severities(study.design, study.response, [axis.departure for axis in plan.axes], seed=plan.seed)
    assert [residuals[axis.identity].plausible for axis in plan.axes] == direct


def test_a_plan_has_no_residuals_but_its_checks_have_power(planned, make_plan):
    found = residuals_of(Grid(planned, make_plan()))
    assert {one.plausible for one in found.values()} == {None}
    fan = found["fan(along='hours')"]
    assert fan.seen_at(4.0).power > fan.seen_at(2.0).power > 0.05
    # Beyond what the law was simulated for it is simulated anew.
    assert fan.seen_at(100.0).power > fan.seen_at(4.0).power


def test_a_stack_has_a_plausible_range_but_no_check_of_its_own(study, make_plan):
    axis = Axis(Fan(along="hours", severity=(2.0, 4.0)), ((Skew(), 2.0),))
    found = residuals_of(Grid(study, make_plan([axis])))[axis.identity]
    assert found.plausible is not None
    assert found.seen_at(2.0) is None


def with_range(residuals, low, high, **changes):
    one = residuals["fan(along='hours')"]
    options = {"low": low, "high": high, "empty": False, "open_above": False, "open_below": False, "point": 1.3} | changes
    return dataclasses.replace(one, plausible=dataclasses.replace(one.plausible, **options))


@pytest.mark.parametrize(
    ("low", "high", "changes", "wanted"),
    [
        (0.61234, 2.71828, {}, (0.612, 2.0, 2.72)),
        (1.0, 5.0, {}, (2.0, 4.0, 5.0)),
        (1.21, 1.3004, {}, (1.21, 1.31)),
        (1.5, 3.0, {"open_above": True}, (1.5, 2.0, 3.0, 4.0)),
        (math.nan, math.nan, {"empty": True, "point": 1.0}, ()),
        (math.nan, math.nan, {"empty": True, "point": 3.5}, (3.5, 4.0)),
    ],
)
def test_what_has_to_be_feared(residuals, low, high, changes, wanted):
    axis = Axis(Fan(along="hours", severity=(2.0, 4.0)))
    assert feared(axis, with_range(residuals, low, high, **changes)) == pytest.approx(wanted)


def test_without_residuals_the_ladder_has_to_be_feared():
    assert feared(Axis(Skew(severity=(1.0, 4.0))), None) == (1.0, 4.0)


def test_every_rung_and_every_end_is_visited(residuals, make_plan):
    axes = make_plan().axes
    points = points_of(axes, residuals)
    for axis in axes:
        own = [severity for a, severity in points if a is axis]
        assert own == sorted({*axis.departure.ladder, *feared(axis, residuals[axis.identity])})
