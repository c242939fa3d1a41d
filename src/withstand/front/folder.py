"""The folder of a run: what is kept there before there are results, and how it is forgotten."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from contextlib import closing
from pathlib import Path
from typing import Any

from withstand.engine.ledger import Ledger
from withstand.errors import InputError, LedgerError
from withstand.report.files import write_files
from withstand.report.plain import from_json
from withstand.report.store import SUMMARY
from withstand.scenario.toml_text import toml_document

LEDGER = "ledger.sqlite"
SCENARIO = "scenario.toml"
"""The scenario with everything that was overridden, so that a report can be written again from the folder alone."""


FINISHED = "finished"
"""In the provenance of a run that came to its end, beside the hash of its scenario."""


def prepare(folder: Path, owner: str, record: Mapping[str, Any] | None = None, fresh: bool = False) -> Path:
    """Make the folder and tie its ledger to one study; nothing is changed there if it belongs to another.

    Parameters
    ----------
    folder : Path
        Made where it is missing.
    owner : str
        Digest of the job.
    record : mapping, optional
        The scenario, to be kept beside the ledger.
    fresh : bool
        Whether to forget the ledger of an earlier run.

    Returns
    -------
    Path
        Of the ledger.

    Raises
    ------
    LedgerError
        If the ledger there belongs to another study, or is none.
    InputError
        If the folder cannot be written to.
    """
    ledger = folder / LEDGER
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(
            f"the folder cannot be made ({(error.strerror or str(error)).lower()})",
            where=str(folder),
            remedy="Name another folder with --out.",
        ) from error
    if fresh:
        _forget(ledger)
    with closing(Ledger(ledger)) as opened:
        opened.claim(owner)
    if record is not None:
        write_files(folder, {SCENARIO: toml_document(record).encode()})
    return ledger


def finished(folder: Path) -> bool:
    """Whether the tables in the folder are those of its scenario, and complete.

    A run that was started over with a changed scenario and interrupted leaves the tables of the earlier one.
    """
    try:
        told = dict(from_json((folder / SUMMARY).read_text(encoding="utf-8"))["provenance"])
    except (OSError, ValueError, KeyError, TypeError):
        return False
    try:
        kept = hashlib.sha256((folder / SCENARIO).read_bytes()).hexdigest()
    except FileNotFoundError:
        return True
    return bool(told.get(FINISHED)) and told.get("scenario_sha256") == kept


def hashes(record: Mapping[str, Any]) -> dict[str, str]:
    """SHA-256 of the scenario as it is kept, and of the table it names, if any."""
    found = {"scenario_sha256": hashlib.sha256(toml_document(record).encode()).hexdigest()}
    if "data" in record["study"]:
        with Path(record["study"]["data"]).open("rb") as table:
            found["data_sha256"] = hashlib.file_digest(table, "sha256").hexdigest()
    return found


def _forget(ledger: Path) -> None:
    """Remove a ledger of ours or a damaged one, but never a database that is something else."""
    try:
        Ledger(ledger).close()
    except LedgerError as error:
        if "--fresh" not in error.remedy:
            raise
    for ending in ("", "-wal", "-shm"):
        try:
            ledger.with_name(ledger.name + ending).unlink(missing_ok=True)
        except OSError as error:
            raise LedgerError(
                f"the ledger cannot be removed ({(error.strerror or str(error)).lower()})",
                where=str(ledger),
                remedy="Remove it by hand, or give another folder with --out.",
            ) from error
