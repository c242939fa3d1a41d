"""Ledgers that are not ours, not of this study, or damaged."""

import json
import sqlite3
from contextlib import closing

import pytest

from withstand.report.store import FORMAT


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


def test_ledger_damaged_in_the_middle(finished, call):
    """Whatever pages are lost, there is one message, and a fresh start works."""
    ledger = finished / "ledger.sqlite"
    whole = ledger.read_bytes()
    codes = set()
    for start in range(0, len(whole), max(len(whole) // 12, 1)):
        ledger.write_bytes(whole[:start] + bytes(value ^ 0xFF for value in whole[start : start + 2000]) + whole[start + 2000 :])
        code, _, err = call("run", "small.toml", "--out", finished, "--workers", 1, "--quiet")
        codes.add(code)
        assert (code == 0 and not err) or (code == 2 and err.startswith(f"withstand: {ledger}: "))
        for ending in ("-wal", "-shm"):
            ledger.with_name(ledger.name + ending).unlink(missing_ok=True)
    assert 2 in codes
    assert not (finished / "fault.txt").exists()


def test_folder_in_the_place_of_the_ledger(folder, call):
    place = folder / "taken"
    (place / "ledger.sqlite").mkdir(parents=True)
    refused(call, place, ["cannot be read"])
    refused(call, place, ["cannot be removed", "--out"], "--fresh")


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


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("run.json", '{"provenance": 3}'),
        ("run.json", '{"format": FORMAT}'),
        ("run.json", '{"format": FORMAT, "columns": {"measures": 5}}'),
        ("verdicts.csv", '"'),
        ("verdicts.csv", "HEADER\n1,2\n"),
    ],
)
def test_report_of_a_damaged_folder(finished, folder, call, name, text):
    (folder / "small.toml").unlink()
    (finished / "scenario.toml").unlink()  # or the report would be made anew from the ledger
    header = (finished / name).read_text(encoding="utf-8").splitlines()[0]
    (finished / name).write_text(text.replace("FORMAT", json.dumps(FORMAT)).replace("HEADER", header), encoding="utf-8")
    before = contents(finished)
    code, out, err = call("report", finished)
    assert (code, out) == (2, "")
    assert err.startswith(f"withstand: {finished}")
    assert contents(finished) == before
