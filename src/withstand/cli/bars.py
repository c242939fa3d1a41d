"""Progress bars on standard error."""

from __future__ import annotations

import sys
from typing import Any

from tqdm import tqdm


class Bars:
    """One bar a phase; none where standard error is no terminal.

    Parameters
    ----------
    quiet : bool
        No bars at all.
    """

    def __init__(self, quiet: bool = False) -> None:
        self._disable = True if quiet else None
        self._bar: Any = None

    def phase(self, name: str, total: int) -> None:
        """Begin a phase of `total` steps."""
        self.close()
        self._bar = tqdm(total=total, desc=name, file=sys.stderr, disable=self._disable, leave=False)

    def step(self, count: int = 1) -> None:
        """Advance by so many steps."""
        if self._bar is not None:
            self._bar.update(count)

    def close(self) -> None:
        """Remove the bar."""
        if self._bar is not None:
            self._bar.close()
            self._bar = None
