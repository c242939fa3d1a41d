import math

import pytest

from withstand.departures.dependence import Serial
from withstand.departures.spread import Fan
from withstand.errors import NumericalError
from withstand.lab import judging
from withstand.lab.conduct import conduct, leading
from withstand.lab.gather import Effort, gather, open_bench
from withstand.lab.grid import Grid
from withstand.lab.judging import judge_exactly
from withstand.lab.plan import Axis
from withstand.lab.tipping import BISECTIONS, find_tippings


@pytest.fixture(scope="module")
def found(study, make_plan, exact_axes):
    grid = Grid(study, make_plan(exact_axes, procedures=("ols", "hc3", "hc2-bm")))
    with open_bench(grid, Effort(simulate=False)) as bench:
        evidence = gather(grid, bench)
        return grid, evidence, find_tippings(evidence, bench, leading(grid))


def test_an_exact_turn_lies_where_the_margin_is_nought(found):
    grid, evidence, tippings = found
    axes = {axis.identity: axis for axis in grid.possible}
    turns = 0
    assert len(tippings) == len(axes) * 3
    for line, tipping in tippings.items():
        cell = next(c for c in evidence.cells if c.procedure_index == line.procedure)
        axis = axes[line.axis]
        if tipping.point is None:
            assert judge_exactly(grid, cell, axis.world(tipping.tried)).margin > 0.0
        elif not tipping.always:
            turns += 1
            step = 1e-4 * max(1.0, abs(tipping.point))
            before, after = (judge_exactly(grid, cell, axis.world(tipping.point + s)).margin for s in (-step, step))
            assert before > 0.0 > after
    assert turns >= 3


def test_both_directions_have_a_turn_of_their_own(study, make_plan):
    plan = make_plan([Serial(severity=(0.6, -0.6))], procedures=("ols",))
    table = conduct(study, plan).tipping
    assert len(table) == 2
    upwards, downwards = (row for row in sorted(table.itertuples(), key=lambda row: -row.last_holds))
    assert upwards.last_holds > 0.0
    assert downwards.last_holds < 0.0 or downwards.first_gives < 0.0


def test_a_fan_that_the_residuals_allow_to_fall_is_followed_downwards(make_study, make_plan):
    study = make_study()
    # The fan of these residuals rises; of the fan turned round they say the reciprocal.
    up, down = (
        conduct(study, make_plan([Fan(along="hours", direction=direction)], procedures=("ols",)), simulate=False).tipping
        for direction in ("up", "down")
    )
    assert down.iloc[0]["plausible_low"] == pytest.approx(1.0 / up.iloc[0]["plausible_high"], rel=1e-6)
    assert up.iloc[0]["tipping"] > 1.0
    turned = down[down["first_gives"] < 1.0].iloc[0]
    assert turned["tipping"] == pytest.approx(1.0 / up.iloc[0]["tipping"], rel=1e-4)
    # The worst severity lies on that side, so that it is told first.
    assert down.iloc[0]["first_gives"] < 1.0


def test_only_the_first_procedure_is_bisected(study, make_plan):
    plan = make_plan([Fan(along="hours", severity=(2.0, 6.0))], procedures=("ols", "hc0"), method="simulated", most=16_000)
    grid = Grid(study, plan)
    judged = {0: set(), 1: set()}
    with open_bench(grid, Effort()) as bench:
        evidence = gather(grid, bench)
        read = bench.ledger.read

        def counting(key):
            judged[[p.identity for p in plan.procedures].index(key[2])].add(key[1])
            return read(key)

        bench.ledger.read = counting
        tippings = find_tippings(evidence, bench, leading(grid))
    assert 1 <= len({world for world in judged[0] if world != "none"}) <= BISECTIONS
    assert not judged[1]
    assert {line.procedure for line in tippings} == {0, 1}


def test_without_leave_to_simulate_the_rungs_are_all_there_is(study, make_plan, tmp_path):
    plan = make_plan([Fan(along="hours", severity=(2.0, 6.0))], procedures=("ols",), method="simulated")
    grid = Grid(study, plan)
    path = tmp_path / "ledger.sqlite"
    with open_bench(grid, Effort(ledger_path=path)) as bench:
        gather(grid, bench)
    with open_bench(grid, Effort(ledger_path=path, simulate=False)) as bench:
        tipping = next(iter(find_tippings(gather(grid, bench), bench, leading(grid)).values()))
    assert {tipping.last_holds, tipping.first_gives} <= {1.0, 2.0, 6.0, None}
    assert tipping.point is None or not math.isnan(tipping.point)


def test_a_stack_starts_from_its_companions_and_not_from_the_baseline(study, make_plan):
    companion = ((Fan(along="hours"), 20.0),)
    outcome = conduct(study, make_plan([Axis(Serial(severity=(0.2, 0.4)), companion)], procedures=("ols",)))
    alone = conduct(study, make_plan([Fan(along="hours", severity=20.0)], procedures=("ols",)))
    row = outcome.tipping.iloc[0]
    # The fan alone is out of tolerance, so that no serial correlation is needed.
    assert (row["tipping"], row["first_gives"]) == (0.0, 0.0)
    fan = alone.measures.query("measure == 'coverage' and departure == 'fan' and severity == 20")["value"]
    assert outcome.measures.query("measure == 'coverage' and departure == 'serial' and severity == 0")["value"].item() == (
        pytest.approx(fan.item(), abs=1e-8)
    )


def test_a_turn_whose_exact_answer_is_out_of_reach_is_bracketed(study, make_plan, monkeypatch):
    """The rungs have exact answers; between them there are none to the accuracy wanted."""
    grid = Grid(study, make_plan([Fan(along="hours", severity=(2.0, 6.0))], procedures=("ols",)))

    def unreachable(*arguments, **options):
        raise NumericalError("an exact probability was reached to 1.0e-01 only")

    with open_bench(grid, Effort(simulate=False)) as bench:
        evidence = gather(grid, bench)
        (line,) = find_tippings(evidence, bench, leading(grid))
        exact = find_tippings(evidence, bench, leading(grid))[line]
        monkeypatch.setattr(judging, "coverage", unreachable)
        found = find_tippings(evidence, bench, leading(grid))[line]
    assert (exact.exact, found.exact) == (True, False)
    assert found.last_holds < exact.point < found.first_gives
