import dataclasses
import math

import numpy as np
import pandas as pd
import pytest

from withstand.departures.dependence import Clusters
from withstand.departures.outliers import Outliers
from withstand.departures.shape import Skew
from withstand.departures.spread import Fan
from withstand.errors import LedgerError
from withstand.lab.conduct import conduct
from withstand.lab.gather import Effort
from withstand.lab.outcome import MEASURE_COLUMNS, RANKING_COLUMNS, TIPPING_COLUMNS, VERDICT_COLUMNS
from withstand.report.result import Result
from withstand.report.screen import screen
from withstand.report.store import restore

TABLES = {
    "measures": MEASURE_COLUMNS, "verdicts": VERDICT_COLUMNS, "tipping": TIPPING_COLUMNS, "ranking": RANKING_COLUMNS,
}  # fmt: skip


def same(a, b):
    for name in TABLES:
        pd.testing.assert_frame_equal(getattr(a, name), getattr(b, name), check_exact=True)
    assert a.headline == b.headline


@pytest.fixture(scope="module")
def outcome(study, make_plan):
    return conduct(study, make_plan())


def test_tables_have_their_columns_and_agree_with_each_other(outcome):
    for name, columns in TABLES.items():
        assert tuple(getattr(outcome, name).columns) == columns
    coverage = outcome.measures[outcome.measures["measure"] == "coverage"]
    where = ["departure", "along", "severity", "stack", "procedure", "focus"]
    both = outcome.verdicts.merge(coverage, on=where, suffixes=("", "_measured"))
    assert len(both) == len(outcome.verdicts) == len(coverage)
    by_coverage = both[both["deciding_measure"] == "coverage"]
    exact = by_coverage[by_coverage["method"] == "exact"]
    assert len(exact) > 4
    np.testing.assert_array_equal(exact["value"], exact["value_measured"])
    held = exact["verdict"] == "holds"
    assert ((exact["value"] >= 0.94) == held).all()


def test_shifts_are_counted_from_the_baseline(outcome):
    coverage = outcome.measures[outcome.measures["measure"] == "coverage"].set_index(["procedure", "departure", "severity"])
    for procedure in ("ols", "hc3"):
        base = coverage.loc[(procedure, "none", 0.0), "value"]
        fan = coverage.loc[(procedure, "fan", 4.0)]
        assert fan["shift"] == pytest.approx(fan["value"] - base, abs=1e-12)


def test_each_departure_is_ranked_at_the_worst_severity_the_residuals_allow(outcome):
    ols = outcome.ranking[outcome.ranking["procedure"] == "ols"]
    assert set(ols["departure"]) == {"fan", "skew"}
    coverage = outcome.measures[(outcome.measures["measure"] == "coverage") & (outcome.measures["procedure"] == "ols")]
    for row in ols.itertuples():
        tipping = outcome.tipping[(outcome.tipping["departure"] == row.departure) & (outcome.tipping["procedure"] == "ols")]
        low, high = tipping.iloc[0][["plausible_low", "plausible_high"]]
        assert low - 0.01 * abs(low) <= row.worst_severity <= high + 0.01 * abs(high)
        mine = coverage[coverage["departure"] == row.departure]
        allowed = mine[(mine["severity"] >= low * 0.99) & (mine["severity"] <= high * 1.01)]
        lowest = allowed.loc[allowed["value"].idxmin()]
        # Simulated severities that differ by less than two standard errors are one to the ranking.
        there = mine.loc[(mine["severity"] - row.worst_severity).abs().idxmin()]
        noise = 2.0 * math.hypot(lowest["mc_se"], there["mc_se"])
        assert 0.0 <= row.coverage_there - min(lowest["value"], 0.95) <= noise


def test_the_headline_leads_with_the_first_of_the_ranking(outcome):
    first = outcome.ranking.iloc[0]
    assert first["procedure"] == "ols"
    assert first["verdict_there"] == "gives"
    assert outcome.headline[0].startswith(f"Worry first about {first['departure']} along hours:")
    assert f"{100 * first['coverage_there']:.1f} %" in outcome.headline[0]


