"""Bit identity: workers, interruptions and order of asking leave no trace in the tallies."""

import sqlite3

import distributed
import numpy as np
import pytest

from withstand.departures import Serial, Skew
from withstand.engine.block import BASELINE
from withstand.engine.executors import open_executor
from withstand.engine.ledger import Entry, Ledger
from withstand.engine.runner import Runner
from withstand.engine.tally import FEATURES, Tally
from withstand.errors import LedgerError

CELLS = [(BASELINE, 0), (0, 0), (0, 1)]


def tallies(runner, cells=CELLS):
    return {cell: runner.read(cell) for cell in cells}


def same(first, second):
    return all(
        first[cell].tasks == second[cell].tasks
        and all(np.array_equal(a.products, b.products) for a, b in zip(first[cell].tallies, second[cell].tallies, strict=True))
        for cell in first
    )


@pytest.fixture
def job(study, make_job):
    return make_job(study, worlds=[[(Skew((2.0,)), 2.0)]])


@pytest.fixture
def reference(job):
    with open_executor(1) as executor:
        runner = Runner(job, Ledger(), executor)
        runner.advance(CELLS, 5)
        return tallies(runner)


def test_two_workers_give_the_same_bits(job, reference):
    with open_executor(2) as executor:
        runner = Runner(job, Ledger(), executor, workers=2)
        runner.advance(CELLS, 5)
        assert same(reference, tallies(runner))


@pytest.mark.filterwarnings("ignore::DeprecationWarning")  # of the cluster's own libraries
def test_a_cluster_gives_the_same_bits(job, reference):
    with (
        distributed.LocalCluster(n_workers=1, threads_per_worker=1, processes=False, dashboard_address=None) as cluster,
        open_executor(cluster=cluster.scheduler_address) as executor,
    ):
        runner = Runner(job, Ledger(), executor, workers=2)
        runner.advance(CELLS, 5)
        assert same(reference, tallies(runner))


def test_an_interrupted_run_goes_on_to_the_same_bits(job, reference, tmp_path):
    class StopError(Exception):
        pass

    count = 0

    def stop_after_two(done):
        nonlocal count
        count += done
        if count == 2:
            raise StopError

    path = tmp_path / "ledger.sqlite"
    with open_executor(1) as executor:
        with pytest.raises(StopError):
            Runner(job, Ledger(path), executor).advance(CELLS, 5, stop_after_two)
        runner = Runner(job, Ledger(path), executor)
        assert runner.read((0, 0)).tasks == 2
        assert runner.outstanding(CELLS, 5) == 3
        runner.advance(CELLS, 5)
        assert same(reference, tallies(runner))


def test_cells_asked_for_one_after_the_other(job, reference):
    with open_executor(1) as executor:
        runner = Runner(job, Ledger(), executor)
        for cell in CELLS:
            for tasks in (1, 5):
                runner.advance([cell], tasks)
        assert same(reference, tallies(runner))


def test_an_error_in_a_task_stops_the_run(study, make_job):
    job = make_job(study, worlds=[[(Serial((0.5,)), 0.5)]])  # no order in this study
    with open_executor(1) as executor, pytest.raises(Exception, match="order"):
        Runner(job, Ledger(), executor).advance([(0, 0)], 1)


def test_a_file_that_is_no_ledger(tmp_path):
    path = tmp_path / "ledger.sqlite"
    path.write_bytes(b"not a database, but long enough to look at" * 50)
    with pytest.raises(LedgerError, match="cannot be read") as caught:
        Ledger(path)
    assert str(path) in str(caught.value)
    path.unlink()
    foreign = sqlite3.connect(path)
    foreign.execute("CREATE TABLE guests (name TEXT)")
    foreign.commit()
    foreign.close()
    with pytest.raises(LedgerError, match="not a ledger"):
        Ledger(path)


def test_a_ledger_belongs_to_one_study(tmp_path):
    ledger = Ledger(tmp_path / "ledger.sqlite")
    ledger.claim("first")
    ledger.claim("first")
    with pytest.raises(LedgerError, match="another study"):
        ledger.claim("second")
    ledger.close()


def test_ledger_round_trip():
    pair = np.random.default_rng(3).standard_normal((2 * FEATURES, 10))
    entry = Entry(4, [Tally.of_block(pair, False), None, Tally.of_block(pair[::-1], False)])
    ledger = Ledger()
    ledger.write({("job", "world", "ols"): entry})
    back = ledger.read(("job", "world", "ols"))
    assert back.tasks == 4
    assert back.tallies[1] is None
    np.testing.assert_array_equal(back.tallies[2].pack(), entry.tallies[2].pack())
    assert ledger.read(("job", "world", "hc3")).tasks == 0
    ledger.close()


def test_finished_numbers_are_kept_by_key_and_name(tmp_path):
    path, key, other = tmp_path / "ledger.sqlite", ("job", "world", "ols"), ("job", "none", "ols")
    first = Ledger(path)
    first.write_numbers({(key, "a"): (0.1, np.pi), (key, "b"): (), (other, "a"): [2.0]})
    first.write_numbers({(other, "a"): [3.0]})
    first.close()
    again = Ledger(path)
    assert [again.numbers(key, "a"), again.numbers(key, "b"), again.numbers(other, "a")] == [(0.1, np.pi), (), (3.0,)]
    assert again.numbers(other, "b") is None
    assert again.read(key).tasks == 0
    again.close()
