import json

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from withstand.departures import Clusters, Curvature, Fan, HeavyTails, LevelSpread, Serial, Skew, WorstFan
from withstand.departures.world import World
from withstand.errors import InputError, NumericalError, ScenarioError
from withstand.judgement.tolerance import Tolerance
from withstand.lab import exactly
from withstand.lab.plan import Axis
from withstand.lab.size_answer import ProcedureSize, SizeAnswer
from withstand.lab.size_feared import feared_worlds
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.size_question import noise_seed
from withstand.lab.sizing import size_study
from withstand.procedures.base import make_procedure
from withstand.study.columns import Drawn, InSequence, Levels
from withstand.study.pilot import Pilot
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study
from withstand.study.study import Study

QUICK = Effort(repetitions=4000, most=16_000, largest=2000)
LAMP = {"lamp": Levels((0.0, 4.0, 8.0, 12.0)), "bench": Levels(("south", "north"))}


def lamp(formula="y ~ lamp + bench", **options):
    plan = StudyPlan(16, LAMP, error_sd=3.0)
    return planned_study(plan, formula, **({"focus": "lamp", "effect": {"lamp": 0.5}} | options))


def data(n=10, far=40.0, **options):
    x = np.append(np.arange(n - 1.0), far)
    frame = pd.DataFrame({"x": x, "y": x + np.random.default_rng(1).normal(size=n)})
    return Study.from_frame(frame, "y ~ x", **options)


def procedures(*names):
    return tuple(make_procedure(name) for name in names)


def world(*stack):
    return World(tuple(stack))


def value(answer, measure, n, **where):
    rows = answer.curve[(answer.curve["measure"] == measure) & (answer.curve["n"] == n) & (answer.curve["look"] == "search")]
    for name, wanted in where.items():
        rows = rows[rows[name] == wanted]
    (found,) = rows["value"]
    return found


def test_everything_asked_for_is_met_at_n_and_not_one_step_before():
    fan = world((Fan(along="lamp"), 3.0))
    targets = Targets(power=0.9, half_width=0.25)
    answer = size_study(lamp(), procedures("hc3", "hc2-bm"), (fan,), targets=targets)
    for size in answer.sizes:
        assert size.method == "exact"
        met = []
        for n in (size.n - 8, size.n):
            where = {"procedure": size.procedure}
            met.append(
                value(answer, "power", n, **where) >= 0.9
                and value(answer, "half_width", n, **where) <= 0.25
                and value(answer, "coverage", n, **where) >= 0.94
            )
        assert met == [False, True]
    assert answer.n == min(size.n for size in answer.sizes)


def test_an_exact_answer_out_of_reach_is_simulated(monkeypatch):
    targets = Targets(holds=False, half_width=0.3)
    exact = size_study(lamp(), procedures("ols"), targets=targets, effort=QUICK).sizes[0]
    assert exact.method == "exact"

    def unreachable(*arguments, **options):
        raise NumericalError("an exact probability was reached to 1.7e-08 only")

    monkeypatch.setattr(exactly, "coverage", unreachable)
    found = size_study(lamp(), procedures("ols"), targets=targets, effort=QUICK).sizes[0]
    assert found.method == "simulated"
    assert found.low <= exact.n <= found.high


def test_every_world_counts():
    fan, level = world((Fan(along="lamp"), 3.0)), world((LevelSpread(along="bench", noisy=("north",)), 4.0))
    asked = {"targets": Targets(holds=False, power=0.9)}
    each = [size_study(lamp(), procedures("hc3"), (one,), **asked).n for one in (fan, level)]
    both = size_study(lamp(), procedures("hc3"), (fan, level, fan), **asked)
    assert both.n == max(each)
    assert len(both.asked) == 2
    # Severities of one departure are worlds of their own.
    ladder = [world((Fan(along="lamp"), ratio)) for ratio in (1.5, 3.0, 6.0)]
    several = size_study(lamp(), procedures("hc3"), ladder, **asked)
    single = [size_study(lamp(), procedures("hc3"), (one,), **asked).n for one in ladder]
    assert several.n == max(single)
    # The world named as deciding is one that alone needs as many.
    alone = {f"SD ratio {ratio:g}": n for ratio, n in zip((1.5, 3.0, 6.0), single, strict=True)}
    (deciding,) = (name for name in alone if several.sizes[0].binding.endswith(name))
    assert alone[deciding] == several.n