def test_what_holds_at_the_worst_severity_is_named(outcome):
    row = outcome.ranking[(outcome.ranking["procedure"] == "ols") & (outcome.ranking["departure"] == "fan")].iloc[0]
    there = outcome.verdicts[(outcome.verdicts["departure"] == "fan") & (outcome.verdicts["severity"] == row["worst_severity"])]
    holding = there[there["verdict"] == "holds"]["procedure"].tolist()
    assert row["holding_procedure"] == ("hc3" if "hc3" in holding else "")
    width = outcome.measures[(outcome.measures["measure"] == "width") & (outcome.measures["departure"] == "none")]
    width = width.set_index("procedure")["value"]
    if row["holding_procedure"]:
        assert row["premium"] == pytest.approx(width["hc3"] / width["ols"] - 1.0)


def test_the_record_says_how_it_was_done(outcome, study, make_plan):
    record = outcome.provenance
    assert (record["seed"], record["most"], record["study_digest"]) == (5, 8000, study.digest)
    assert record["plan_digest"] == make_plan().digest
    assert record["exact_cells"] + record["simulated_cells"] == len(outcome.verdicts)
    assert record["exact_cells"] == (outcome.verdicts["method"] == "exact").sum()
    assert record["tolerance"]["coverage_low"] == pytest.approx(0.94)
    assert {"python", "numpy", "scipy"} <= set(record["versions"])
    assert record["seconds"] > 0.0
    assert outcome.facts["n"] == 24
    names = {(axis["departure"], axis["along"], axis["stack"]): axis["name"] for axis in outcome.facts["axes"]}
    assert names == {("fan", "hours", ""): "fan along hours", ("skew", "", ""): "skew"}


def test_the_same_seed_gives_the_same_to_the_last_bit(outcome, study, make_plan):
    same(outcome, conduct(study, make_plan()))


def test_another_seed_gives_other_simulated_numbers_and_the_same_exact_ones(outcome, study, make_plan):
    other = conduct(study, make_plan(seed=6))
    for method, equal in (("exact", True), ("simulated", False)):
        a, b = (o.measures[(o.measures["method"] == method) & (o.measures["departure"] == "skew")] for o in (outcome, other))
        fans = [o.measures[(o.measures["method"] == method) & (o.measures["departure"] == "none")] for o in (outcome, other)]
        if equal:
            np.testing.assert_array_equal(fans[0]["value"], fans[1]["value"])
        else:
            shared = a.merge(b, on=["severity", "procedure", "measure"])
            assert (shared["value_x"] != shared["value_y"]).any()


class InterruptionError(Exception):
    """Stands for a killed process."""


class Breaker:
    """Stops a run after so many tasks."""

    def __init__(self, steps):
        self.left = steps

    def phase(self, name, total):
        pass

    def step(self, count=1):
        self.left -= count
        if self.left < 0:
            raise InterruptionError


@pytest.mark.parametrize("steps", [1, 2, 4])
def test_an_interrupted_run_ends_as_if_it_had_never_stopped(outcome, study, make_plan, tmp_path, steps):
    path = tmp_path / "ledger.sqlite"
    with pytest.raises(InterruptionError):
        conduct(study, make_plan(), Effort(ledger_path=path, progress=Breaker(steps)))
    partial = conduct(study, make_plan(), Effort(ledger_path=path), simulate=False)
    assert len(partial.verdicts) <= len(outcome.verdicts)
    same(outcome, conduct(study, make_plan(), Effort(ledger_path=path)))


def test_a_run_interrupted_while_brackets_are_narrowed_ends_the_same(study, make_plan, tmp_path):
    plan = make_plan([Clusters(severity=(0.1, 0.4))], procedures=("ols",), method="simulated")
    counted = Breaker(10**6)
    whole = conduct(study, plan, Effort(progress=counted))
    path = tmp_path / "ledger.sqlite"
    with pytest.raises(InterruptionError):
        conduct(study, plan, Effort(ledger_path=path, progress=Breaker(10**6 - counted.left - 2)))
    same(whole, conduct(study, plan, Effort(ledger_path=path)))


