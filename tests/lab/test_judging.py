import dataclasses

import pytest

from withstand.departures.dependence import Clusters
from withstand.departures.shape import Skew
from withstand.departures.spread import Fan
from withstand.departures.world import World
from withstand.judgement.tolerance import Tolerance
from withstand.lab.exactly import exact_answers
from withstand.lab.gather import Effort, gather, open_bench
from withstand.lab.grid import Grid
from withstand.lab.judging import judge_answers, judge_exactly, verdict_of


@pytest.mark.parametrize("tolerance", [Tolerance(), Tolerance(tails=True), Tolerance(bias=None), Tolerance(bias_absolute=0.01)])
def test_the_short_way_to_an_exact_verdict_is_the_long_one(study, make_plan, exact_axes, tolerance):
    plan = dataclasses.replace(make_plan(exact_axes, procedures=("ols", "hc3", "cr2")), tolerance=tolerance)
    grid = Grid(study, plan)
    cells = tuple(grid.cells)
    answers = exact_answers(grid, cells)
    assert len(answers) == len(cells)
    for cell in cells:
        assert judge_exactly(grid, cell, grid.world(cell.spot)) == judge_answers(grid, cell, answers[cell])


def test_what_has_no_exact_answer_has_no_exact_verdict(study, make_plan):
    grid = Grid(study, make_plan([Skew(severity=2.0)]))
    cells = tuple(grid.cells)
    cell = next(cell for cell in cells if cell.spot.axis is not None)
    assert judge_exactly(grid, cell, grid.world(cell.spot)) is None
    # Its moments are exact all the same, and decide nothing.
    answers = exact_answers(grid, cells)[cell]
    assert "bias" in answers
    assert judge_answers(grid, cell, answers) is None
    assert verdict_of(grid, cell, answers, None) is None


def test_exact_verdicts_follow_a_stack(study, make_plan):
    grid = Grid(study, make_plan())
    cell = next(iter(grid.cells))
    calm, fan, both = (
        judge_exactly(grid, cell, World(stack)).margin
        for stack in ((), ((Fan(along="hours"), 4.0),), ((Fan(along="hours"), 4.0), (Clusters(), 0.5)))
    )
    assert calm == pytest.approx(1.0, abs=1e-5)
    assert len({calm, fan, both}) == 3


def test_cells_are_worked_until_they_are_settled_or_capped(study, make_plan):
    grid = Grid(study, make_plan([Skew(severity=(0.5, 6.0))], procedures=("ols", "hac"), repetitions=2000, most=16_000))
    with open_bench(grid, Effort()) as bench:
        evidence = gather(grid, bench)
    spent = set()
    for cell in evidence.cells:
        verdict = evidence.verdict(cell)
        if verdict.exact:
            continue
        spent.add(verdict.replicates)
        assert verdict.replicates in (2000, 4000, 8000, 16_000)
        assert verdict.settled or verdict.replicates == 16_000
    assert len(spent) > 1


def test_exact_answers_come_first_and_simulated_ones_fill_the_gaps(study, make_plan):
    grid = Grid(study, make_plan([Skew(severity=2.0)], procedures=("ols",)))
    with open_bench(grid, Effort()) as bench:
        evidence = gather(grid, bench)
    cell = evidence.cells[1]
    methods = {name: answer.method for name, answer in evidence.answers(cell).items()}
    assert (methods["bias"], methods["empirical_sd"], methods["coverage"], methods["size"]) == (
        "exact", "exact", "simulated", "simulated",
    )  # fmt: skip
    exact, simulated = evidence.exact[cell], evidence.simulated[cell]
    for name in ("bias", "empirical_sd", "claimed_sd"):
        estimate = simulated[name].estimate
        assert abs(exact[name].estimate.value - estimate.value) < 4.5 * estimate.mc_se


def test_a_caller_may_say_when_to_stop(study, make_plan):
    grid = Grid(study, make_plan([Skew(severity=2.0)], procedures=("ols",), method="simulated", most=16_000))
    with open_bench(grid, Effort()) as bench:
        evidence = gather(grid, bench, lambda now, some: False)
    assert {tally.replicates for tally in evidence.tallies.values()} == {16_000}
