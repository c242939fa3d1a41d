"""The stored tallies of a run: one SQLite file, one transaction a task, so that a killed run goes on where it was."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from withstand.engine.tally import Tally
from withstand.errors import LedgerError
from withstand.study.design import Floats

_FORMAT = "1"
_SCHEMA = """
CREATE TABLE IF NOT EXISTS about (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE IF NOT EXISTS tallies (
    job TEXT NOT NULL, world TEXT NOT NULL, procedure TEXT NOT NULL,
    tasks INTEGER NOT NULL, applies TEXT NOT NULL, sums BLOB NOT NULL,
    PRIMARY KEY (job, world, procedure)
) STRICT;
CREATE TABLE IF NOT EXISTS numbers (
    job TEXT NOT NULL, world TEXT NOT NULL, procedure TEXT NOT NULL, name TEXT NOT NULL, numbers BLOB NOT NULL,
    PRIMARY KEY (job, world, procedure, name)
) STRICT;
"""

LedgerKey = tuple[str, str, str]
"""Digest of the job, key of the world, identity of the procedure."""


@dataclass(frozen=True, eq=False)
class Entry:
    """The tallies of one world and procedure over tasks 0 .. tasks - 1.

    Parameters
    ----------
    tasks : int
        Tasks merged so far, always from the first without a gap.
    tallies : list of Tally or None
        One a focal quantity; None where the procedure does not apply.
    """

    tasks: int
    tallies: list[Tally | None]


class Ledger:
    """Tallies by job, world and procedure.

    Parameters
    ----------
    path : Path or None
        Where to keep them; None keeps them in memory.

    Raises
    ------
    LedgerError
        If the file is not a ledger of this format, or cannot be opened.
    """

    def __init__(self, path: Path | None = None) -> None:
        self.path = path
        self._where = "ledger" if path is None else str(path)
        try:
            self._db = sqlite3.connect(":memory:" if path is None else path, isolation_level=None)
        except sqlite3.Error as error:
            raise self._unreadable(error) from error
        try:
            with self._readable():
                # Looked at before anything is changed, the journal's mode included: it may be someone else's database.
                self._refuse_foreign()
                self._db.execute("PRAGMA journal_mode=WAL")
                self._db.executescript(_SCHEMA)
                self._db.execute("INSERT OR IGNORE INTO about VALUES ('format', ?)", (_FORMAT,))
        except LedgerError:
            self._db.close()
            raise

    def _refuse_foreign(self) -> None:
        names = {row[0] for row in self._db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
        if not names:
            return
        if not {"about", "tallies"} <= names:
            raise LedgerError(
                "this SQLite file is not a ledger of withstand", where=self._where, remedy="Give another folder with --out."
            )
        found = self._db.execute("SELECT value FROM about WHERE key = 'format'").fetchone()
        if found is not None and found[0] != _FORMAT:
            raise LedgerError(
                f"the ledger has format {found[0]}, this version reads {_FORMAT}",
                where=self._where,
                remedy="Start over with --fresh or give another folder with --out.",
            )

    @contextmanager
    def _readable(self) -> Iterator[None]:
        """Complain about a damaged file wherever that comes to light: bad pages, bad text, tallies of a wrong length."""
        try:
            yield
        except LedgerError:
            raise
        except (sqlite3.Error, ValueError) as error:
            raise self._unreadable(error) from error

    def _unreadable(self, error: Exception) -> LedgerError:
        return LedgerError(
            f"the ledger cannot be read ({error})",
            where=self._where,
            remedy="If it is damaged, start over with --fresh; check that the folder can be written to.",
        )

    def claim(self, owner: str) -> None:
        """Tie the ledger to one study.

        Raises
        ------
        LedgerError
            If it already belongs to another.
        """
        with self._readable():
            self._db.execute("INSERT OR IGNORE INTO about VALUES ('owner', ?)", (owner,))
            found = self._db.execute("SELECT value FROM about WHERE key = 'owner'").fetchone()[0]
        if found != owner:
            raise LedgerError(
                "the ledger belongs to another study, seed or version of the data",
                where=self._where,
                remedy="Give another folder with --out, or start over here with --fresh.",
            )

    def read(self, key: LedgerKey) -> Entry:
        """The entry of a key; zero tasks if there is none."""
        with self._readable():
            row = self._db.execute(
                "SELECT tasks, applies, sums FROM tallies WHERE job = ? AND world = ? AND procedure = ?", key
            ).fetchone()
            if row is None:
                return Entry(0, [])
            tasks, applies, blob = row
            flat: Floats = np.frombuffer(blob, dtype="<f8")
            parts = iter(flat.reshape(applies.count("1"), -1) if "1" in applies else [])
            return Entry(tasks, [Tally.unpack(next(parts)) if flag == "1" else None for flag in applies])

    def write(self, entries: Mapping[LedgerKey, Entry]) -> None:
        """Store entries in one transaction.

        Raises
        ------
        LedgerError
            If the disk is full or the file cannot be written.
        """
        rows: list[tuple[object, ...]] = [
            (
                *key,
                entry.tasks,
                "".join("0" if tally is None else "1" for tally in entry.tallies),
                b"".join(tally.pack().astype("<f8").tobytes() for tally in entry.tallies if tally is not None),
            )
            for key, entry in entries.items()
        ]
        self._store("INSERT OR REPLACE INTO tallies VALUES (?, ?, ?, ?, ?, ?)", rows)

    def numbers(self, key: LedgerKey, name: str) -> tuple[float, ...] | None:
        """Finished numbers that do not add up over tasks; None where there are none yet."""
        with self._readable():
            row = self._db.execute(
                "SELECT numbers FROM numbers WHERE job = ? AND world = ? AND procedure = ? AND name = ?", (*key, name)
            ).fetchone()
            return None if row is None else tuple(np.frombuffer(row[0], dtype="<f8").tolist())

    def write_numbers(self, found: Mapping[tuple[LedgerKey, str], Sequence[float]]) -> None:
        """Store finished numbers, by key and name, in one transaction.

        Raises
        ------
        LedgerError
            If the disk is full or the file cannot be written.
        """
        rows = [(*key, name, np.asarray(values, dtype="<f8").tobytes()) for (key, name), values in found.items()]
        self._store("INSERT OR REPLACE INTO numbers VALUES (?, ?, ?, ?, ?)", rows)

    def _store(self, statement: str, rows: Sequence[tuple[object, ...]]) -> None:
        try:
            self._db.execute("BEGIN IMMEDIATE")
            self._db.executemany(statement, rows)
            self._db.execute("COMMIT")
        except sqlite3.Error as error:
            if self._db.in_transaction:
                self._db.execute("ROLLBACK")
            raise LedgerError(
                f"the ledger cannot be written ({error})",
                where=self._where,
                remedy="Free some disk space or give another folder with --out; what was stored before is intact.",
            ) from error

    def close(self) -> None:
        """Close the file."""
        self._db.close()
