"""Progress bars on standard error."""

from __future__ import annotations

import sys
from typing import Any


class Bars:
    """One bar a phase; none where standard error is no terminal.

    Parameters
    ----------
    quiet : bool
        No bars at all.
    """

    def __init__(self, quiet: bool = False) -> None:
        self._shown = not quiet and sys.stderr.isatty()
        self._bar: Any = None

    def phase(self, name: str, total: int) -> None:
        """Begin a phase of `total` steps."""
        self.close()
        if self._shown:
            from tqdm import tqdm

            self._bar = tqdm(total=total, desc=name, file=sys.stderr, leave=False)

    def step(self, count: int = 1) -> None:
        """Advance by so many steps."""
        if self._bar is not None:
            self._bar.update(count)

    def close(self) -> None:
        """Remove the bar."""
        if self._bar is not None:
            self._bar.close()
            self._bar = None
