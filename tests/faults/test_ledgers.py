"""Ledgers that are not ours, not of this study, or damaged."""

import sqlite3
from contextlib import closing

import pytest


@pytest.fixture
def finished(folder, call):
    assert call("run", "small.toml", "--out", "done", "--workers", 1, "--quiet")[0] == 0
    return folder / "done"


def contents(place):
    return {path.name: path.read_bytes() for path in place.iterdir() if path.is_file()}


def refused(call, place, words, *options):
    before = contents(place)
    code, out, err = call("run", "small.toml", "--out", place, "--workers", 1, *options)
    assert (code, out) == (2, "")
    assert err.startswith(f"withstand: {place}/ledger.sqlite: ")
    for word in words:
        assert word in err
    assert contents(place) == before


def test_ledger_of_another_study(finished, folder, call):
    table = folder / "small.csv"
    table.write_text(table.read_text(encoding="utf-8").replace("12.9", "13.9"), encoding="utf-8")
    refused(call, finished, ["another study", "--out", "--fresh"])
    code, _, err = call("run", "small.toml", "--out", finished, "--workers", 1, "--fresh", "--quiet")
    assert (code, err) == (0, "")


def test_ledger_of_another_seed(finished, call):
    refused(call, finished, ["another study, seed"], "--seed", "99")


def test_database_that_is_something_else_is_kept_even_with_fresh(folder, call):
    place = folder / "other"
    place.mkdir()
    with closing(sqlite3.connect(place / "ledger.sqlite")) as base, base:
        base.execute("CREATE TABLE accounts (amount REAL)")
        base.execute("INSERT INTO accounts VALUES (12.5)")
    refused(call, place, ["not a ledger of withstand", "--out"])
    refused(call, place, ["not a ledger of withstand", "--out"], "--fresh")
    with closing(sqlite3.connect(place / "ledger.sqlite")) as base:
        assert base.execute("SELECT amount FROM accounts").fetchall() == [(12.5,)]


def test_damaged_ledger(folder, call):
    place = folder / "damaged"
    place.mkdir()
    (place / "ledger.sqlite").write_bytes(b"this is no database at all, only text that goes on for a while" * 20)
    refused(call, place, ["cannot be read", "--fresh"])
    assert call("run", "small.toml", "--out", place, "--workers", 1, "--fresh", "--quiet")[0] == 0
    assert (place / "measures.csv").is_file()


def test_ledger_of_another_format(finished, call):
    with closing(sqlite3.connect(finished / "ledger.sqlite")) as base, base:
        base.execute("UPDATE about SET value = '999' WHERE key = 'format'")
    refused(call, finished, ["999", "--fresh"])


def test_fresh_run_gives_the_same_numbers(finished, call):
    before = contents(finished)
    assert call("run", "small.toml", "--out", finished, "--workers", 1, "--fresh", "--quiet")[0] == 0
    assert contents(finished)["measures.csv"] == before["measures.csv"]


def test_report_of_a_changed_run_is_refused(finished, call):
    (finished / "measures.csv").write_text("n\n1\n", encoding="utf-8")
    before = contents(finished)
    code, _, err = call("report", finished)
    assert code == 2
    assert "measures.csv" in err
    assert contents(finished) == before
