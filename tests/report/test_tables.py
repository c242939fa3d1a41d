import dataclasses
import math

import pandas as pd
import pytest

from withstand.report.tables import NO_VALUE, failures_table, premium_table, protection_table, turning_table, verdict_table
from withstand.report.view import Axis, View
from withstand.report.words import SIGNS, percent
from withstand.report.worry import allowed, turning, worries


def rows(table):
    return {tuple(cell.text for cell in row[: table.heads]): row[table.heads :] for row in table.rows}


def test_every_row_has_every_column(rich, planned, bare, hostile, crowded):
    for outcome in (rich, planned, bare, hostile, crowded):
        view = View(outcome)
        for focus in view.foci:
            for make in (verdict_table, turning_table, premium_table, protection_table):
                table = make(view, focus)
                assert {len(row) for row in table.rows} == {len(table.columns)}


def test_verdicts_and_coverage_are_those_of_the_outcome(rich):
    view = View(rich)
    table = verdict_table(view, "dry_hours")
    found = rows(table)
    coverage = rich.measures.query("measure == 'coverage' and focus == 'dry_hours' and departure == 'clusters'")
    verdicts = rich.verdicts.query("focus == 'dry_hours' and departure == 'clusters'")
    for value, verdict in zip(coverage.itertuples(), verdicts.itertuples(), strict=True):
        cell = found["clusters by charge", value.severity_label][view.procedures.index(value.procedure)]
        assert cell.kind == verdict.verdict
        assert cell.text.startswith(f"{SIGNS[verdict.verdict]} {percent(value.value, view.bounds)}")
        assert cell.said == f"{verdict.verdict}, "
    baseline = [cell.text for cell in found["nothing wrong", NO_VALUE]]
    assert baseline == ["95.0", "95.7", "95.1", "95.3", "94.4 ± 0.5"]


def test_another_deciding_measure_is_named(rich):
    verdicts = rich.verdicts.assign(deciding_measure="bias_in_sd", value=0.62)
    view = View(dataclasses.replace(rich, verdicts=verdicts))
    cell = rows(verdict_table(view, "dry_hours"))["clusters by charge", "icc 0.4"][0]
    assert cell.text == f"{SIGNS['gives']} 77.0 bias in sd 0.62"


def test_over_coverage_is_called_wider_than_needed(rich):
    measures = rich.measures.assign(value=rich.measures["value"].where(rich.measures["measure"] != "coverage", 0.99), low=0.98)
    view = View(dataclasses.replace(rich, measures=measures, verdicts=rich.verdicts.assign(verdict="holds")))
    cell = rows(verdict_table(view, "dry_hours"))["clusters by charge", "icc 0.4"][0]
    assert (cell.kind, cell.said) == ("wasteful", "holds, wider than needed, ")


def test_premium_is_against_ols_with_size_beside_power(rich):
    table = premium_table(View(rich), "dry_hours")
    assert table.columns == ("Procedure", "covers", "size", "width ratio", "power", "most failures")
    told = [cell.text for cell in rows(table)["cr2",]]
    assert told == ["95.3", "4.7", "1.21", "66.9", "none"]
    assert [cell.text for cell in rows(table)["huber",]][-1] == "0.37 %"
    assert "power" not in premium_table(View(rich), "species[oak] - species[ash]").columns


def test_protection_is_coverage_gained_over_ols(rich):
    found = rows(protection_table(View(rich), "dry_hours"))
    told = [cell.text for cell in found["clusters by charge", "icc 0.4"]]
    # icc 0.4 at 0.45 coverage a unit: ols 0.95 - 0.18, cr2 0.953 - 0.12 * 0.18
    assert told[0] == "77.0 %"
    assert told[3] == "+16.1"
    assert told[4] == "−0.6"


def test_failures_are_counted_in_the_open(rich, planned, bare):
    table = failures_table(View(rich))
    assert {row[0].text for row in table.rows} == {"huber"}
    assert {row[4].text for row in table.rows} == {"37 of 10,000"}
    assert failures_table(View(bare)) is None


