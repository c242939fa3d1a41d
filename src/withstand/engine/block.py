"""The kernel: draw a block's noise once, let every world turn it into responses, let every procedure fit them, tally."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from withstand.departures.world import Disturbance, World
from withstand.engine.job import Job
from withstand.engine.noise import BlockNoise, design_generator
from withstand.engine.tally import FEATURES, Questions, Tally, record, record_failure
from withstand.procedures.base import Answer, Fitter, Procedure
from withstand.procedures.fit import Fit
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

BASELINE = -1
"""Index of the baseline among the worlds of a job."""

CellKey = tuple[int, int]
"""Index of a world (or BASELINE) and of a procedure."""

Active = Mapping[int, Sequence[int]]
"""Procedures to judge, by world."""


@dataclass(frozen=True, eq=False)
class Prepared:
    """A procedure made ready for one design.

    Parameters
    ----------
    fitter : callable or None
        None when it has no answer for any focal quantity here.
    foci : tuple of int
        Indices of the focal quantities it answers for here.
    """

    procedure: Procedure
    fitter: Fitter | None
    foci: tuple[int, ...]


class Kernel:
    """Runs blocks of a job. Holds the buffers and, with fixed rows, everything that depends on the design alone.

    Parameters
    ----------
    job : Job
        What to do.
    """

    def __init__(self, job: Job) -> None:
        self.job = job
        self._foci = job.study.focus
        self._fresh = not job.study.rows.fixed
        self._buffers: dict[str, Floats] = {}
        self._noise_buffers: dict[str, Floats] = {}
        self._pairs: dict[tuple[int, int], Floats] = {}
        self._disturbances: dict[int, Disturbance] = {}
        self._prepared: dict[int, Prepared] = {}
        self._design: Design | None = None

    def run(self, blocks: range, active: Active) -> dict[CellKey, list[Tally | None]]:
        """Run a range of blocks.

        Parameters
        ----------
        blocks : range
            Block numbers, merged in this order.
        active : mapping of int to sequence of int
            Procedures to judge in each world; the baseline is visited for every one of them, and tallied where listed.

        Returns
        -------
        dict
            For each world and procedure a list with one tally a focal quantity; None where the procedure does not apply.
        """
        totals: dict[CellKey, list[Tally | None]] = {}
        for block in blocks:
            for key, tallies in self._block(block, active).items():
                before = totals.get(key)
                totals[key] = (
                    tallies
                    if before is None
                    else [None if a is None or b is None else a + b for a, b in zip(before, tallies, strict=True)]
                )
        return totals

    def _block(self, block: int, active: Active) -> dict[CellKey, list[Tally | None]]:
        noise = self._open(block)
        wanted = sorted({procedure for procedures in active.values() for procedure in procedures})
        self._visit(BASELINE, wanted, noise)
        if active.keys() != {BASELINE}:
            for procedure in wanted:
                for focus in range(len(self._foci)):
                    pair = self._pair(procedure, focus)
                    pair[FEATURES:] = pair[:FEATURES]
        results = {(BASELINE, procedure): self._tallies(procedure, baseline=True) for procedure in active.get(BASELINE, ())}
        for world, procedures in active.items():
            if world != BASELINE:
                self._visit(world, procedures, noise)
                results |= {(world, procedure): self._tallies(procedure) for procedure in procedures}
        return results

    def _open(self, block: int) -> BlockNoise:
        """The noise of a block; its design becomes the current one."""
        rows = self.job.study.rows
        self._use(rows.draw(design_generator(self.job.seed, block)) if self._fresh else self.job.study.design)
        return BlockNoise(self.job.seed, block, self.job.width, self._noise_buffers)

    def _use(self, design: Design) -> None:
        if design is not self._design:
            self._design = design
            self._disturbances.clear()
            self._prepared.clear()

    @property
    def design(self) -> Design:
        """The design of the current block."""
        if self._design is None:
            raise TypeError("no block has been started")
        return self._design

    def _pair(self, procedure: int, focus: int) -> Floats:
        key = (procedure, focus)
        if key not in self._pairs:
            self._pairs[key] = np.zeros((2 * FEATURES, self.job.width))
        return self._pairs[key]

    def _disturbance(self, world: int) -> Disturbance:
        if world not in self._disturbances:
            stack = World() if world == BASELINE else self.job.worlds[world]
            self._disturbances[world] = stack.on(self.design)
        return self._disturbances[world]

    def _ready(self, index: int) -> Prepared:
        if index not in self._prepared:
            procedure = self.job.procedures[index]
            answered = tuple(j for j, focus in enumerate(self._foci) if procedure.not_applicable(self.design, focus) is None)
            foci = [self._foci[j] for j in answered]
            fitter = procedure.prepare(self.design, foci, self.job.study.level) if answered else None
            self._prepared[index] = Prepared(procedure, fitter, answered)
        return self._prepared[index]

    def _tallies(self, procedure: int, *, baseline: bool = False) -> list[Tally | None]:
        return [
            None
            if (procedure, focus) in self.job.refusals
            else Tally.of_block(self._pair(procedure, focus), self._fresh, baseline=baseline)
            for focus in range(len(self._foci))
        ]

    def _visit(self, world: int, procedures: Sequence[int], noise: BlockNoise) -> None:
        disturbance = self._disturbance(world)
        buffer = self._buffers.get("errors")
        shape = (self.design.n, self.job.width)
        if buffer is None or buffer.shape != shape:
            buffer = self._buffers["errors"] = np.empty(shape)
        errors = disturbance.draw(noise, buffer)
        sample = Sample(self.design, errors, noise, buffers=self._buffers)
        truths = [self._truth(focus, disturbance, noise) for focus in self._foci]
        for index in procedures:
            ready = self._ready(index)
            if ready.fitter is None:
                fits: list[Fit] = []
            elif ready.procedure.equivariant:
                fits = ready.fitter(sample)
                for j, fit in zip(ready.foci, fits, strict=True):
                    self._keep(index, j, fit, self._questions(j, truths[j], disturbance))
            else:
                self._visit_separately(ready, index, sample, truths, disturbance)
            for j in range(len(self._foci)):
                if j not in ready.foci and (index, j) not in self.job.refusals:
                    self._keep_failure(index, j)

    def _keep(
        self, procedure: int, focus: int, fit: Fit, questions: Questions, sized: Fit | None = None, powered: Fit | None = None
    ) -> None:
        """Keep what is asked of the fits of one procedure and focal quantity in the current world."""
        record(self._pair(procedure, focus)[:FEATURES], fit, questions, sized=sized, powered=powered)

    def _keep_failure(self, procedure: int, focus: int) -> None:
        """Keep that the procedure had no answer in the whole block."""
        record_failure(self._pair(procedure, focus)[:FEATURES])

    def _truth(self, focus: Focus, disturbance: Disturbance, noise: BlockNoise) -> Floats:
        truth = disturbance.target_shift(focus)
        if focus.kind is FocusKind.NEW and focus.point is not None:
            return truth[:, None] + disturbance.new_errors(focus.point, noise)
        return truth

    def _questions(self, j: int, truth: Floats, disturbance: Disturbance) -> Questions:
        focus = self._foci[j]
        if focus.kind is FocusKind.NEW:
            return Questions(truth, None, None)
        alternative = None if focus.effect is None else truth - focus.effect / self.job.study.error_sd
        return Questions(truth, truth, alternative)

    def _visit_separately(
        self, ready: Prepared, index: int, sample: Sample, truths: list[Floats], disturbance: Disturbance
    ) -> None:
        """Fit a procedure that is not equivariant.

        At the reference coefficients for coverage, and for each focal quantity at the nearest coefficients at which it
        equals its null value (size) and differs from it by the effect (power).
        """
        study = self.job.study
        if ready.fitter is None:
            raise TypeError("a procedure that answers nothing cannot be fitted")
        reference = ready.fitter(self._at(sample, study.coefficients))
        for position, j in enumerate(ready.foci):
            focus = self._foci[j]
            truth = (focus.L @ study.coefficients).reshape(truths[j].shape[0], *([1] * (truths[j].ndim - 1)))
            truth = truth + study.error_sd * truths[j]
            sized = powered = None
            null = alternative = None
            if focus.kind is not FocusKind.NEW and Answer.TEST in ready.procedure.answers(focus):
                shift = study.error_sd * disturbance.target_shift(focus)
                null = alternative = focus.null
                sized = ready.fitter(self._at(sample, self._moved(focus, focus.null - shift)))[position]
                if focus.effect is not None:
                    moved = self._moved(focus, focus.null - shift + focus.effect)
                    powered = ready.fitter(self._at(sample, moved))[position]
                else:
                    alternative = None
            questions = Questions(truth, null, alternative, unit=study.error_sd)
            self._keep(index, j, reference[position], questions, sized, powered)

    def _at(self, sample: Sample, coefficients: Floats) -> Sample:
        # Without shared buffers: the fits of several coefficient vectors are alive together, and their tests look back.
        return Sample(sample.design, sample.errors, sample.noise, coefficients=coefficients, error_sd=self.job.study.error_sd)

    def _moved(self, focus: Focus, value: Floats) -> Floats:
        """The coefficients nearest to the reference, in the metric of X'X, at which the focal quantity has a value."""
        study = self.job.study
        basis = self.design.basis_rows(focus.L)
        step = np.linalg.solve(basis @ basis.T, focus.L @ study.coefficients - value)
        return np.asarray(study.coefficients - np.linalg.solve(self.design.R, basis.T @ step))
