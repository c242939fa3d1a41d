"""Size-adjusted power: simulated against closed forms and exact answers, and where a run reports it."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from withstand.departures import Contaminated, Fan, Skew, World
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.engine.ratios import RatioKernel
from withstand.engine.tally import Feature
from withstand.exact import adjusted_power
from withstand.lab.adjusted_power import TASKS, power_at_size
from withstand.lab.conduct import conduct
from withstand.lab.gather import Effort
from withstand.procedures import make_procedure

ALLOWED = 4.5


def normal_pair(rng, count, effect, together=0.7, scale=0.8):
    """Two-sided normal tests whose critical value is too small by `scale`, on noise shared in part."""
    shared, own = rng.standard_normal((2, count))
    other = together * shared + np.sqrt(1.0 - together**2) * own
    return np.abs(np.stack([shared, other + effect])) / (scale * stats.norm.isf(0.025))


def closed(effect):
    c = stats.norm.isf(0.025)
    return stats.norm.sf(c - effect) + stats.norm.cdf(-c - effect)


def test_value_and_error_in_a_case_with_a_closed_form():
    """400 runs of 5,000: the mean is the closed power, and the spread is what the standard errors say."""
    rng = np.random.default_rng(1)
    for effect in (1.0, 2.5):
        values, errors = np.array([power_at_size(normal_pair(rng, 5_000, effect), 0.05) for _ in range(400)]).T
        spread = values.std(ddof=1)
        # The quantile of 5,000 has a bias of order 1/5,000, times the slope, below a tenth of one standard error.
        assert abs(values.mean() - closed(effect)) < ALLOWED * spread / 20.0 + 0.1 * spread
        assert spread / np.sqrt(np.mean(errors**2)) == pytest.approx(1.0, abs=ALLOWED / np.sqrt(2 * 400))


def test_a_test_that_never_or_always_rejects_has_none():
    assert power_at_size(np.zeros((2, 100)), 0.05) == ()
    assert power_at_size(np.full((2, 100), np.inf), 0.05) == ()


@pytest.mark.parametrize("name", ["ols", "hc3", "cr1"])
def test_simulated_against_exact(make_study, name):
    """At the baseline and under a fan, for a coefficient; at the baseline the adjusted power of OLS is its power."""
    study = make_study(effect=0.08)
    world, procedure = World(((Fan(along="hours"), 4.0),)), make_procedure(name)
    job = Job(study, (world,), (procedure,), 3)
    ratios = RatioKernel(job).ratios(range(20_000 // job.width), {BASELINE: [0], 0: [0]})
    focus = study.focus[0]
    for index, here in ((BASELINE, World()), (0, world)):
        value, se = power_at_size(ratios[index, 0, 0], study.alpha)
        expected = adjusted_power(
            procedure, study.design, focus, here.on(study.design), study.level, focus.effect[None] / study.error_sd
        )[0]
        assert abs(value - expected) < ALLOWED * se
        assert 0.0 < se < 0.012


def test_a_ratio_above_one_is_a_rejection(make_study):
    """The ratios and the tallies of the same blocks tell the same sizes and powers, for every way a ratio is made."""
    study = make_study(joint=True, effect=0.08)
    names = ("ols", "hc3", "huber", "log-response", "gamma-log", "residual-bootstrap", "pretest", "wild-bootstrap")
    procedures = tuple(make_procedure(name) for name in names)
    job = Job(study, (World(((Skew(), 2.0),)),), procedures, 3)
    ratios = RatioKernel(job).ratios(range(1), {0: range(len(names))})
    tallies = Kernel(job).run(range(1), {0: range(len(names))})
    seen = {names[procedure] for _, procedure, focus in ratios if focus == 0}
    assert seen == set(names) - {"wild-bootstrap"} - {names[i] for i, j in job.refusals if j == 0}
    for (world, procedure, focus), pair in ratios.items():
        tally = tallies[world, procedure][focus]
        counted = tally.products[Feature.ONE, [Feature.REJECTED, Feature.POWERED]]
        np.testing.assert_allclose((pair > 1.0).sum(axis=1), counted)
    # No effect is stated for the joint quantity.
    assert {focus for _, _, focus in ratios} == {0}


@pytest.fixture(scope="module")
def outcome(make_study, make_plan):
    axes = [Fan(along="hours", severity=(2.0, 4.0)), Contaminated(severity=(3.0, 5.0))]
    return conduct(make_study(effect=0.08, joint=True), make_plan(axes, ("ols", "hc3", "cr1", "huber")))


WHERE = ["departure", "along", "severity", "procedure", "focus"]


def test_a_run_reports_it_where_the_size_is_off(outcome):
    table = outcome.measures
    adjusted = table[table["measure"] == "size_adjusted_power"]
    sizes = table[table["measure"] == "size"].set_index(WHERE)["value"]
    powers = table[table["measure"] == "power"].set_index(WHERE)
    assert set(adjusted["focus"]) == {"hours"}
    assert set(adjusted["departure"]) == {"none", "fan", "contaminated"}
    assert set(adjusted["method"]) == {"exact", "simulated"}
    for row in adjusted.itertuples():
        place = tuple(getattr(row, name) for name in WHERE)
        size, power = sizes[place], powers.loc[place]
        assert not 0.04 <= size <= 0.06
        noise = ALLOWED * np.hypot(row.mc_se, power["mc_se"])
        assert (row.value - power["value"]) * np.sign(0.05 - size) > -noise
        assert row.repetitions == (0 if row.method == "exact" else TASKS * 2_000)
        assert row.method == "exact" or row.low < row.value < row.high
    # Everything that is off at the baseline and at the first of the ranking is there.
    first = outcome.ranking[outcome.ranking["departure"] == "fan"].iloc[0]
    for departure, severity in (("none", 0.0), ("fan", first["worst_severity"])):
        off = [
            place for place, size in sizes.items()
            if place[0] == departure and place[2] == severity and place[4] == "hours" and not 0.04 <= size <= 0.06
        ]  # fmt: skip
        found = adjusted[(adjusted["departure"] == departure) & (adjusted["severity"] == severity)]
        assert sorted(found["procedure"]) == sorted(place[3] for place in off)
        assert off


def test_workers_do_not_change_it(make_study, make_plan):
    study = make_study(effect=0.08)
    plan = make_plan([Contaminated(severity=(5.0,))], ("ols", "hc3", "cr1"), most=2000)
    one, two = (conduct(study, plan, Effort(workers=workers)) for workers in (1, 2))
    assert (one.measures["measure"] == "size_adjusted_power").sum() >= 2
    pd.testing.assert_frame_equal(one.measures, two.measures, check_exact=True)


def test_it_is_kept_in_the_ledger(make_study, make_plan, tmp_path):
    study = make_study(effect=0.08)
    plan = make_plan([Contaminated(severity=(5.0,))], ("ols", "hc3", "cr1"), most=2000)
    effort = Effort(ledger_path=tmp_path / "ledger.sqlite")
    first, again = conduct(study, plan, effort), conduct(study, plan, effort, simulate=False)
    assert (first.measures["measure"] == "size_adjusted_power").any()
    pd.testing.assert_frame_equal(first.measures, again.measures, check_exact=True)
