"""Power beside size, size-adjusted power, and rules where their check passed, as the tables show them."""

import dataclasses

import pandas as pd
import pytest

from withstand.report.comparison import power_table, rules_table
from withstand.report.html import page
from withstand.report.summary import summary
from withstand.report.tables import failures_table, premium_table
from withstand.report.view import View


def added(outcome, *rows):
    """The outcome with copies of rows of the table of measures, changed: (what it is like, what is other)."""
    table = outcome.measures
    copies = []
    for like, other in rows:
        found = table
        for column, value in like.items():
            found = found[found[column] == value]
        copies.append(found.iloc[[0]].assign(**other))
    return dataclasses.replace(outcome, measures=pd.concat([table, *copies], ignore_index=True))


def like(departure, procedure, severity):
    return {"departure": departure, "procedure": procedure, "severity": severity, "focus": "dry_hours", "measure": "power"}


def text(table):
    return {tuple(cell.text for cell in row[: table.heads]): [cell.text for cell in row[table.heads :]] for row in table.rows}


@pytest.fixture
def adjusted(rich):
    exact = {"measure": "size_adjusted_power", "value": 0.4321, "method": "exact"}
    simulated = {"measure": "size_adjusted_power", "value": 0.7, "low": 0.69, "high": 0.71, "method": "simulated"}
    return added(rich, (like("clusters", "ols", 0.4), exact), (like("none", "huber", 0.0), simulated))


def test_power_stands_beside_size_and_is_adjusted_where_the_run_did(adjusted):
    view = View(adjusted)
    table = power_table(view, "dry_hours")
    assert table.columns == ("Departure", "severity", *view.procedures)
    found = text(table)
    # ols under icc 0.4 covers 0.95 - 0.45 * 0.4 = 77 %.
    assert found["clusters by charge", "icc 0.4"][0] == "81.0 at 23.0 → 43.2"
    assert found["clusters by charge", "icc 0.4"][3] == "66.9 at 6.9"
    assert found["nothing wrong", "–"][0] == "81.0 at 5.0"
    assert found["nothing wrong", "–"][4].endswith(" at 5.6 → 70.0 ± 1.0")
    assert len(found) == 1 + len(view.ladders)
    assert power_table(view, "species[oak] - species[ash]") is None


def test_the_premium_table_has_a_column_for_it_where_there_is_one(rich, adjusted):
    assert "power, size-adjusted" not in premium_table(View(rich), "dry_hours").columns
    table = premium_table(View(adjusted), "dry_hours")
    assert table.columns[4:6] == ("power", "power, size-adjusted")
    cells = {row[0].text: row[5].text for row in table.rows}
    assert cells["huber"] == "70.0 ± 1.0"
    assert cells["ols"] == "–"


def test_rules_are_shown_where_their_check_passed(rich):
    assert rules_table(View(rich), "dry_hours") is None
    share = {"low": 0.78, "high": 0.8, "method": "simulated"}
    outcome = added(
        rich,
        (like("clusters", "cr2", 0.4), {"measure": "pass_rate", "value": 0.79} | share),
        (like("clusters", "cr2", 0.4), {"measure": "coverage_given_pass", "value": 0.7912} | share),
        (like("none", "hc3", 0.0), {"measure": "pass_rate", "value": 0.79} | share),
    )
    table = rules_table(View(outcome), "dry_hours")
    told = [tuple(cell.text for cell in row) for row in table.rows]
    assert ("cr2", "clusters by charge", "icc 0.4", "79.0 ± 1.0", "79.1 ± 1.1", "93.1") in told
    assert ("hc3", "nothing wrong", "–", "79.0 ± 1.0", "–", "95.7") in told
    assert len(told) == 2
    for written in (page(outcome), summary(outcome)):
        assert "Where the check passed: dry" in written.replace("dry\\_", "dry_")
        assert "79.1 ± 1.1" in written


def test_failures_come_with_what_is_covered_where_there_was_an_answer(rich):
    place = {"departure": "outliers", "procedure": "huber", "severity": 3.0, "focus": "dry_hours", "measure": "coverage"}
    outcome = added(rich, (place, {"measure": "coverage_given_answer", "value": 0.9444, "low": 0.94, "high": 0.95}))
    rows = {(row[0].text, row[2].text, row[3].text, row[1].text): row[-1].text for row in failures_table(View(outcome)).rows}
    assert rows["huber", "outliers", "1 row by 3 SD", "dry_hours"].startswith("94.4")
    assert rows["huber", "outliers", "1 row by 5 SD", "dry_hours"] == "–"
