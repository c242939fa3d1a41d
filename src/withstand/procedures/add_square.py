"""The squared term of a predictor added to the model, as one does on seeing a curved residual plot."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand.departures.mean import Curvature
from withstand.errors import InputError, ScenarioError
from withstand.procedures.base import Fitter, Procedure, make_procedure, register
from withstand.procedures.fit import Fit
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus

_ERRORS = ("ols", "hc3")


@register
@dataclass(frozen=True)
class AddSquare(Procedure):
    """Least squares with the square of a predictor added.

    Parameters
    ----------
    along : str
        The predictor, a numeric column; left out: the first numeric column of the model whose square it lacks. Where the model
        has the square already, the next power is added.
    errors : {"ols", "hc3"}
        Classical or HC3 variance.

    Notes
    -----
    The added column is v^2 less its regression on (1, v), so that the coefficient of v stays the slope of the best straight
    line over the rows: what a curved mean has in common with the model. A mean at a point takes the curve along.
    """

    along: str = ""
    errors: str = "ols"

    name = "add-square"
    family = "added terms"
    title = "least squares with a squared term added"
    formula = "OLS on (X, v^2 - its regression on 1 and v), classical or HC3 variance, t(n - p - 1)"
    source = "common practice"

    def __post_init__(self) -> None:
        if self.errors not in _ERRORS:
            raise ScenarioError(
                f"errors is '{self.errors}'", where="procedures.use: add-square.errors", remedy='Give "ols" or "hc3".'
            )

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        along = self._along(design)
        if along is None:
            return "not applicable, because the model has no numeric predictor whose square could be added"
        try:
            reason = Curvature(along=along).not_applicable(design)
        except ScenarioError as refusal:
            what = refusal.what.replace("'curvature'", f"'{self.name}'", 1)
            raise ScenarioError(what, where=f"procedures.use: {self.name}.along", remedy=refusal.remedy) from refusal
        if reason is not None:
            return reason
        if design.df < 2:
            return "not applicable, because an added term would leave no degree of freedom"
        if focus.point is not None and along != "fitted" and along not in focus.point.columns:
            return f"not applicable, because the point of the focus gives no value for '{along}'"
        try:
            wider, there = self._wider(design, along), self._widened(design, along, focus)
        except InputError as refusal:
            return f"not applicable, because {refusal.what}"
        return make_procedure(self.errors).not_applicable(wider, there)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        along = self._along(design)
        if along is None:
            raise TypeError("there is no column to square; not_applicable says so first")
        wider = self._wider(design, along)
        inner = make_procedure(self.errors).prepare(wider, [self._widened(design, along, focus) for focus in foci], level)

        def fit(sample: Sample) -> list[Fit]:
            return inner(Sample(wider, sample.errors, sample.noise))

        return fit

    def _along(self, design: Design) -> str | None:
        """The column to square."""
        if self.along:
            return self.along
        candidates = [name for name in design.names if name in design.columns]
        return next((name for name in candidates if Curvature(along=name).not_applicable(design) is None), None)

    def _wider(self, design: Design, along: str) -> Design:
        column = Curvature(along=along).shift(design, 1.0)
        return Design(
            X=np.column_stack([design.X, column]),
            names=(*design.names, f"{along} curved"),
            columns=design.columns,
            factors=design.factors,
            fitted=design.fitted,
            order=design.order,
            groups=design.groups,
        )

    def _widened(self, design: Design, along: str, focus: Focus) -> Focus:
        added = np.zeros((focus.k, 1))
        if focus.point is not None:
            added[0, 0] = Curvature(along=along).shift_at(design, focus.point, 1.0)
        return Focus(focus.name, focus.kind, np.hstack([focus.L, added]), focus.null, focus.effect, focus.point)