def test_a_finished_ledger_costs_no_more_replicates(outcome, study, make_plan, tmp_path):
    path = tmp_path / "ledger.sqlite"
    conduct(study, make_plan(), Effort(ledger_path=path))
    same(outcome, conduct(study, make_plan(), Effort(ledger_path=path, progress=Breaker(1))))
    same(outcome, conduct(study, make_plan(), Effort(ledger_path=path), simulate=False))


def test_a_ledger_of_another_seed_is_left_alone(study, make_plan, tmp_path):
    path = tmp_path / "ledger.sqlite"
    conduct(study, make_plan(), Effort(ledger_path=path))
    with pytest.raises(LedgerError, match="another study"):
        conduct(study, make_plan(seed=99), Effort(ledger_path=path))


def test_a_look_without_simulation_knows_what_is_exact(study, outcome, make_plan):
    seen = conduct(study, make_plan(), simulate=False)
    assert set(seen.verdicts["method"]) == {"exact"}
    assert seen.provenance["replicates"] == 0
    for kind, exact in (("fan", True), ("skew", False)):
        one = seen.tipping[(seen.tipping["departure"] == kind) & (seen.tipping["procedure"] == "ols")].iloc[0]
        full = outcome.tipping[(outcome.tipping["departure"] == kind) & (outcome.tipping["procedure"] == "ols")].iloc[0]
        assert one["plausible_high"] == full["plausible_high"]
        assert math.isfinite(one["last_holds"]) is exact
        if exact:
            assert one["tipping"] == pytest.approx(full["tipping"], rel=1e-9, nan_ok=True)
    assert [row.departure for row in seen.ranking.itertuples() if row.procedure == "ols"] == ["fan"]


def test_exact_cells_agree_with_their_simulation(study, make_plan, exact_axes):
    outcome = conduct(study, make_plan(exact_axes), Effort(verify=True))
    record = outcome.provenance["verification"]
    assert record["comparisons"] > 100
    # The largest of so many standard normal errors exceeds this with a chance of 1 %.
    assert record["largest_z"] < record["largest_z_by_chance"] * 1.15
    expected = record["expected_beyond_two_errors"]
    # Measures of one cell go together, so that their number counts for less; as if one in six were independent.
    assert record["beyond_two_errors"] < expected + 4.5 * math.sqrt(6.0 * expected)
    assert set(outcome.verdicts["method"]) == {"exact"}


def test_a_joint_focus_is_answered_only_by_those_who_can(make_study, make_plan):
    study = make_study(joint=True)
    outcome = conduct(study, make_plan([Fan(along="hours", severity=3.0)], procedures=("hc2-bm", "ols")))
    assert [refusal[:2] for refusal in outcome.refusals] == [("hc2-bm", "both")]
    both = outcome.verdicts[outcome.verdicts["focus"] == "both"]
    assert set(both["procedure"]) == {"ols"}
    assert outcome.ranking.groupby("focus")["procedure"].first().to_dict() == {"both": "ols", "hours": "hc2-bm"}


class Drawn:
    """Rows drawn anew in each block: bootstrap of a design, redrawn until it carries the model."""

    fixed = False

    def __init__(self, design):
        self.design = design

    def draw(self, generator):
        while True:
            rows = np.sort(generator.integers(0, self.design.n, self.design.n))
            drawn = dataclasses.replace(self.design.rows(rows), order=None, groups=None)
            if np.ptp(drawn.factors["wood"].codes) > 0:
                return drawn


