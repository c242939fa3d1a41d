"""A run that is killed, interrupted or short of room loses nothing that was stored, and goes on to the same numbers."""

import os
import resource
import signal
import sqlite3
import time
from contextlib import closing

import pytest

LONG = """[study]
data = "small.csv"
model = "y ~ x"
focus = ["x"]
effect = { x = 0.5 }

[[departure]]
kind = "skew"
severity = [2]

[procedures]
use = ["ols", "hc3"]

[simulation]
seed = 3
repetitions = 300000
most = 300000
method = "simulated"
"""


@pytest.fixture
def long(folder):
    (folder / "long.toml").write_text(LONG, encoding="utf-8")
    return folder


def tasks_stored(ledger):
    """Tasks merged so far in the cell that has the fewest; 0 before there is a ledger."""
    if not ledger.exists():
        return 0
    with closing(sqlite3.connect(ledger, timeout=30.0)) as base:
        try:
            return base.execute("SELECT coalesce(min(tasks), 0) FROM tallies").fetchone()[0]
        except sqlite3.OperationalError:  # the tables are not made yet
            return 0


def wait_for_tasks(ledger, wanted, process):
    deadline = time.monotonic() + 120.0
    while tasks_stored(ledger) < wanted:
        assert process.poll() is None, process.stderr.read()
        assert time.monotonic() < deadline
        time.sleep(0.02)


@pytest.mark.parametrize("workers", [1, 2])
def test_killed_and_resumed_run_has_the_same_measures_to_the_last_bit(workers, long, spawn, call):
    code, _, err = call("run", "long.toml", "--out", "whole", "--workers", 1, "--quiet")
    assert (code, err) == (0, "")
    process = spawn("run", "long.toml", "--out", "killed", "--workers", workers)
    ledger = long / "killed" / "ledger.sqlite"
    wait_for_tasks(ledger, 10, process)
    os.killpg(process.pid, signal.SIGKILL)
    assert process.wait() == -signal.SIGKILL
    process.communicate()
    assert 10 <= tasks_stored(ledger) < 150
    assert not (long / "killed" / "measures.csv").exists()
    assert call("run", "long.toml", "--out", "killed", "--workers", 1, "--quiet")[0] == 0
    for name in ("measures.csv", "verdicts.csv", "tipping.csv", "ranking.csv"):
        assert (long / "killed" / name).read_bytes() == (long / "whole" / name).read_bytes(), name


@pytest.mark.parametrize("workers", [1, 2])
def test_interrupt_ends_with_130_and_says_how_to_go_on(workers, long, spawn, call):
    process = spawn("run", "long.toml", "--out", "cut", "--workers", workers)
    wait_for_tasks(long / "cut" / "ledger.sqlite", 4, process)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: to the workers too
    out, err = process.communicate(timeout=60)
    assert (process.returncode, out) == (130, "")
    assert err.strip().startswith("withstand: interrupted")
    assert "cut/ledger.sqlite" in err
    assert "same command again" in err
    assert err.strip().count("\n") == 0
    stored = tasks_stored(long / "cut" / "ledger.sqlite")
    assert stored >= 4
    # a report of what there is leaves the ledger as it was, and does not pass for the finished one
    code, out, _ = call("report", "cut")
    assert code == 0
    assert "this run is not finished" in out
    assert (long / "cut" / "report.html").is_file()
    assert tasks_stored(long / "cut" / "ledger.sqlite") == stored
    assert call("run", "long.toml", "--out", "cut", "--workers", 1, "--quiet")[0] == 0
    assert "not finished" not in call("report", "cut")[1]


def test_one_and_two_workers_agree_to_the_last_bit(folder, call):
    for workers in (1, 2):
        assert call("run", "small.toml", "--out", f"w{workers}", "--workers", workers, "--quiet")[0] == 0
    for name in ("measures.csv", "verdicts.csv", "tipping.csv", "ranking.csv"):
        assert (folder / "w1" / name).read_bytes() == (folder / "w2" / name).read_bytes(), name


def limited(size):
    """Limits files to a size, as a full disk or a quota does."""
    return lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))


def test_no_room_for_the_results(folder, spawn, call):
    process = spawn("run", "small.toml", "--out", "full", "--workers", 1, preexec_fn=limited(60_000))
    out, err = process.communicate(timeout=120)
    assert (process.returncode, out) == (2, "")
    assert err.startswith("withstand: full")
    assert "cannot be written" in err
    assert err.count("\n") == 1
    assert not (folder / "full" / "measures.csv").exists()
    assert not list((folder / "full").rglob(".*"))
    # nothing that was stored is lost: with room it goes on to the same numbers
    assert call("run", "small.toml", "--out", "full", "--workers", 1, "--quiet")[0] == 0
    assert call("run", "small.toml", "--out", "whole", "--workers", 1, "--quiet")[0] == 0
    assert (folder / "full" / "measures.csv").read_bytes() == (folder / "whole" / "measures.csv").read_bytes()


def test_no_room_for_the_ledger(folder, spawn):
    process = spawn("run", "small.toml", "--out", "full", "--workers", 1, preexec_fn=limited(9_000))
    out, err = process.communicate(timeout=120)
    assert (process.returncode, out) == (2, "")
    assert "full" in err
    assert "Traceback" not in err
    assert err.count("\n") == 1


def test_folder_that_cannot_be_made(folder, call):
    code, out, err = call("run", "small.toml", "--out", "small.csv/results")
    assert (code, out) == (2, "")
    assert "small.csv/results: the folder cannot be made" in err
    assert "--out" in err
