"""How the conductor tells whoever watches how far it is."""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """Told what is ahead and what is done."""

    def phase(self, name: str, total: int) -> None:
        """Begin a phase of `total` steps."""

    def step(self, count: int = 1) -> None:
        """Advance by so many steps."""


class Silent:
    """Watches nothing."""

    def phase(self, name: str, total: int) -> None:
        """Ignore it."""

    def step(self, count: int = 1) -> None:
        """Ignore it."""
