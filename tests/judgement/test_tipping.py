import math

import pytest

from withstand.judgement.findings import Aspect
from withstand.judgement.tipping import bracket, halfway, next_severity, outward, tipping_exact
from withstand.judgement.verdict import Finding, Judgement, Verdict

ASPECT = Aspect("coverage", 0.94, math.inf, -math.inf, 0.96, 0.95, "test")


def judged(coverage, spread=0.0, exact=False):
    finding = Finding.of(ASPECT, coverage, coverage - spread, coverage + spread)
    verdict = {"outside": Verdict.GIVES, "open": Verdict.UNSETTLED}.get(str(finding.kind), Verdict.HOLDS)
    return Judgement(verdict, (finding,), exact, 0 if exact else 10_000)


def coverage(severity, turn=2.5):
    """Coverage that leaves the tolerance of 0.94 at one severity."""
    return 0.95 - 0.01 * (severity / turn) ** 2


def test_an_exact_turn_is_found_to_the_accuracy_of_the_root():
    found = tipping_exact(lambda s: ASPECT.margin(coverage(s)), (1.0, 2.0, 4.0, 8.0), 0.0)
    assert found.point == pytest.approx(2.5, abs=1e-5)
    assert found.last_holds <= 2.5 <= found.first_gives
    assert found.first_gives - found.last_holds < 1e-4
    assert (found.exact, found.never, found.always, found.tried) == (True, False, False, 8.0)


def test_none_up_to_the_most_tried_is_an_answer():
    found = tipping_exact(lambda s: 1.0, (1.0, 2.0), 0.0)
    assert (found.point, found.last_holds, found.first_gives, found.tried, found.never) == (None, 2.0, None, 2.0, True)


def test_a_procedure_that_gives_with_nothing_wrong_gives_always():
    found = tipping_exact(lambda s: -0.5, (2.0, 3.0), 1.0)
    assert (found.point, found.first_gives, found.last_holds, found.always) == (1.0, 1.0, None, True)


def test_the_first_turn_outwards_counts_even_if_it_turns_back():
    found = tipping_exact(lambda s: math.cos(s), (2.0, 5.0, 8.0), 0.0)
    assert found.point == pytest.approx(math.pi / 2, abs=1e-5)


def test_a_dip_between_two_rungs_is_not_stepped_over():
    found = tipping_exact(lambda s: abs(s - 3.0) - 0.5, (2.0, 4.0), 0.0)
    assert found.point == pytest.approx(2.5, abs=1e-5)


def test_the_other_direction_has_a_turn_of_its_own():
    down = tipping_exact(lambda s: ASPECT.margin(coverage(3.0 * s)), (-0.5, -0.9), 0.0)
    assert down.point == pytest.approx(-2.5 / 3.0, abs=1e-5)
    assert down.first_gives < down.last_holds < 0.0
    with pytest.raises(ValueError, match="both sides"):
        outward((-0.5, 0.5), 0.0)


def test_ratios_are_halved_on_their_own_scale():
    assert halfway(2.0, 8.0, 1.0) == pytest.approx(4.0)
    assert halfway(0.25, 1.0, 1.0) == pytest.approx(0.5)
    assert halfway(2.0, 8.0, 0.0) == pytest.approx(5.0)


def test_simulated_verdicts_bracket_the_turn_and_interpolate_within():
    cells = {s: judged(coverage(s), 0.001) for s in (1.0, 2.0, 4.0)}
    found = bracket(cells, 0.0)
    assert (found.last_holds, found.first_gives, found.exact) == (2.0, 4.0, False)
    # Margins at the ends: 1 - (s/2.5)^2 = 0.36 and -1.56; the straight line between them crosses 0 here.
    assert found.point == pytest.approx(2.0 + 2.0 * 0.36 / (0.36 + 1.56))


def test_bisection_halves_the_bracket_so_many_times_and_no_more():
    cells = {s: judged(coverage(s, 2.6), 0.0001) for s in (1.0, 2.0, 4.0)}
    ladder, asked = tuple(cells), []
    while (severity := next_severity(cells, 0.0, 3, ladder)) is not None:
        asked.append(severity)
        cells[severity] = judged(coverage(severity, 2.6), 0.0001)
    assert asked == [3.0, 2.5, 2.75]
    found = bracket(cells, 0.0)
    assert (found.last_holds, found.first_gives) == (2.5, 2.75)
    assert found.point == pytest.approx(2.6, abs=0.01)


def test_an_unsettled_severity_inside_the_bracket_ends_the_search():
    cells = {1.0: judged(0.95, 0.001), 2.0: judged(0.9401, 0.001), 3.0: judged(0.92, 0.001)}
    assert cells[2.0].verdict is Verdict.UNSETTLED
    assert next_severity(cells, 0.0, 5, tuple(cells)) is None
    found = bracket(cells, 0.0)
    assert (found.last_holds, found.first_gives) == (1.0, 3.0)
    assert 2.0 < found.point < 3.0


def test_unsettled_all_the_way_is_said_as_such():
    cells = {1.0: judged(0.9401, 0.001), 2.0: judged(0.9399, 0.001)}
    found = bracket(cells, 0.0)
    assert (found.point, found.last_holds, found.first_gives, found.never) == (None, 0.0, None, True)
    assert next_severity(cells, 0.0, 5, tuple(cells)) is None


def test_a_first_rung_that_gives_is_bracketed_by_neutral():
    cells = {2.0: judged(0.9, 0.001), 3.0: judged(0.8, 0.001)}
    assert next_severity(cells, 1.0, 3, tuple(cells)) == pytest.approx(math.sqrt(2.0))
    cells[1.0] = judged(0.93, 0.001)
    found = bracket(cells, 1.0)
    assert (found.always, found.point) == (True, 1.0)
    assert next_severity(cells, 1.0, 3, (2.0, 3.0)) is None
