import math

import numpy as np
import pytest
from scipy import stats

from withstand.engine.tally import FEATURES, Feature, Tally
from withstand.judgement.aspects import aspects_of, judged
from withstand.judgement.sequential import Looks
from withstand.judgement.tolerance import Tolerance
from withstand.judgement.verdict import Verdict, judge, judge_exact, spending

ASPECTS = aspects_of(Tolerance(), 0.05)


def test_all_looks_together_spend_the_accepted_chance():
    spent = [spending(0.01, look) for look in range(1, 200_000)]
    # The sum of 1/j^2 is pi^2/6 (Euler); what is left after J terms is below 1/J.
    assert sum(spent) < 0.01
    assert sum(spent) == pytest.approx(0.01, abs=0.01 * 6 / math.pi**2 / 200_000 * 1.01)


def test_an_exact_cell_is_settled_at_once_by_its_value():
    assert judge_exact({"coverage": 0.9401}, ASPECTS).verdict is Verdict.HOLDS
    found = judge_exact({"coverage": 0.9399, "bias_in_sd": 0.0}, ASPECTS)
    assert (found.verdict, found.deciding.measure, found.exact) == (Verdict.GIVES, "coverage", True)
    assert found.margin == pytest.approx(-0.01)
    assert judge_exact({"coverage": 0.95, "bias_in_sd": -0.41}, ASPECTS).deciding.measure == "bias_in_sd"
    assert judge_exact({"coverage": 0.98}, ASPECTS).wasteful


def test_nothing_to_judge_is_an_error_not_a_verdict():
    with pytest.raises(ValueError, match="at least one measure"):
        judge_exact({"width": 3.0}, ASPECTS)


