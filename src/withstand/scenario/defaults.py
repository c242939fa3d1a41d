"""What is tried when a scenario leaves it open: departures that make sense for the columns, procedures that answer them."""

from __future__ import annotations

import re
from collections.abc import Iterator

import numpy as np

from withstand.departures import (
    Bowtie,
    Clusters,
    Contaminated,
    Curvature,
    Departure,
    Fan,
    HeavyTails,
    LevelSpread,
    Outliers,
    PowerSpread,
    Serial,
    Skew,
    WorstFan,
)
from withstand.departures.along import FITTED
from withstand.lab.plan import Axis
from withstand.procedures.base import Procedure, make_procedure
from withstand.scenario.choices import bound
from withstand.study.study import Study

MOST_DEPARTURES = 14
"""More would bury the findings; the rest is named in a notice."""


def default_axes(study: Study) -> tuple[tuple[Axis, ...], tuple[str, ...]]:
    """Every departure that makes sense for the columns at hand, the most telling first, up to a number.

    Parameters
    ----------
    study : Study
        What the user has.

    Returns
    -------
    tuple of Axis, tuple of str
        The departures, and notices of what was left out and why.
    """
    axes: list[Axis] = []
    left_out: list[str] = []
    notices: list[str] = []
    if FITTED in study.design.columns:
        notices.append(f"nothing was tried along your column '{FITTED}', a name that stands for the fitted mean; rename it")
    for departure in _candidates(study):
        reason = departure.not_applicable(study.design)
        if reason is not None:
            # That a column cannot bend says nothing new; that the named order or groups cannot be used does.
            if isinstance(departure, Serial | Clusters):
                notices.append(f"'{departure.name}' was left out: {reason.removeprefix('not applicable, because ')}")
        elif len(axes) < MOST_DEPARTURES:
            axes.append(Axis(departure))
        else:
            left_out.append(departure.name)
    if left_out:
        notices.append(
            f"the {MOST_DEPARTURES} departures that matter most often were tried, and left out: {'; '.join(left_out)}. "
            "Name departures in a scenario file to choose others"
        )
    return tuple(axes), tuple(notices)


def default_procedures(study: Study) -> tuple[Procedure, ...]:
    """Ordinary least squares first, then what answers unequal spread, dependence, known weights and long tails.

    Parameters
    ----------
    study : Study
        What the user has.
    """
    design = study.design
    wanted = ["ols", "hc3", "hc2-bm"]
    if design.weights is not None:
        wanted.append("known-weights")
    if design.groups is not None:
        wanted += ["cr1", "cr2"]
    elif design.order is not None:
        wanted += ["hac", "prais-winsten"]
    wanted.append("huber")
    return tuple(make_procedure(name) for name in wanted)


def _candidates(study: Study) -> Iterator[Departure]:
    """In the order in which they are worth trying."""
    design = study.design
    predictors = _predictors(study)
    if design.groups is not None:
        yield Clusters()
    if design.order is not None:
        yield Serial()
    yield Skew()
    yield HeavyTails()
    yield Outliers()
    if any(focus.scalar for focus in study.focus):
        yield bound(WorstFan(), study)
    for name in predictors[:2]:
        yield Fan(along=name)
        yield Curvature(along=name)
    if design.fitted is not None:
        yield Fan(along=FITTED)
    for name, factor in design.factors.items():
        if _in_model(name, study):
            # The harmful case: a small level that is noisy makes the classical interval too short.
            rarest = int(np.argmin(np.bincount(factor.codes, minlength=len(factor.levels))))
            yield LevelSpread(along=name, noisy=(factor.levels[rarest],))
    for name in predictors[2:]:
        yield Fan(along=name)
        yield Curvature(along=name)
    yield Contaminated()
    if design.fitted is not None:
        yield PowerSpread(along=FITTED)
    for name in predictors:
        yield Bowtie(along=name)


def _in_model(name: str, study: Study) -> bool:
    """Whether a column stands on the right of the formula."""
    return re.search(rf"(?<!\w){re.escape(name)}(?!\w)", study.formula.partition("~")[2]) is not None


def _predictors(study: Study) -> list[str]:
    """Numeric predictors with three or more values, those of the focus first."""
    design = study.design
    names = [
        name
        for name, values in design.columns.items()
        if name != FITTED and _in_model(name, study) and np.unique(values).size > 2
    ]
    focal = " ".join(focus.name for focus in study.focus)
    return sorted(names, key=lambda name: name not in focal)
