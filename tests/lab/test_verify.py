import dataclasses

import pytest

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.shape import HeavyTails, Skew
from withstand.departures.spread import Fan
from withstand.lab.gather import Effort, gather, open_bench
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis
from withstand.lab.speech import shown, spoken
from withstand.lab.verify import comparisons, verification


@pytest.fixture(scope="module")
def evidence(study, make_plan):
    grid = Grid(study, make_plan([Fan(along="hours", severity=3.0)], procedures=("ols",), most=2000))
    with open_bench(grid, Effort(verify=True)) as bench:
        return gather(grid, bench)


def test_both_routes_are_compared_measure_by_measure(evidence):
    found = comparisons(evidence)
    assert {one.measure for one in found} >= {"coverage", "bias", "empirical_sd", "claimed_sd", "width", "power"}
    # A failure rate of 0 by both routes is no evidence.
    assert "failure_rate" not in {one.measure for one in found}
    assert max(abs(one.z) for one in found) < 4.5


def test_a_wrong_answer_stands_out(evidence):
    cell = evidence.cells[1]
    answer = evidence.exact[cell]["coverage"]
    off = dataclasses.replace(answer, estimate=dataclasses.replace(answer.estimate, value=answer.estimate.value - 0.05))
    wrong = dataclasses.replace(evidence, exact={**evidence.exact, cell: {**evidence.exact[cell], "coverage": off}})
    record = verification(wrong)
    assert record["largest_z"] > record["largest_z_by_chance"]
    assert (record["largest_at"]["measure"], record["largest_at"]["severity"]) == ("coverage", 3.0)


def test_without_a_fourth_moment_the_error_of_an_sd_is_not_believed(study, make_plan):
    grid = Grid(study, make_plan([HeavyTails(severity=(0.2, 0.3))], procedures=("ols",), most=2000))
    with open_bench(grid, Effort(verify=True)) as bench:
        found = comparisons(gather(grid, bench))
    # Student's t with 5 df has a fourth moment, with 3 1/3 df it has none.
    assert {one.measure for one in found if one.cell.spot.severity == 0.2} >= {"bias", "empirical_sd"}
    assert not [one for one in found if one.cell.spot.severity == 0.3]


def test_nothing_to_compare_is_said_plainly(evidence):
    assert verification(dataclasses.replace(evidence, tallies={})) == {"comparisons": 0}


@pytest.mark.parametrize(
    ("departure", "severity", "told"),
    [
        (Fan(along="x"), 2.34567, "SD ratio 2.35"),
        (Fan(along="x"), 1.0, "nothing wrong"),
        (HeavyTails(), 0.21512, "t with 4.65 df"),
        (HeavyTails(), 0.0, "nothing wrong"),
    ],
)
def test_severities_are_said_with_the_digits_a_person_would_use(departure, severity, told):
    assert spoken(Axis(departure), severity) == told


def test_at_neutral_the_companions_still_act():
    assert spoken(Axis(Fan(along="x"), ((Skew(), 1.0),)), 1.0) == "SD ratio 1"


def test_names_for_people_say_the_columns():
    roles = {"order": "run", "groups": "charge"}
    assert shown(Axis(Clusters()), roles) == "clusters by charge"
    assert shown(Axis(Serial()), roles) == "serial along run"
    assert shown(Axis(Serial()), {}) == "serial"
    assert shown(Axis(Fan(along="x"), ((Skew(), 1.0),)), roles) == "fan along x with skew skewness 1"
