"""Worlds for a size question about data in hand: each departure as far as the residuals allow it to go."""

from __future__ import annotations

from collections.abc import Sequence

from withstand.departures.world import World
from withstand.errors import ScenarioError
from withstand.lab.grid import Grid
from withstand.lab.plan import Axis, Plan
from withstand.lab.plausibility import feared, residuals_of
from withstand.procedures.base import Procedure
from withstand.study.study import Study


def feared_worlds(study: Study, axes: Sequence[Axis], procedures: Sequence[Procedure], seed: int = 1) -> tuple[World, ...]:
    """The worlds over the plausible range of every axis.

    Parameters
    ----------
    study : Study
        With data and their response, and the focal quantity that is asked about.
    axes : sequence of Axis
        Departures; those that make no sense on the design are left out.
    procedures : sequence of Procedure
        At least one.
    seed : int
        Of the simulated laws of the residual statistics.

    Returns
    -------
    tuple of World
        For `size_study`: the ends of each plausible range, and the rungs of the ladder within it; the whole ladder of a
        departure that no residual statistic answers to.

    Raises
    ------
    ScenarioError
        If there are no residuals.
    """
    if study.response is None:
        raise ScenarioError(
            "a plan has no residuals to say what is plausible",
            where="--plausible",
            remedy="State severities with --departure and --severity, or give a table of a pilot instead.",
        )
    grid = Grid(study, Plan(tuple(axes), tuple(procedures), seed=seed))
    residuals = residuals_of(grid)
    return tuple(axis.world(severity) for axis in grid.possible for severity in feared(axis, residuals.get(axis.identity)))