def test_a_stack_acts_at_once():
    stack = world((Fan(along="lamp"), 3.0), (Skew(), 2.0))
    targets = Targets(holds=False, power=0.9)
    answer = size_study(lamp(), procedures("hc3"), (stack,), targets=targets, effort=QUICK)
    assert set(answer.curve["world"]) == {"fan along lamp, SD ratio 3 + skew, skewness 2"}
    assert answer.sizes[0].method == "simulated"
    alone = size_study(lamp(), procedures("hc3"), (world((Fan(along="lamp"), 3.0)),), targets=targets)
    # Power hardly knows the law of the errors.
    assert abs(answer.n - alone.n) <= 8


def test_simulated_answers_agree_with_exact_ones():
    fan = world((Fan(along="lamp"), 3.0))
    targets = Targets(holds=False, power=0.9)
    truth = size_study(lamp(), procedures("hc3"), (fan,), targets=targets).n
    for seed in range(3):
        effort = Effort(seed=seed, repetitions=4000, most=16_000, method="simulated")
        size = size_study(lamp(), procedures("hc3"), (fan,), targets=targets, effort=effort).sizes[0]
        assert size.method == "simulated"
        assert size.low <= truth <= size.high
        assert abs(size.confirmed - 0.9) < 0.1


def test_the_same_seed_gives_the_same_answer_for_any_number_of_workers():
    skew = world((Skew(), 2.0))
    asked = {"targets": Targets(power=0.8), "effort": QUICK}
    first, again = (size_study(lamp(), procedures("ols"), (skew,), **asked) for _ in range(2))
    pd.testing.assert_frame_equal(first.curve, again.curve)
    spread = Effort(repetitions=4000, most=16_000, largest=2000, workers=2)
    other = size_study(lamp(), procedures("ols"), (skew,), targets=Targets(power=0.8), effort=spread)
    pd.testing.assert_frame_equal(first.curve, other.curve)
    assert noise_seed(1, 8, 0) != noise_seed(1, 8, 1) != noise_seed(1, 9, 1)


def test_the_second_look_has_noise_of_its_own():
    answer = size_study(lamp(), procedures("ols"), (world((Skew(), 2.0)),), targets=Targets(power=0.8), effort=QUICK)
    size = answer.sizes[0]
    rows = answer.curve[(answer.curve["measure"] == "power") & (answer.curve["n"] == size.confirmed_at)]
    assert set(rows["look"]) == {"search", "confirmation"}
    assert rows["value"].nunique() == 2
    assert "Looked at again with fresh noise" in answer.sentences[0]


def test_rows_there_are_may_do():
    answer = size_study(data(40, far=50.0), procedures("ols"), (world((Skew(), 1.0)),), effort=QUICK)
    assert answer.n == 40
    assert "the 40 rows there are do" in answer.sentences[0]
    assert "whole copies of the 40" in answer.sentences[-1]


def test_data_grow_by_the_rule_asked_for():
    tails = world((HeavyTails(), 1 / 3))
    answer = size_study(data(), procedures("ols"), (tails,), rule="resample", effort=QUICK)
    assert "drawn anew" in answer.growth
    with pytest.raises(InputError, match="'extend' lengthens a series"):
        size_study(data(), procedures("ols"), (tails,), rule="extend", effort=QUICK)


def test_bias_that_stays_is_no_cure():
    # The mean at the middle lies above the line by part of the bow, and a line never learns.
    middle = {"at": {"lamp": 6.0, "bench": "south"}, "of": "mean"}
    study = lamp(focus=[middle], effect={})
    answer = size_study(study, procedures("ols", "hc3"), (world((Curvature(along="lamp"), 1.0)),))
    assert all(size.no_cure and size.n is None for size in answer.sizes)
    assert "the bias stays" in answer.sizes[0].reason
    assert answer.n is None
    assert "No procedure with a known limit meets it" in answer.sentences[0]


def test_an_interval_for_a_new_response_has_a_floor():
    new = {"at": {"lamp": 6.0, "bench": "south"}, "of": "new"}
    study = lamp(focus=[new], effect={})
    floor = stats.norm.isf(0.025) * 3.0
    below = size_study(study, procedures("ols"), targets=Targets(half_width=0.99 * floor)).sizes[0]
    assert below.no_cure
    assert "half width stays above 5.88" in below.reason
    above = size_study(study, procedures("ols"), targets=Targets(half_width=1.01 * floor)).sizes[0]
    assert above.n is not None
    # t5 errors: a 99 % interval covers .9791 in the limit (closed; in the list of outside values).
    tails = size_study(lamp(focus=[new], effect={}, level=0.99), procedures("ols"), (world((HeavyTails(), 0.2)),)).sizes[0]
    assert tails.no_cure
    assert tails.limit == pytest.approx(0.9791, abs=2e-4)