def test_worries_follow_the_ranking(rich):
    view = View(rich)
    for focus in view.foci:
        ranked = rich.ranking.query("focus == @focus and procedure == 'ols'")
        told = worries(view, "ols", focus)
        assert [worry.axis for worry in told] == [Axis(r.departure, r.along, r.stack) for r in ranked.itertuples()]
    first = worries(view, "ols", "dry_hours")[0]
    assert first.turns == "gives from icc 0.05"
    assert first.allowed == "icc 0 to 0.46"
    assert first.covers == "77.0 % at icc 0.4 (exact)"
    assert first.instead == "cr2 holds, 21 % wider when nothing is wrong"


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"tipping": 0.07, "last_holds": 0.0699, "first_gives": 0.07}, "gives from icc 0.07"),
        ({"tipping": 0.07, "last_holds": 0.05, "first_gives": 0.1}, "gives between icc 0.05 and icc 0.1"),
        ({"tipping": float("nan"), "last_holds": 0.4, "first_gives": float("nan")}, "holds to icc 0.4, the most tried"),
        ({"tipping": float("nan"), "last_holds": 0.2, "first_gives": float("nan")}, "holds to icc 0.2, unsettled beyond"),
        ({"tipping": float("nan"), "last_holds": float("nan"), "first_gives": float("nan")}, "unsettled"),
        ({"tipping": float("nan"), "last_holds": float("nan"), "first_gives": 0.05}, "gives from icc 0.05"),
    ],
)
def test_where_it_turns(rich, changes, told):
    view = View(dataclasses.replace(rich, tipping=rich.tipping.assign(**changes)))
    assert turning(view, Axis("clusters", "", ""), "ols", "dry_hours") == told


def test_tipping_of_a_departure_alone_is_not_taken_for_a_stack(rich):
    alone = rich.tipping[rich.tipping["departure"] == "fan"].assign(along="fitted", stack="")
    view = View(dataclasses.replace(rich, tipping=alone))
    assert view.tipping(Axis("fan", "fitted", ""), "ols", "dry_hours") is not None
    assert view.tipping(Axis("fan", "fitted", "skew skewness 1"), "ols", "dry_hours") is None
    own = dataclasses.replace(rich, tipping=alone.assign(stack="skew skewness 1"))
    assert View(own).tipping(Axis("fan", "fitted", "skew skewness 1"), "ols", "dry_hours") is not None


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"tipping": 0.91, "last_holds": 0.91, "first_gives": 0.91}, "gives from SD ratio 0.91 down"),
        ({"tipping": 0.7, "last_holds": 0.8, "first_gives": 0.6}, "gives between SD ratio 0.8 and SD ratio 0.6"),
        ({"tipping": math.nan, "last_holds": 0.6, "first_gives": math.nan}, "holds down to SD ratio 0.6, unsettled beyond"),
        ({"tipping": 1.0, "last_holds": math.nan, "first_gives": 1.0}, "gives even when nothing is wrong"),
    ],
)
def test_where_a_departure_turned_round_turns(rich, changes, told):
    turned = rich.measures.query("departure == 'fan' and along == 'dry_hours' and severity == 2").assign(
        severity=0.5, severity_label="SD ratio 0.5"
    )
    outcome = dataclasses.replace(rich, tipping=rich.tipping.assign(**changes), measures=pd.concat([rich.measures, turned]))
    assert turning(View(outcome), Axis("fan", "dry_hours", ""), "ols", "dry_hours") == told


@pytest.mark.parametrize(
    ("low", "high", "told"),
    [
        (0.6, 2.1, "SD ratio 0.6 to 2.1"),
        (-math.inf, 2.1, "SD ratio 2.1 or less"),
        (0.6, math.inf, "SD ratio 0.6 or more"),
        (-math.inf, math.inf, "any that was tried"),
        (math.nan, math.nan, "none that was tried"),
    ],
)
def test_what_the_residuals_allow(rich, low, high, told):
    view = View(dataclasses.replace(rich, tipping=rich.tipping.assign(plausible_low=low, plausible_high=high)))
    assert allowed(view, Axis("fan", "dry_hours", ""), "ols", "dry_hours") == told


def test_a_study_without_data_says_nothing_of_residuals(planned):
    assert allowed(View(planned), Axis("fan", "dry_hours", ""), "ols", "dry_hours") == ""
