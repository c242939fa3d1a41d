"""Where each procedure's verdict turns along each axis: roots of exact answers, brackets of simulated ones."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, replace

from withstand.errors import NumericalError
from withstand.judgement.tipping import Tipping, bracket, next_severity, tipping_exact
from withstand.judgement.verdict import Judgement
from withstand.lab.gather import Bench, Evidence, gather
from withstand.lab.grid import Cell, Grid
from withstand.lab.judging import judge_exactly

BISECTIONS = 3
"""Severities judged beyond the ladder to narrow a simulated bracket; each halves it."""


@dataclass(frozen=True)
class Line:
    """A procedure and a focal quantity along one side of one axis.

    Parameters
    ----------
    axis : str
        Identity of the axis.
    procedure, focus : int
        Indices in the plan and the study.
    side : int
        1 for severities above neutral, -1 for those below: the departure turned round.
    """

    axis: str
    procedure: int
    focus: int
    side: int


class Lines:
    """Judged severities by line, from the evidence on a grid.

    Parameters
    ----------
    evidence : Evidence
        Of the ladders and of the severities to be feared.
    """

    def __init__(self, evidence: Evidence) -> None:
        self.evidence = evidence
        self.axes = {axis.identity: axis for axis in evidence.grid.possible}
        self.cells: dict[Line, dict[float, Cell]] = {}
        self.judged: dict[Line, dict[float, Judgement]] = {}
        self.neutral: dict[tuple[str, int, int], Judgement] = {}
        verdicts = {cell: verdict for cell in evidence.cells if (verdict := evidence.verdict(cell)) is not None}
        for cell, verdict in verdicts.items():
            axis = cell.spot.axis
            if axis is None or cell.spot.severity == axis.departure.neutral:
                self.neutral["" if axis is None else axis.identity, cell.procedure_index, cell.focus_index] = verdict
        for cell in evidence.cells:
            axis = cell.spot.axis
            if axis is not None and cell.spot.severity != axis.departure.neutral:
                side = 1 if cell.spot.severity > axis.departure.neutral else -1
                line = Line(axis.identity, cell.procedure_index, cell.focus_index, side)
                self.cells.setdefault(line, {})[cell.spot.severity] = cell
                if cell in verdicts:
                    self.add(line, cell.spot.severity, verdicts[cell])

    def add(self, line: Line, severity: float, judgement: Judgement) -> None:
        """Note a verdict."""
        if line not in self.judged:
            axis = self.axes[line.axis]
            # Without companions the departure at neutral is the baseline; with them, they still act.
            base = self.neutral.get((axis.identity if axis.companions else "", line.procedure, line.focus))
            self.judged[line] = {} if base is None else {axis.departure.neutral: base}
        self.judged[line][severity] = judgement

    def exact(self, line: Line) -> bool:
        """Whether every verdict on the line is exact."""
        known = self.judged.get(line, {})
        return len(known) == len(self.cells[line]) + 1 and all(judgement.exact for judgement in known.values())


def find_tippings(evidence: Evidence, bench: Bench, leading: Sequence[int | None]) -> dict[Line, Tipping]:
    """The tipping severity of every line that has a verdict.

    Parameters
    ----------
    evidence : Evidence
        Of the ladders and of the severities to be feared.
    bench : Bench
        Where simulated brackets are narrowed.
    leading : sequence of int or None
        The procedure judged most closely, by focal quantity: its simulated brackets are narrowed. The others keep the rungs.
    """
    lines = Lines(evidence)
    found: dict[Line, Tipping] = {}
    for line in [line for line in lines.judged if lines.exact(line)]:
        # Where the accuracy is out of reach between two rungs, the line is treated as a simulated one.
        with suppress(NumericalError):
            found[line] = _root(lines, line)
    simulated = [line for line in lines.judged if line not in found]
    _narrow(lines, bench, [line for line in simulated if leading[line.focus] == line.procedure])
    for line in simulated:
        found[line] = replace(bracket(lines.judged[line], lines.axes[line.axis].departure.neutral), exact=False)
    return found


def _root(lines: Lines, line: Line) -> Tipping:
    """The tipping severity of an exact line."""
    grid, axis, judged = lines.evidence.grid, lines.axes[line.axis], lines.judged[line]
    pattern = next(iter(lines.cells[line].values()))

    def margin(severity: float) -> float:
        if severity not in judged:
            judgement = judge_exactly(grid, pattern, axis.world(severity))
            if judgement is None:
                raise ValueError(f"no exact answer for {pattern.procedure.identity} under {axis.identity} at {severity:g}")
            judged[severity] = judgement
        return judged[severity].margin

    return tipping_exact(margin, list(judged), axis.departure.neutral)


def _narrow(lines: Lines, bench: Bench, wanted: Sequence[Line]) -> None:
    """Judge severities within the brackets, all lines together so that worlds share their noise, one bisection a round."""
    grid = lines.evidence.grid
    ladders = {line: tuple(lines.cells[line]) for line in wanted}
    for _ in range(BISECTIONS):
        asked: dict[Line, float] = {}
        for line in wanted:
            neutral = lines.axes[line.axis].departure.neutral
            severity = next_severity(lines.judged[line], neutral, BISECTIONS, ladders[line])
            if severity is not None:
                asked[line] = severity
        for procedure in sorted({line.procedure for line in asked}):
            _judge(lines, bench, grid, {line: s for line, s in asked.items() if line.procedure == procedure}, procedure)


def _judge(lines: Lines, bench: Bench, grid: Grid, asked: Mapping[Line, float], procedure: int) -> None:
    """Gather verdicts of one procedure at the severities asked for, as far as the bench may simulate."""
    points = list(dict.fromkeys((line.axis, severity) for line, severity in asked.items()))
    there = grid.at([(lines.axes[axis], severity) for axis, severity in points], [grid.plan.procedures[procedure]])
    evidence = gather(there, bench)
    for cell in evidence.cells:
        if cell.spot.axis is not None and (judgement := evidence.verdict(cell)) is not None:
            for line, severity in asked.items():
                place = (line.axis, severity, line.focus)
                if place == (cell.spot.axis.identity, cell.spot.severity, cell.focus_index):
                    lines.add(line, severity, judgement)
