import math

import pytest

from withstand.diagnostics.critical import Critical
from withstand.judgement.detectability import Detectability, Hazard, hazard
from withstand.judgement.findings import Aspect
from withstand.judgement.headline import headline, round_for_speech
from withstand.judgement.limit import Cure, Limit
from withstand.judgement.plausible import Plausible
from withstand.judgement.ranking import Spot, Threat
from withstand.judgement.tipping import Tipping
from withstand.judgement.verdict import Finding, Judgement, Verdict

COVERAGE = Aspect("coverage", 0.94, math.inf, -math.inf, 0.96, 0.95, "test")
BIAS = Aspect("bias_in_sd", -0.4, 0.4, -math.inf, math.inf, 0.0, "test")


def plausible(low, high, **changes):
    options = {"empty": False, "open_below": False, "open_above": False, "turned": False} | changes
    return Plausible(low, high, low, 0.3, "a statistic", 0.9, replicates=4000, **options)


def threat(
    name, share, *, at=2.0, turn=1.5, bias=0.0, exact=True, open_=False, allowed=None, cure=None, holding="", premium=0.1
):
    findings = [Finding.of(COVERAGE, share, share - 0.02 * open_, share + 0.02 * open_), Finding.of(BIAS, bias, bias, bias)]
    kinds = {str(f.kind) for f in findings}
    verdict = Verdict.GIVES if "outside" in kinds else Verdict.UNSETTLED if "open" in kinds else Verdict.HOLDS
    judgement = Judgement(verdict, tuple(findings), exact, 0)
    worst = Spot(at, judgement, share, share - 0.95, exact, 0.0 if exact else 0.002)
    tipping = Tipping(turn, turn, turn, 4.0, 1.0, exact) if turn is not None else Tipping(None, 4.0, None, 4.0, 1.0, exact)
    limit = None if cure is None else Limit(cure, 0.9, 0.9, bias_stays=False)
    return Threat(name, "ols", "dose", worst, tipping, allowed, limit, holding, premium)


def say(name, severity):
    return "nothing wrong" if severity == 1.0 and name != "stack" else f"SD ratio {round_for_speech(severity):g}"


def tell(*threats, **options):
    return headline(36, 0.95, "dose", threats, say, **options)


def test_the_first_sentence_names_the_worst_with_all_its_numbers():
    first = tell(threat("fan", 0.881, at=3.2, turn=1.83, allowed=plausible(0.6, 3.2), cure=Cure.NEVER))[0]
    assert first == (
        "Worry first about fan: with these 36 rows, for the 95 % interval for dose by ols, it gives beyond SD ratio 1.8; your "
        "residuals allow SD ratio 0.6 to 3.2; at SD ratio 3.2 it covers 88.1 %; more rows are no cure."
    )


def test_a_simulated_share_carries_its_error():
    assert "covers 88.1 ± 0.4 %" in tell(threat("fan", 0.881, exact=False))[0]


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"open_above": True}, "your residuals allow SD ratio 1.5 and anything beyond; at"),
        ({"open_below": True}, "your residuals allow SD ratio 2.5 and anything below; at"),
        ({"open_below": True, "open_above": True}, "your residuals allow any severity; at"),
        ({"empty": True}, "your residuals fit no severity well; at SD ratio 2, the nearest,"),
    ],
)
def test_ranges_without_an_end_are_said_as_such(changes, told):
    assert told in tell(threat("fan", 0.9, allowed=plausible(1.5, 2.5, **changes)))[0]


def test_without_data_the_worst_tried_stands_in():
    assert "at SD ratio 2, the worst tried, it covers 90.0 %" in tell(threat("fan", 0.9))[0]


def test_a_bias_that_decides_is_named_beside_a_coverage_that_looks_well():
    sentences = tell(threat("fan", 0.90), threat("curvature", 0.979, bias=-0.434))
    assert "It also gives under curvature (covers 97.9 %, with a bias of -0.43 SD of the estimate at SD ratio 2)." in sentences


