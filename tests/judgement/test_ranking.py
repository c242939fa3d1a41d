import dataclasses
import math

import pytest

from withstand.judgement.findings import Aspect
from withstand.judgement.ranking import Candidate, Spot, Threat, cheapest_holding, ranked, worst_of
from withstand.judgement.tipping import Tipping
from withstand.judgement.verdict import Finding, Judgement, Verdict

COVERAGE = Aspect("coverage", 0.94, math.inf, -math.inf, 0.96, 0.95, "test")
BIAS = Aspect("bias_in_sd", -0.4, 0.4, -math.inf, math.inf, 0.0, "test")


def spot(share, severity=1.0, bias=0.0):
    findings = (Finding.of(COVERAGE, share, share, share), Finding.of(BIAS, bias, bias, bias))
    gives = any(str(finding.kind) == "outside" for finding in findings)
    judgement = Judgement(Verdict.GIVES if gives else Verdict.HOLDS, findings, True, 0)
    return Spot(severity, judgement, share, share - 0.95, True)


def threat(name, share, bias=0.0):
    tipping = Tipping(None, 1.0, None, 1.0, 0.0, True)
    return Threat(name, "ols", "x", spot(share, bias=bias), tipping, None, None, "", math.nan)


def test_most_coverage_lost_is_feared_first():
    names = [t.departure for t in ranked([threat("a", 0.945), threat("b", 0.80), threat("c", 0.93), threat("d", 0.97)])]
    assert names == ["b", "c", "a", "d"]


def test_what_gives_by_bias_comes_before_what_holds_though_it_covers_more():
    order = ranked([threat("slight", 0.9499), threat("biased", 0.96, bias=0.5), threat("bad", 0.9)])
    assert [t.departure for t in order] == ["bad", "biased", "slight"]
    assert order[1].worst.judgement.verdict is Verdict.GIVES


def test_equals_are_ordered_by_margin_and_then_by_name():
    assert [t.departure for t in ranked([threat("b", 0.95), threat("a", 0.95), threat("c", 0.95, bias=0.2)])] == ["c", "a", "b"]


def test_the_worst_severity_is_not_the_largest_where_harm_turns_back():
    assert worst_of([spot(0.95, 1.0), spot(0.91, 2.0), spot(0.93, 4.0)]).severity == 2.0
    assert worst_of([spot(0.951, 1.0), spot(0.97, 2.0, bias=0.6)]).severity == 2.0


def test_simulated_severities_within_noise_are_told_by_the_farthest():
    def simulated(share, severity):
        return dataclasses.replace(spot(share, severity), exact=False, mc_se=0.002)

    assert worst_of([simulated(0.9492, 1.0), simulated(0.9501, 2.0), simulated(0.9499, 4.0)]).severity == 4.0
    assert worst_of([simulated(0.9412, 1.0), simulated(0.9501, 2.0)]).severity == 1.0
    assert worst_of([simulated(0.9501, 0.25), simulated(0.9499, 1.5)], neutral=1.0).severity == 0.25


H, G, U = Verdict.HOLDS, Verdict.GIVES, Verdict.UNSETTLED


def test_the_narrowest_that_holds_everywhere_is_named_with_its_premium():
    candidates = {"ols": Candidate([H, G], 2.0), "hc3": Candidate([H, H], 2.4), "hc2-bm": Candidate([H, H], 2.2)}
    assert cheapest_holding(candidates, "ols") == ("hc2-bm", pytest.approx(0.1))
    assert cheapest_holding({"ols": Candidate([H, U], 2.0), "hc3": Candidate([G, H], 2.4)}, "ols")[0] == ""
    assert cheapest_holding({"ols": Candidate([], 2.0)}, "ols")[0] == ""


def test_a_test_without_interval_comes_last_and_has_no_known_premium():
    candidates = {"permutation": Candidate([H], math.nan), "hc3": Candidate([H], 9.0), "ols": Candidate([G], 2.0)}
    assert cheapest_holding(candidates, "ols") == ("hc3", pytest.approx(3.5))
    name, premium = cheapest_holding({"permutation": Candidate([H], math.nan), "ols": Candidate([G], 2.0)}, "ols")
    assert name == "permutation"
    assert math.isnan(premium)


def test_among_equally_wide_ones_the_order_of_the_user_decides():
    assert cheapest_holding({"cr2": Candidate([H], 2.0), "hc3": Candidate([H], 2.0)}, "cr2")[0] == "cr2"
