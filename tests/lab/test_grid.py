import pytest

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.outliers import Outliers
from withstand.departures.shape import Skew
from withstand.departures.spread import Bowtie, Fan
from withstand.engine.block import BASELINE
from withstand.errors import ScenarioError
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis


def test_the_baseline_comes_first_and_every_severity_has_its_world(study, make_plan):
    grid = Grid(study, make_plan())
    assert [(spot.axis and spot.axis.departure.kind, spot.severity) for spot in grid.spots] == [
        (None, 0.0), ("fan", 2.0), ("fan", 4.0), ("skew", 1.0), ("skew", 4.0),
    ]  # fmt: skip
    assert grid.spots[0].world == BASELINE
    for spot in grid.spots[1:]:
        assert grid.job.worlds[spot.world].key == grid.world(spot).key
    assert len(list(grid.cells)) == 5 * 2


def test_a_departure_that_makes_no_sense_here_is_left_out_with_its_reason(study, make_plan):
    grid = Grid(study, make_plan([Outliers(count=20, severity=3.0), Skew(severity=1.0)]))
    assert [axis.departure.kind for axis in grid.possible] == ["skew"]
    assert "more than half" in next(iter(grid.impossible.values()))


def test_severities_beyond_a_ladder_need_no_permission(study, make_plan):
    grid = Grid(study, make_plan())
    axis = grid.plan.axes[0]
    there = grid.at([(axis, 0.5)], grid.plan.procedures[:1])
    assert [spot.severity for spot in there.spots] == [0.0, 0.5]
    assert there.job.digest == grid.job.digest
    # A ratio of 1/2 is the fan turned round.
    down = Grid(study, make_plan([Fan(along="hours", direction="down", severity=2.0)]))
    assert there.world(there.spots[1]).on(study.design).spread == pytest.approx(
        down.world(down.spots[1]).on(study.design).spread
    )


@pytest.mark.parametrize(
    ("departures", "told"),
    [
        ([Fan(along="hours"), Fan(along="fitted")], ["hours", "fitted"]),
        ([Fan(along="hours"), Fan(along="hours", direction="down")], ["hours", "hours (downwards)"]),
        ([Bowtie(along="hours"), Bowtie(along="hours", spindle=True)], ["hours", "hours (spindle)"]),
        ([Outliers(), Outliers(placement="leverage")], ["(1 row)", "at high leverage (1 row)"]),
        ([Outliers(), Skew()], ["", ""]),
        ([Serial(), Serial(step=2.0)], ["", "step=2.0"]),
    ],
)
def test_axes_of_one_kind_are_told_apart(study, make_plan, departures, told):
    grid = Grid(study, make_plan(departures))
    assert [grid.along(axis) for axis in grid.plan.axes] == told


def test_a_stack_tells_axes_apart_by_itself(study, make_plan):
    alone, stacked = Axis(Fan(along="hours")), Axis(Fan(along="hours"), ((Skew(), 1.0),))
    grid = Grid(study, make_plan([alone, stacked]))
    assert [(grid.along(axis), axis.stack) for axis in grid.plan.axes] == [("hours", ""), ("hours", "skew skewness 1")]


def test_looks_are_whole_tasks(study, make_plan):
    looks = Grid(study, make_plan(repetitions=2500, most=9000)).looks
    assert [looks.target(look) for look in range(1, looks.count + 1)] == [4000, 8000, 10_000]


@pytest.mark.parametrize(
    ("options", "where"),
    [
        ({"repetitions": 10}, "simulation.repetitions"),
        ({"repetitions": 5000, "most": 2000}, "simulation.most"),
        ({"wrong_verdict": 0.7}, "simulation.wrong_verdict"),
        ({"seed": -1}, "simulation.seed"),
        ({"procedures": ()}, "procedures.use"),
        ({"procedures": ("ols", "ols")}, "procedures.use"),
        ({"axes": [Clusters(), Clusters(severity=0.5)]}, "departure"),
    ],
)
def test_impossible_plans_are_refused(make_plan, options, where):
    with pytest.raises(ScenarioError) as caught:
        make_plan(**options)
    assert caught.value.where == where


def test_the_digest_of_a_plan_moves_with_everything_in_it(make_plan):
    digests = {
        make_plan(**options).digest
        for options in (
            {},
            {"seed": 6},
            {"most": 16_000},
            {"procedures": ("ols",)},
            {"axes": [Skew()]},
            {"wrong_verdict": 0.02},
        )
    }
    assert len(digests) == 6
    assert make_plan().digest == make_plan().digest