def test_a_procedure_out_of_tolerance_with_nothing_wrong_is_said_to_be():
    broken = threat("fan", 0.9, at=1.0, turn=1.0)
    assert "it is out of tolerance even when nothing is wrong" in tell(broken)[0]
    assert "with nothing wrong, the worst tried, it covers" in tell(broken)[0]
    assert "it is out of tolerance from SD ratio 1 on; at SD ratio 1," in tell(threat("stack", 0.9, at=1.0, turn=1.0))[0]


def test_a_departure_turned_round_gives_downwards():
    assert "it gives from SD ratio 0.7 down" in tell(threat("fan", 0.9, at=0.5, turn=0.7))[0]


def test_where_all_holds_it_says_how_far():
    assert tell(threat("fan", 0.949, turn=None, allowed=plausible(0.6, 3.2))) == (
        "With these 36 rows the 95 % interval for dose by ols holds under every departure tried, "
        "as far as your residuals allow it.",
    )
    assert tell(threat("fan", 0.949, turn=None))[0].endswith("holds under every departure tried, as far as it was tried.")


def test_what_is_too_close_to_call_is_not_called():
    sentences = tell(threat("fan", 0.935, open_=True, turn=None), threat("skew", 0.95, turn=None))
    assert sentences[0] == (
        "With these 36 rows the 95 % interval for dose by ols comes too close to the tolerance to call under fan."
    )
    assert "It holds under skew" in sentences[1]
    assert "Too close to call: fan." in tell(threat("skew", 0.8), threat("fan", 0.935, open_=True, turn=None))


def test_a_share_is_told_on_its_own_side_of_the_bound():
    assert "covers 93.997 %" in tell(threat("fan", 0.93997))[0]


def seen(power):
    return Detectability(1.5, power, 0.01, "a statistic", Critical(-2.0, 2.0, 0.05, 4000))


def test_harmful_and_hard_to_see_stands_out():
    told = tell(threat("fan", 0.8), threat("skew", 0.9), detectability={"fan": seen(0.08), "skew": seen(0.9)})
    assert "Harmful and hard to see: a check of the residuals shows fan at SD ratio 1.5 in 8 of 100 such studies." in told
    assert not any("hard to see" in s for s in tell(threat("skew", 0.9), detectability={"skew": seen(0.9)}))
    assert hazard(True, seen(0.2)) is Hazard.HIDDEN
    assert hazard(True, seen(0.8)) is Hazard.VISIBLE
    assert hazard(False, seen(0.8)) is Hazard.FALSE_ALARM
    assert hazard(False, seen(0.2)) is Hazard.HARMLESS


def test_what_holds_throughout_comes_with_its_premium():
    assert tell(threat("fan", 0.8), throughout=("hc3", 0.091))[-1] == (
        "hc3 holds throughout, with intervals 9 % wider when nothing is wrong."
    )
    assert tell(threat("fan", 0.8), throughout=("hac", -0.1))[-1].endswith("10 % narrower when nothing is wrong.")
    assert tell(threat("fan", 0.8), throughout=("permutation", math.nan))[-1] == "permutation holds throughout."


def test_where_none_holds_throughout_each_helper_is_named_once_with_what_it_helps_against():
    giving = [threat("fan", 0.8, holding="hc3"), threat("bowtie", 0.85, holding="hc3"), threat("clusters", 0.7)]
    giving.append(threat("serial", 0.6, holding="hac", premium=0.2))
    assert tell(*giving, throughout=("", math.nan))[-1] == (
        "No procedure tried holds throughout; what holds is hc3 under fan and bowtie, with intervals 10 % wider when nothing "
        "is wrong and hac under serial, with intervals 20 % wider when nothing is wrong."
    )
    assert tell(threat("clusters", 0.7), throughout=("", math.nan))[-1] == "No procedure tried holds under any of these."
    assert "holds throughout" not in " ".join(tell(threat("clusters", 0.7)))


@pytest.mark.parametrize(
    ("value", "told"), [(0.0, 0.0), (1234.5, 1200.0), (0.03456, 0.035), (-2.549, -2.5), (math.inf, math.inf)]
)
def test_two_digits_are_enough_for_speech(value, told):
    assert round_for_speech(value) == pytest.approx(told)
