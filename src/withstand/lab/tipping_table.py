"""The table of tipping severities beside what the residuals allow and would show."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import pandas as pd

from withstand.judgement.tipping import Tipping
from withstand.lab.grid import Grid
from withstand.lab.outcome import TIPPING_COLUMNS
from withstand.lab.plan import Axis
from withstand.lab.plausibility import Residuals
from withstand.lab.threats import Threatened
from withstand.lab.tipping import Line


def tipping_frame(
    grid: Grid,
    residuals: Mapping[str, Residuals],
    tippings: Mapping[Line, Tipping],
    threats: Sequence[Threatened],
    leading: Sequence[int | None],
) -> pd.DataFrame:
    """One row an axis, procedure and focal quantity; a second one where a procedure also gives with the departure turned round.

    Parameters
    ----------
    grid : Grid
        The plan on its study.
    residuals : mapping of str to Residuals
        By identity of the axis.
    tippings : mapping of Line to Tipping
        Where verdicts turn.
    threats : sequence of Threatened
        The side on which the worst severity lies comes first.
    leading : sequence of int or None
        The procedure judged most closely, by focal quantity. It has a row even where nothing has been judged.

    Notes
    -----
    An end of the plausible range is infinite where the residuals cannot tell it from anything beyond. Both ends are missing
    beside an observed statistic where no severity is compatible with the residuals.
    """
    sides = {(one.axis.identity, one.procedure, one.focus): one.side for one in threats}
    rows = []
    for axis in grid.possible:
        for i in range(len(grid.plan.procedures)):
            for j in range(len(grid.study.focus)):
                if (i, j) not in grid.job.refusals:
                    first = sides.get((axis.identity, i, j), 1)
                    found = _told(axis, tippings, i, j, first)
                    rows += [_row(grid, axis, residuals.get(axis.identity), tipping, i, j) for tipping in found]
                    if not found and leading[j] == i:
                        rows.append(_row(grid, axis, residuals.get(axis.identity), None, i, j))
    return pd.DataFrame(rows, columns=list(TIPPING_COLUMNS))


def _told(axis: Axis, tippings: Mapping[Line, Tipping], procedure: int, focus: int, first: int) -> list[Tipping]:
    """The tipping severities to tell, the side of the worst severity first."""
    found = {side: tippings.get(Line(axis.identity, procedure, focus, side)) for side in (first, -first)}
    own = {1 if severity > axis.departure.neutral else -1 for severity in axis.departure.ladder}
    return [tipping for side, tipping in found.items() if tipping is not None and (side in own or not tipping.never)]


def _row(
    grid: Grid, axis: Axis, residuals: Residuals | None, tipping: Tipping | None, procedure: int, focus: int
) -> dict[str, object]:
    plausible = None if residuals is None else residuals.plausible
    low, high = (math.nan, math.nan) if plausible is None else (plausible.low, plausible.high)
    if plausible is not None and not plausible.empty:
        low, high = -math.inf if plausible.open_below else low, math.inf if plausible.open_above else high
    point = None if tipping is None else tipping.point
    seen = None if residuals is None or point is None or tipping is None or tipping.always else residuals.seen_at(point)
    return {
        "departure": axis.departure.kind,
        "along": grid.along(axis),
        "stack": axis.stack,
        "procedure": grid.plan.procedures[procedure].identity,
        "focus": grid.study.focus[focus].name,
        "tipping": _number(point),
        "last_holds": _number(None if tipping is None else tipping.last_holds),
        "first_gives": _number(None if tipping is None else tipping.first_gives),
        "plausible_low": low,
        "plausible_high": high,
        "observed": math.nan if plausible is None else plausible.observed,
        "detectability_at_tipping": math.nan if seen is None else seen.power,
    }


def _number(value: float | None) -> float:
    return math.nan if value is None else value
