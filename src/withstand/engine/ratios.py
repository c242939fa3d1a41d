"""Replicates one by one, where tallies are not enough: how far test statistics go in relation to their critical values."""

from __future__ import annotations

import numpy as np

from withstand.engine.block import Active, Kernel
from withstand.engine.job import Job
from withstand.engine.tally import Questions
from withstand.procedures.fit import Fit
from withstand.study.design import Floats

RatioKey = tuple[int, int, int]
"""Index of a world (or BASELINE), of a procedure and of a focal quantity."""

Ratios = dict[RatioKey, Floats]
"""Ratios (2, R) at a true null hypothesis and with the stated effect, in the order of the replicates."""


class RatioKernel(Kernel):
    """Keeps ratios instead of tallies, on the noise that the tallies come from.

    Parameters
    ----------
    job : Job
        What to do.
    """

    def __init__(self, job: Job) -> None:
        super().__init__(job)
        self._kept: dict[tuple[int, int], Floats] = {}

    def ratios(self, blocks: range, active: Active) -> Ratios:
        """Run a range of blocks.

        Parameters
        ----------
        blocks : range
            Block numbers.
        active : mapping of int to sequence of int
            Procedures to run in each world.

        Returns
        -------
        dict
            For every focal quantity with a stated effect whose test has a ratio. A failure rejects nothing: its ratio is 0.
        """
        found: dict[RatioKey, list[Floats]] = {}
        for block in blocks:
            noise = self._open(block)
            for world, procedures in active.items():
                self._kept = {}
                self._visit(world, procedures, noise)
                for (procedure, focus), pair in self._kept.items():
                    found.setdefault((world, procedure, focus), []).append(pair)
        return {key: np.concatenate(pairs, axis=1) for key, pairs in found.items()}

    def _keep(
        self, procedure: int, focus: int, fit: Fit, questions: Questions, sized: Fit | None = None, powered: Fit | None = None
    ) -> None:
        if questions.null is None or questions.alternative is None:
            return
        null, effect = (sized or fit).ratio(questions.null), (powered or fit).ratio(questions.alternative)
        if null is None or effect is None:
            return
        pair = np.stack([null, effect])
        for one in (fit, sized, powered):
            if one is not None and one.failed is not None:
                pair[:, one.failed] = 0.0
        self._kept[procedure, focus] = pair

    def _keep_failure(self, procedure: int, focus: int) -> None:
        if self._foci[focus].effect is not None:
            self._kept[procedure, focus] = np.zeros((2, self.job.width))
