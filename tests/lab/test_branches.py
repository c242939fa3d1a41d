"""Rules that look first, where the check passed: against a plain simulation, and in the table of a run."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from withstand.departures import Fan, World
from withstand.diagnostics import Pretest
from withstand.lab.conduct import conduct
from withstand.lab.gather import Effort

ALLOWED = 4.5
RULE = Pretest("koenker", "hc3", "ols")
WHERE = ["departure", "severity", "procedure", "focus"]


@pytest.fixture(scope="module")
def run(make_study, make_plan):
    study = make_study(effect=0.08, joint=True)
    return study, conduct(
        study, make_plan([Fan(along="hours", severity=(2.0, 4.0))], ("ols", RULE), repetitions=20_000, most=20_000)
    )


def plainly(design, spread, replicates=40_000):
    """Whether Koenker's test passes and whether the t interval of the second coefficient covers, replicate by replicate."""
    rng = np.random.default_rng(12)
    X, n, p = design.X, design.n, design.p
    E = spread[:, None] * rng.standard_normal((n, replicates))
    b = np.linalg.lstsq(X, E, rcond=None)[0]
    squares = (E - X @ b) ** 2
    left = squares - X @ np.linalg.lstsq(X, squares, rcond=None)[0]
    r2 = 1.0 - np.sum(left**2, axis=0) / np.sum((squares - squares.mean(axis=0)) ** 2, axis=0)
    passed = stats.chi2.sf(n * r2, p - 1) > 0.05
    half = stats.t.isf(0.025, n - p) * np.sqrt(squares.sum(axis=0) / (n - p) * np.linalg.inv(X.T @ X)[1, 1])
    return passed, np.abs(b[1]) <= half


def test_against_a_plain_simulation(run):
    study, outcome = run
    table = outcome.measures[outcome.measures["procedure"] == RULE.identity].set_index(["measure", *WHERE])
    worst = outcome.ranking[(outcome.ranking["departure"] == "fan") & (outcome.ranking["focus"] == "hours")].iloc[0]
    for departure, severity in (("none", 0.0), ("fan", worst["worst_severity"])):
        spread = np.ones(study.n)
        if departure == "fan":
            spread = World(((Fan(along="hours"), severity),)).on(study.design).spread
        passed, covered = plainly(study.design, spread)
        here = departure, severity, RULE.identity, "hours"
        rate, given = (table.loc[(measure, *here)] for measure in ("pass_rate", "coverage_given_pass"))
        share, among = passed.mean(), covered[passed].mean()
        assert abs(rate["value"] - share) < ALLOWED * np.hypot(rate["mc_se"], np.sqrt(share * (1 - share) / len(passed)))
        assert abs(given["value"] - among) < ALLOWED * np.hypot(given["mc_se"], np.sqrt(among * (1 - among) / passed.sum()))
        assert table.loc[("size_given_pass", *here), "value"] == pytest.approx(1 - given["value"])
        assert rate["low"] <= rate["value"] <= rate["high"]
        assert rate["failures"] == 0
        # Passing protects nothing: the interval is that of least squares, and no better than it is everywhere.
        everywhere = covered.mean()
        assert among < everywhere + ALLOWED * np.sqrt(everywhere * (1 - everywhere) / passed.sum())


def test_only_rules_and_only_where_procedures_are_compared(run):
    _, outcome = run
    found = outcome.measures[outcome.measures["measure"] == "pass_rate"]
    assert set(found["procedure"]) == {RULE.identity}
    assert set(found["departure"]) == {"none", "fan"}
    for focus in ("hours", "both"):
        mine = outcome.ranking[outcome.ranking["focus"] == focus].iloc[0]
        assert sorted(found.loc[found["focus"] == focus, "severity"]) == [0.0, mine["worst_severity"]]


def test_the_same_rule_looked_at_where_it_passed(run, make_plan):
    """The branch as a procedure of its own: the share with an answer, and coverage among them, are the same numbers."""
    study, outcome = run
    plan = make_plan([Fan(along="hours", severity=(2.0, 4.0))], ("ols", RULE.given_passed), repetitions=20_000, most=20_000)
    table = conduct(study, plan).measures.set_index(["measure", *WHERE])
    rows = outcome.measures[outcome.measures["measure"].isin(["pass_rate", "coverage_given_pass"])].set_index(
        ["measure", *WHERE]
    )
    compared = 0
    for (measure, *here), row in rows.iterrows():
        place = (here[0], here[1], RULE.given_passed.identity, here[3])
        other = "failure_rate" if measure == "pass_rate" else "coverage_given_answer"
        value = table.loc[(other, *place), "value"]
        assert row["value"] == pytest.approx(1 - value if measure == "pass_rate" else value, rel=1e-12)
        compared += 1
    assert compared == 8


def test_it_is_kept_in_the_ledger(make_study, make_plan, tmp_path):
    study, plan = make_study(), make_plan([Fan(along="hours", severity=(4.0,))], ("ols", RULE), most=2000)
    effort = Effort(ledger_path=tmp_path / "ledger.sqlite")
    first, again = conduct(study, plan, effort), conduct(study, plan, effort, simulate=False)
    assert (first.measures["measure"] == "pass_rate").any()
    pd.testing.assert_frame_equal(first.measures, again.measures, check_exact=True)
