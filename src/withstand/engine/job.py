"""What the engine is asked to do: a study, the worlds to visit and the procedures to judge there."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

from withstand.departures.world import World
from withstand.procedures.base import Procedure
from withstand.study.study import Study

_BLOCK_DOUBLES = 131_072
"""Largest block n x B: one megabyte, half of a common second-level cache; the other half holds a work array."""

_WIDTHS = (2000, 1000, 500, 200, 100, 50, 20, 10)
"""Block widths B; each divides the replicates of a task, so that round numbers of repetitions are reached exactly."""

_DRAWN_WIDTH = 200
"""Largest block where each has rows of its own: a task then holds 10 designs, whose spread is the Monte Carlo error."""

TASK_REPLICATES = 2000
"""Replicates in a task, the unit of work, storage and loss."""

KERNEL_VERSION = "2"
"""Part of the digest: raised when the same seed would give other numbers."""


def block_width(n: int) -> int:
    """Replicates in a block, from the number of rows alone."""
    return next((width for width in _WIDTHS if n * width <= _BLOCK_DOUBLES), _WIDTHS[-1])


@dataclass(frozen=True, eq=False)
class Job:
    """A study with worlds and procedures.

    Parameters
    ----------
    study : Study
        What the user has.
    worlds : tuple of World
        Without the baseline, which is always visited.
    procedures : tuple of Procedure
        What the user could do.
    seed : int
        Seed of the run.
    """

    study: Study
    worlds: tuple[World, ...]
    procedures: tuple[Procedure, ...]
    seed: int

    @property
    def width(self) -> int:
        """Replicates in a block."""
        width = block_width(self.study.n)
        return width if self.study.rows.fixed else min(width, _DRAWN_WIDTH)

    @property
    def blocks_per_task(self) -> int:
        """Blocks in a task."""
        return TASK_REPLICATES // self.width

    @cached_property
    def digest(self) -> str:
        """Hash of what decides a tally besides its world and procedure: study, level, seed and kernel."""
        text = "|".join([KERNEL_VERSION, self.study.digest, f"{self.study.level:.12g}", str(self.seed), str(self.width)])
        return hashlib.sha256(text.encode()).hexdigest()

    @cached_property
    def refusals(self) -> Mapping[tuple[int, int], str]:
        """Why a procedure has no answer for a focal quantity, by index of procedure and focus."""
        reasons = {
            (i, j): procedure.not_applicable(self.study.design, focus)
            for i, procedure in enumerate(self.procedures)
            for j, focus in enumerate(self.study.focus)
        }
        return {key: reason for key, reason in reasons.items() if reason is not None}


def tasks_for(repetitions: int) -> int:
    """Tasks that hold at least so many replicates."""
    return -(-repetitions // TASK_REPLICATES)