def test_the_worst_fan_is_bound_to_the_focus():
    answer = size_study(lamp(), procedures("ols", "hc2-bm"), (world((WorstFan(), 3.0)),))
    assert answer.sizes[0].no_cure
    assert answer.sizes[1].n is not None


def test_clusters_of_a_plan():
    columns = {"week": InSequence(), "dose": Levels((0.0, 1.0))}
    plan = StudyPlan(20, columns, error_sd=1.0)
    study = planned_study(plan, "y ~ week", order="week", focus="week", effect={"week": 0.05})
    answer = size_study(study, procedures("ols"), (world((Serial(), 0.5)),))
    assert answer.sizes[0].no_cure
    # A trending regressor: true over claimed variance tends to (1 + rho)/(1 - rho).
    assert answer.sizes[0].limit == pytest.approx(1 - 2 * stats.norm.sf(stats.norm.isf(0.025) / np.sqrt(3.0)), abs=3e-3)
    with pytest.raises(ScenarioError, match="'clusters' is not applicable"):
        size_study(study, procedures("ols"), (world((Clusters(), 0.2)),))


def test_a_procedure_that_never_applies_says_why():
    size = size_study(lamp(), procedures("cr2"), effort=QUICK).sizes[0]
    assert size.n is None
    assert not size.no_cure
    assert "no answer at any number of rows up to 2000" in size.reason
    assert "groups" in size.reason


def test_not_met_up_to_the_largest():
    effort = Effort(largest=64)
    size = size_study(lamp(effect={"lamp": 0.01}), procedures("ols"), targets=Targets(power=0.9), effort=effort).sizes[0]
    assert size.n is None
    assert "not met up to 64 rows: power at least 0.9 when nothing is wrong is asked, and there it is 0.05" in size.reason


def test_a_pilot_carries_its_range_through():
    rng = np.random.default_rng(4)
    pilot = pd.DataFrame({"x": rng.normal(size=8), "y": rng.normal(size=8)})
    columns = {"x": Levels((-1.0, 1.0))}
    study = planned_study(StudyPlan(20, columns, pilot=Pilot(pilot)), "y ~ x", focus="x", effect={"x": 0.5})
    answer = size_study(study, procedures("ols"), targets=Targets(power=0.9))
    low, high = study.grow.sd_range
    ends = [
        size_study(planned_study(StudyPlan(20, columns, error_sd=sd), "y ~ x", focus="x", effect={"x": 0.5}),
                   procedures("ols"), targets=Targets(power=0.9)).n
        for sd in (low, high)
    ]  # fmt: skip
    assert [corner["n"] for corner in answer.range_record] == ends
    assert ends[0] < answer.n < ends[1]
    assert f"{ends[0]} rows" in answer.range_sentences[0]
    assert "rests on a pilot of 8 rows" in answer.notices[0]
    # Coverage does not depend on the error SD, so there is no range to carry.
    assert size_study(study, procedures("ols")).range_sentences == ()


def test_there_is_no_power_at_the_observed_effect():
    with pytest.raises(ScenarioError) as caught:
        size_study(data(), procedures("ols"), targets=Targets(power=0.8))
    assert caught.value.where == "study.effect"
    assert "Hoenig & Heisey 2001" in caught.value.remedy
    assert "95 % interval" in caught.value.remedy
    assert "would notice an effect of" in caught.value.remedy
    with pytest.raises(ScenarioError, match="State the smallest effect that matters"):
        size_study(lamp(effect={}), procedures("ols"), targets=Targets(power=0.8))
    # The remedy works.
    assert size_study(lamp(effect={}), procedures("ols"), targets=Targets(power=0.8), effect=0.5).n is not None