def test_rows_drawn_anew_are_simulated_throughout(make_study, make_plan):
    plain = make_study(with_response=False)
    study = make_study(with_response=False, rows=Drawn(plain.design))
    outcome = conduct(study, make_plan([Fan(along="hours", severity=4.0)], procedures=("ols",)))
    assert set(outcome.measures["method"]) == {"simulated"}
    assert outcome.tipping["observed"].isna().all()
    baseline = outcome.measures[(outcome.measures["departure"] == "none") & (outcome.measures["measure"] == "coverage")].iloc[0]
    # OLS with normal errors covers at its level whatever the rows.
    assert abs(baseline["value"] - 0.95) < 4.5 * math.sqrt(0.95 * 0.05 / baseline["repetitions"])


def test_everything_simulated_agrees_with_everything_exact(study, make_plan):
    axes = [Clusters(severity=(0.1, 0.4)), Fan(along="hours", severity=(2.0, 4.0))]
    exact, simulated = (conduct(study, make_plan(axes, method=method, most=32_000)) for method in ("auto", "simulated"))
    where = ["departure", "severity", "procedure", "focus", "measure"]
    both = exact.measures.merge(simulated.measures, on=where, suffixes=("", "_simulated"))
    shares = both[both["measure"].isin(["coverage", "miss_below", "miss_above", "power"])]
    assert len(shares) > 40
    error = np.sqrt(shares["value"] * (1 - shares["value"]) / shares["repetitions_simulated"])
    assert (np.abs(shares["value"] - shares["value_simulated"]) < 4.5 * error + 1e-12).all()
    settled = exact.verdicts.merge(simulated.verdicts, on=where[:-1], suffixes=("", "_simulated"))
    settled = settled[settled["verdict_simulated"] != "unsettled"]
    assert len(settled) > 8
    assert (settled["verdict"] == settled["verdict_simulated"]).all()


def test_a_simulated_bracket_holds_the_exact_turn(study, make_plan):
    axes = [Clusters(severity=(0.1, 0.8)), Fan(along="hours", severity=(2.0, 4.0))]
    exact, simulated = (
        conduct(study, make_plan(axes, procedures=("ols",), method=method, most=64_000)) for method in ("auto", "simulated")
    )
    assert len(exact.tipping) == 2
    for a, b in zip(exact.tipping.itertuples(), simulated.tipping.itertuples(), strict=True):
        assert b.last_holds <= a.tipping <= b.first_gives
        assert b.last_holds <= b.tipping <= b.first_gives
        # Three bisections leave an eighth of the gap between two rungs, unless they met a verdict that stays open.
        assert b.first_gives - b.last_holds < 0.6 * (0.7 if a.departure == "clusters" else 1.0)


def test_departures_that_make_no_sense_here_are_told_of(study, make_plan):
    outcome = conduct(study, make_plan([Skew(severity=1.0), Outliers(count=20, severity=3.0)]), simulate=False)
    assert [notice for notice in outcome.notices if "20 of 24 rows" in notice]
    assert set(outcome.tipping["departure"]) == {"skew"}


def test_what_was_capped_is_said(study, make_plan):
    outcome = conduct(study, make_plan([Skew(severity=0.5)], procedures=("ols", "hac"), method="simulated", most=2000))
    open_ones = (outcome.verdicts["verdict"] == "unsettled").sum()
    assert open_ones > 0
    assert any(
        notice.startswith(f"{open_ones} of {len(outcome.verdicts)} verdicts are unsettled") for notice in outcome.notices
    )


def test_what_an_outcome_says_can_be_shown_stored_and_read_again(outcome, study, make_plan, tmp_path):
    """Of a whole run, of a look without simulation, and of one that knows nothing yet."""
    seen = conduct(study, make_plan(), simulate=False)
    ignorant = conduct(study, make_plan(method="simulated"), simulate=False)
    for name, one in (("whole", outcome), ("seen", seen), ("ignorant", ignorant)):
        assert Result.of(one).report(tmp_path / name).is_file()
        read = restore(tmp_path / name)
        for table in TABLES:
            pd.testing.assert_frame_equal(
                getattr(read, table), getattr(one, table), check_exact=True, check_dtype=False, check_column_type=False
            )
        assert screen(read) == screen(one)
    assert "takes simulation" in screen(seen)
    assert "not judged" in screen(ignorant)
