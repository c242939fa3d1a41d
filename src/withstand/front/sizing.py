"""How many rows: a size question from what was asked."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import pandas as pd

from withstand.departures.base import Departure
from withstand.departures.world import World
from withstand.judgement.tolerance import Tolerance
from withstand.lab.budget import what_rows_buy
from withstand.lab.plan import Axis
from withstand.lab.progress import Progress
from withstand.lab.size_answer import SizeAnswer
from withstand.lab.size_feared import feared_worlds
from withstand.lab.size_plan import Effort, Targets, chosen_focus
from withstand.lab.size_ranges import CornerAnswer, size_over_ranges
from withstand.lab.sizing import size_study
from withstand.procedures.base import Procedure
from withstand.scenario.choices import MOST, chosen_axes, chosen_procedures
from withstand.scenario.defaults import default_axes
from withstand.study.study import Study

Departures = Departure | str | Sequence[Departure | str | Sequence[Departure]]


def size(
    study: Study,
    departure: Departures = (),
    procedure: Procedure | str | Sequence[Procedure | str] = "ols",
    *,
    power: float | None = None,
    half_width: float | None = None,
    holds: bool = True,
    focus: str | None = None,
    effect: float | None = None,
    tolerance: Tolerance | None = None,
    growth: str | None = None,
    seed: int = 1,
    repetitions: int = 10_000,
    most: int = MOST,
    largest: int = 20_000,
    method: str = "auto",
    workers: int = 1,
    plausible: bool = False,
    progress: Progress | None = None,
) -> SizeAnswer:
    """Find the smallest number of rows at which everything asked for is met.

    Parameters
    ----------
    study : Study
        Data or plan.
    departure : Departure, str or sequence, optional
        What may be wrong: one departure, or several as in `run`. The targets must be met at every severity of each. Left out:
        nothing is wrong.
    procedure : Procedure, str or sequence
        One, or several to find the one that needs the fewest rows.
    power : float, optional
        Power at the smallest effect that matters, at least.
    half_width : float, optional
        Mean half width of the interval, at most, in the unit of the focal quantity.
    holds : bool
        Whether coverage, size and bias must be within tolerance.
    focus : str, optional
        Focal quantity by name; the first if left out.
    effect : float, optional
        The smallest effect that matters, in place of the study's.
    tolerance : Tolerance, optional
        What the user can live with.
    growth : {"stack", "resample", "extend"}, optional
        How the rows of data multiply; chosen to suit the study if left out.
    seed, repetitions, most : int
        As in `run`, at each number of rows.
    largest : int
        The largest number of rows tried.
    method : {"auto", "simulated"}
        Whether cells that have exact answers get them.
    workers : int
        Worker processes.
    plausible : bool
        Whether each departure is taken over the severities that the residuals allow, rather than over its ladder; with no
        departure named, every one that makes sense for the columns at hand.
    progress : Progress, optional
        Who is told how far it is.

    Returns
    -------
    SizeAnswer
        One size a procedure with its interval, everything that was looked at, and the answer in sentences.

    Raises
    ------
    InputError
        If something asked for cannot be answered; the message says how to mend it.
    """
    axes = several_axes(departure, study)
    return find_size(
        study,
        default_axes(study)[0] if plausible and not axes else axes,
        several_procedures(procedure, study),
        Targets(holds, power, half_width),
        Effort(seed, repetitions, most, largest, workers=workers, method=method),
        tolerance=tolerance,
        focus=focus,
        effect=effect,
        growth=growth,
        plausible=plausible,
        progress=progress,
    )


def find_size(
    study: Study,
    axes: Sequence[Axis],
    procedures: Sequence[Procedure],
    targets: Targets,
    effort: Effort,
    *,
    tolerance: Tolerance | None = None,
    focus: str | None = None,
    effect: float | None = None,
    growth: str | None = None,
    plausible: bool = False,
    progress: Progress | None = None,
) -> SizeAnswer:
    """The smallest number of rows in every world of the axes; see `size`, `size_study`."""
    return size_study(
        study,
        procedures,
        _worlds(study, axes, procedures, effort, focus, plausible),
        targets=targets,
        tolerance=tolerance,
        focus=focus,
        effect=effect,
        rule=growth,
        effort=effort,
        progress=progress,
    )


def size_at_corners(
    study: Study,
    axes: Sequence[Axis],
    procedures: Sequence[Procedure],
    targets: Targets,
    effort: Effort,
    ranges: Mapping[str, Sequence[float]],
    *,
    tolerance: Tolerance | None = None,
    focus: str | None = None,
    effect: float | None = None,
    growth: str | None = None,
    plausible: bool = False,
    progress: Progress | None = None,
) -> CornerAnswer:
    """The number of rows at every corner of the ranges of uncertain inputs; see `size_over_ranges`."""
    return size_over_ranges(
        study,
        procedures,
        _worlds(study, axes, procedures, effort, focus, plausible),
        ranges,
        effort=effort,
        targets=targets,
        tolerance=tolerance,
        focus=focus,
        effect=effect,
        rule=growth,
        progress=progress,
    )


def rows_buy(
    study: Study,
    axes: Sequence[Axis],
    procedures: Sequence[Procedure],
    effort: Effort,
    rows: Sequence[int],
    *,
    focus: str | None = None,
    effect: float | None = None,
    growth: str | None = None,
    plausible: bool = False,
) -> pd.DataFrame:
    """What given numbers of rows are good for; see `what_rows_buy`."""
    worlds = _worlds(study, axes, procedures, effort, focus, plausible)
    return what_rows_buy(study, procedures, rows, worlds, focus=focus, effect=effect, rule=growth, effort=effort)


def worlds_of(axes: Sequence[Axis]) -> tuple[World, ...]:
    """Every axis at every severity of its ladder."""
    return tuple(axis.world(severity) for axis in axes for severity in axis.departure.ladder)


def _worlds(
    study: Study, axes: Sequence[Axis], procedures: Sequence[Procedure], effort: Effort, focus: str | None, plausible: bool
) -> tuple[World, ...]:
    if not plausible:
        return worlds_of(axes)
    return feared_worlds(replace(study, focus=(chosen_focus(study, focus),)), axes, procedures, effort.seed)


def several_axes(departure: Departures, study: Study) -> tuple[Axis, ...]:
    """Axes from one departure or several."""
    return chosen_axes([departure] if isinstance(departure, Departure | str) else departure, study)


def several_procedures(procedure: Procedure | str | Sequence[Procedure | str], study: Study) -> tuple[Procedure, ...]:
    """Procedures from one or several."""
    return chosen_procedures([procedure] if isinstance(procedure, Procedure | str) else procedure, study)