@pytest.mark.parametrize(
    ("make", "where", "words"),
    [
        (lambda: Targets(power=90), "--power", "0.9"),
        (lambda: Targets(power=1.0), "--power", "0.9"),
        (lambda: Targets(power=2), "--power", "between 0 and 1, as in 0.9"),
        (lambda: Targets(power=-0.1), "--power", "0.9"),
        (lambda: Targets(half_width=0.0), "--half-width", "positive"),
        (lambda: Targets(holds=False), "size", "power"),
        (lambda: Effort(largest=2), "--largest", "4"),
        (lambda: Effort(method="guess"), "method", "auto"),
        (lambda: size_study(lamp(), ()), "--procedure", "ols"),
        (lambda: size_study(lamp(), procedures("ols"), focus="bench"), "focus", "lamp"),
        (lambda: size_study(lamp(), procedures("ols"), effect=0.0), "--effect", "smallest"),
        (lambda: size_study(lamp(), procedures("ols"), (world((Fan(along="oven"), 2.0)),)), "", "oven"),
    ],
)
def test_what_cannot_be_asked_is_refused_with_the_remedy(make, where, words):
    with pytest.raises(InputError) as caught:
        make()
    assert caught.value.remedy
    assert words in str(caught.value)
    if where:
        assert caught.value.where == where


def test_worlds_as_far_as_the_residuals_allow():
    rng = np.random.default_rng(6)
    x = rng.uniform(0, 1, 60)
    frame = pd.DataFrame({"x": x, "y": x + rng.normal(size=60)})
    study = Study.from_frame(frame, "y ~ x", effect={"x": 1.2})
    axes = (Axis(Fan((1.5, 3.0, 40.0), along="x")),)
    worlds = feared_worlds(study, axes, procedures("hc3"))
    severities = [severity for one in worlds for _, severity in one.stack]
    # The spread is even; that it grows forty times is not what these residuals allow.
    assert 1.0 < max(severities) < 40.0
    answer = size_study(study, procedures("hc3"), worlds, targets=Targets(power=0.8))
    assert answer.n >= 60
    with pytest.raises(InputError, match="a plan has no residuals"):
        feared_worlds(lamp(), (Axis(Fan((1.5, 3.0), along="lamp")),), procedures("hc3"))


def test_procedures_that_need_equally_few_rows_are_all_named():
    def choice(*sizes):
        some = tuple(ProcedureSize(f"p{i}", n) for i, n in enumerate(sizes))
        answer = SizeAnswer("", "", (), some, pd.DataFrame(), "", 0.99)
        return next((one for one in answer.sentences if one.startswith("The fewest rows")), None)

    assert choice(120, 104) == "The fewest rows: p1, with 104."
    assert choice(None, 104, 104) == "The fewest rows: p1 and p2, with 104."
    assert choice(104, 104, 110, 104) == "The fewest rows: p0, p1 and p3, with 104."
    assert choice(104) is None
    assert choice(None, None) is None


def test_the_record_is_plain():
    answer = size_study(lamp(), procedures("ols", "hc3"), (world((Fan(along="lamp"), 3.0)),), targets=Targets(power=0.9))
    record = json.loads(json.dumps(answer.as_record(), allow_nan=False))
    assert record["best"] == "hc3"
    assert record["n"] == answer.n
    assert [size["n"] for size in record["sizes"]] == [None, answer.n]
    assert {row["look"] for row in record["curve"]} == {"search"}


def test_tails_can_be_asked_for():
    skew = world((Skew(), 2.0))
    tolerance = Tolerance("bradley-liberal", tails=True)
    answer = size_study(data(), procedures("ols"), (skew,), tolerance=tolerance, effort=QUICK)
    assert answer.sizes[0].binding.startswith("share missing above at most 0.0375")
    assert answer.n > size_study(data(), procedures("ols"), (skew,), effort=QUICK).n


def test_drawn_columns_are_averaged_over():
    plan = StudyPlan(20, {"x": Drawn("lognormal", mean=1, sd=0.5)}, error_sd=1.0)
    study = planned_study(plan, "y ~ x", focus="x", effect={"x": 1.5})
    fan = world((Fan(along="x"), 2.0))
    answer = size_study(study, procedures("hc3"), (fan,), targets=Targets(holds=False, power=0.8), effort=QUICK)
    rows = answer.curve[(answer.curve["measure"] == "power") & (answer.curve["n"] == answer.sizes[0].confirmed_at)]
    assert set(rows["method"]) == {"averaged"}
    # The same by simulating errors too.
    simulated = Effort(seed=3, repetitions=4000, most=16_000, method="simulated")
    other = size_study(study, procedures("hc3"), (fan,), targets=Targets(holds=False, power=0.8), effort=simulated)
    a, b = answer.sizes[0], other.sizes[0]
    assert max(a.low, b.low) <= min(a.high, b.high)
