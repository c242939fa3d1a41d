"""What is known at a glance: exact answers of the procedure judged most closely, and of the others where that one gives."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from contextlib import closing

from withstand.engine.executors import InProcess
from withstand.engine.ledger import Ledger
from withstand.judgement.tipping import Tipping
from withstand.judgement.verdict import Verdict
from withstand.lab.exactly import exact_answers
from withstand.lab.gather import Bench, Effort, Evidence
from withstand.lab.grid import Cell, Grid
from withstand.lab.plausibility import Residuals
from withstand.lab.threats import Assessment
from withstand.lab.tipping import Line, find_tippings


def glance(
    grid: Grid, residuals: Mapping[str, Residuals], names: Mapping[str, str], leading: Sequence[int | None]
) -> tuple[Evidence, dict[Line, Tipping]]:
    """Exact evidence in seconds.

    Parameters
    ----------
    grid : Grid
        Of the ladders and of the severities to be feared.
    residuals : mapping of str to Residuals
        By identity of the axis.
    names : mapping of str to str
        Axes as they are shown to people, by identity.
    leading : sequence of int or None
        The procedure judged most closely, by focal quantity. It is judged everywhere and gets tipping severities; the others
        are judged where nothing is wrong, and where it does not hold.

    Returns
    -------
    evidence : Evidence
        Cells that were not looked at are left out.
    tippings : dict of Line to Tipping
        Of the leading procedures.
    """
    cells = tuple(grid.cells)
    first = [cell for cell in cells if cell.spot.axis is None or cell.procedure_index == leading[cell.focus_index]]
    evidence = _exactly(grid, first)
    with closing(Ledger(None)) as ledger:
        tippings = find_tippings(evidence, Bench(Effort(simulate=False), ledger, InProcess()), leading)
    trouble = {
        (one.axis.identity, one.threat.worst.severity, one.focus)
        for one in Assessment(evidence, residuals, tippings, names).threats()
        if one.threat.worst.judgement.verdict is not Verdict.HOLDS
    }
    told = {line: tipping for line, tipping in tippings.items() if line.procedure == leading[line.focus]}
    return _exactly(grid, [*first, *(cell for cell in cells if cell not in first and _place(cell) in trouble)], evidence), told


def _place(cell: Cell) -> tuple[str, float, int]:
    return ("" if cell.spot.axis is None else cell.spot.axis.identity), cell.spot.severity, cell.focus_index


def _exactly(grid: Grid, cells: Iterable[Cell], known: Evidence | None = None) -> Evidence:
    """Exact answers of some cells; those known are not worked out again, but for the baselines that shifts are counted from."""
    wanted = list(cells)
    exact = {} if known is None else dict(known.exact)
    if grid.plan.method == "auto":
        exact |= exact_answers(grid, [cell for cell in wanted if cell.spot.axis is None or cell not in exact])
    return Evidence(grid, tuple(wanted), exact, {})
