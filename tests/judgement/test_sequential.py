import pytest

from withstand.judgement.sequential import Looks, Standing, next_step

LOOKS = Looks(10_000, 160_000)


def test_looks_double_up_to_the_cap():
    assert [LOOKS.target(look) for look in range(1, LOOKS.count + 1)] == [10_000, 20_000, 40_000, 80_000, 160_000]
    assert [Looks(10_000, 50_000).target(look) for look in range(1, 5)] == [10_000, 20_000, 40_000, 50_000]
    assert Looks(10_000, 10_000).count == 1


@pytest.mark.parametrize(("replicates", "look"), [(0, 0), (9_999, 0), (10_000, 1), (39_999, 2), (160_000, 5), (10**9, 5)])
def test_the_look_a_cell_has_come_to(replicates, look):
    assert LOOKS.reached(replicates) == look


def run(turns):
    """Replicates each cell ends with, if it settles at the look given; None never does."""
    standings = {cell: Standing(0, False) for cell in turns}
    steps = []
    while (step := next_step(standings, LOOKS)) is not None:
        steps.append(step)
        for cell in step.cells:
            look = LOOKS.reached(step.replicates)
            standings[cell] = Standing(step.replicates, turns[cell] is not None and look >= turns[cell])
    return {cell: standing.replicates for cell, standing in standings.items()}, steps


def test_work_goes_where_verdicts_are_open():
    spent, steps = run({"clear": 1, "close": 3, "hopeless": None})
    assert spent == {"clear": 10_000, "close": 40_000, "hopeless": 160_000}
    assert steps[0].cells == ("clear", "close", "hopeless")
    assert [step.replicates for step in steps] == [10_000, 20_000, 40_000, 80_000, 160_000]


def test_an_interrupted_search_goes_on_where_it_was():
    standings = {"a": Standing(20_000, False), "b": Standing(10_000, True), "c": Standing(0, False)}
    step = next_step(standings, LOOKS)
    assert (step.cells, step.replicates) == (("c",), 10_000)
    standings["c"] = Standing(10_000, False)
    assert next_step(standings, LOOKS).cells == ("c",)
    standings["c"] = Standing(20_000, True)
    assert (next_step(standings, LOOKS).cells, next_step(standings, LOOKS).replicates) == (("a",), 40_000)


def test_nothing_is_left_once_all_are_settled_or_at_the_cap():
    standings = {"a": Standing(160_000, False), "b": Standing(10_000, True)}
    assert next_step(standings, LOOKS) is None
