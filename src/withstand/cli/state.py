"""What the way out needs to know of the command that was running."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass
class State:
    """Set as a command goes along.

    Parameters
    ----------
    debug : bool
        Whether to show tracebacks.
    out : Path or None
        The folder of the run.
    ledger : Path or None
        Where its tallies are kept.
    """

    debug: bool = False
    out: Path | None = None
    ledger: Path | None = None