@pytest.mark.parametrize(("misses", "verdict"), [(500, Verdict.HOLDS), (590, Verdict.UNSETTLED), (700, Verdict.GIVES)])
def test_a_simulated_cell_is_settled_once_its_interval_is_clear_of_the_bound(counted, misses, verdict):
    found = judge(counted(10_000, misses // 2, misses - misses // 2), ASPECTS, 0.01, 1)
    assert found.verdict is verdict
    # Clopper & Pearson (1934), written out with the beta quantiles at the share that coverage may spend: nine tenths.
    tail = spending(0.01, 1) * 0.9 / 2
    finding = next(f for f in found.findings if f.measure == "coverage")
    hits = 10_000 - misses
    assert finding.low == pytest.approx(stats.beta.ppf(tail, hits, misses + 1))
    assert finding.high == pytest.approx(stats.beta.isf(tail, hits + 1, misses))


def test_a_later_look_is_more_demanding(counted):
    tally = counted(10_000, 260, 260)
    widths = [np.ptp([(f := judge(tally, ASPECTS, 0.01, look).findings[0]).low, f.high]) for look in (1, 2, 5)]
    assert widths[0] < widths[1] < widths[2]


def test_blocks_with_their_own_design_widen_the_interval_by_students_t(counted):
    plain = judge(counted(10_000, 250, 250), ASPECTS, 0.01, 1).findings[0]
    blocked = judge(counted(10_000, 250, 250, fresh_blocks=8), ASPECTS, 0.01, 1).findings[0]
    assert blocked.value == pytest.approx(plain.value)
    assert blocked.high - blocked.low > plain.high - plain.low


def test_a_test_that_is_its_interval_turned_round_is_judged_once(counted):
    assert judged(ASPECTS, counted(1000, 20, 20)) == ("coverage", "bias_in_sd")
    assert judged(ASPECTS, counted(1000, 20, 20, rejected=90)) == ("coverage", "size", "bias_in_sd")
    assert judged(ASPECTS, counted(1000, rejected=90, interval=False)) == ("size", "bias_in_sd")


def test_bias_alone_can_decide(counted):
    found = judge(counted(10_000, 250, 250, bias=0.6), ASPECTS, 0.01, 1)
    assert (found.verdict, found.deciding.measure) == (Verdict.GIVES, "bias_in_sd")
    absolute = aspects_of(Tolerance(bias_absolute=1.0), 0.05)
    assert judge(counted(10_000, 250, 250, bias=0.6), absolute, 0.01, 1, unit=1.0).verdict is Verdict.HOLDS
    assert judge(counted(10_000, 250, 250, bias=0.6), absolute, 0.01, 1, unit=2.0).verdict is Verdict.GIVES


def test_one_tail_that_takes_all_the_error_is_seen_where_tails_are_judged(counted):
    lopsided = counted(10_000, 500, 0)
    assert judge(lopsided, ASPECTS, 0.01, 1).verdict is Verdict.HOLDS
    found = judge(lopsided, aspects_of(Tolerance(tails=True), 0.05), 0.01, 1)
    assert (found.verdict, found.deciding.measure) == (Verdict.GIVES, "miss_below")


def share_tally(replicates, hits):
    """So many replicates that cover and so many that miss, with nothing else recorded."""
    covering, missing = np.zeros(2 * FEATURES), np.zeros(2 * FEATURES)
    for half in (0, FEATURES):
        covering[[half + Feature.ONE, half + Feature.OK, half + Feature.COVERED, half + Feature.WIDTH]] = 1.0
        missing[
            [half + Feature.ONE, half + Feature.OK, half + Feature.REJECTED, half + Feature.ABOVE, half + Feature.WIDTH]
        ] = 1.0
    products = hits * np.outer(covering, covering) + (replicates - hits) * np.outer(missing, missing)
    return Tally(replicates, replicates, products)


@pytest.mark.parametrize(("truth", "wrong"), [(0.9375, Verdict.HOLDS), (0.9425, Verdict.GIVES)])
def test_wrong_verdicts_of_the_whole_search_stay_within_the_accepted_chance(truth, wrong):
    """Cells just outside and just inside the bound, searched from look to look up to the cap."""
    looks, delta, searches = Looks(1000, 64_000), 0.2, 400
    aspects = aspects_of(Tolerance(bias=None), 0.05)
    rng = np.random.default_rng(8)
    errors = settled = 0
    for _ in range(searches):
        hits = done = 0
        for look in range(1, looks.count + 1):
            hits += int(rng.binomial(looks.target(look) - done, truth))
            done = looks.target(look)
            verdict = judge(share_tally(done, hits), aspects, delta, look).verdict
            if verdict is not Verdict.UNSETTLED:
                settled += 1
                errors += verdict is wrong
                break
    assert settled > searches / 4
    # One side of a two-sided interval: at most delta/2 of the searches, give or take 5 standard errors.
    assert errors / searches <= delta / 2 + 5 * math.sqrt(delta / 2 * (1 - delta / 2) / searches)


@pytest.mark.parametrize(
    ("values", "measure"),
    [
        ({"coverage": 0.965, "bias_in_sd": 0.0}, "coverage"),  # more than is promised, and no bias at all
        ({"coverage": 0.965, "bias_in_sd": -1e-16}, "coverage"),  # no bias but for rounding
        ({"coverage": 0.948, "bias_in_sd": 0.02}, "coverage"),  # a fifth of one allowance against a twentieth of the other
        ({"coverage": 0.948, "bias_in_sd": 0.2}, "bias_in_sd"),
        ({"coverage": 0.965, "bias_in_sd": 0.2}, "bias_in_sd"),  # only the bias has spent anything of what it may
    ],
)
def test_a_cell_that_holds_is_decided_by_what_is_nearest_to_giving(values, measure):
    found = judge_exact(values, ASPECTS)
    assert (found.verdict, found.deciding.measure) == (Verdict.HOLDS, measure)


def test_a_bias_that_may_be_none_does_not_decide(counted):
    # 3 % miss: an interval that covers more than it promises, and a bias of half its standard error.
    found = judge(counted(10_000, 150, 150, bias=0.005), ASPECTS, 0.01, 1)
    assert (found.verdict, found.deciding.measure, found.deciding.value) == (Verdict.HOLDS, "coverage", pytest.approx(0.97))


def test_a_test_without_an_interval_is_decided_by_its_size(counted):
    found = judge(counted(10_000, rejected=300, interval=False), ASPECTS, 0.01, 1)
    assert (found.verdict, found.deciding.measure) == (Verdict.HOLDS, "size")
