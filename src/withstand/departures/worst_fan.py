"""The spread profile that does the most harm to the claimed variance of one focal quantity."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from withstand.departures.base import register
from withstand.departures.spread import RatioSpread
from withstand.errors import ScenarioError
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind, Point


@register
@dataclass(frozen=True)
class WorstFan(RatioSpread):
    """Of all profiles of error SDs between 1 and a ratio, the one that makes the classical variance most too small.

    Parameters
    ----------
    severity : float or sequence of float
        Ratio of the largest error SD to the smallest, 1 or more.
    against : str
        Name of the focal quantity.
    row : tuple of float, length p, optional
        The focal row of L, in the coordinates of the model matrix; see `for_focus`.
    new : bool
        Whether the focal quantity is a new response, whose own error is part of what has to be claimed.

    Notes
    -----
    With a = row (X'X)^-1 X' and leverages h, the ratio of true to claimed variance is proportional to
    sum a_i^2 s_i^2 / sum (1 - h_i) s_i^2. A ratio of two linear forms in s_i^2 in [1, r^2] is largest where every s_i is at an
    end, s_i = r where a_i^2 / (1 - h_i) lies above some level: n cut points are searched. For a new response the numerator
    has the variance at the new point besides, which is largest at r^2.
    """

    against: str = ""
    row: tuple[float, ...] | None = None
    new: bool = False

    kind = "worst-fan"
    title = "the most harmful two-valued spread profile"
    construction = "s in {1, ratio}, ratio where a_i^2/(1 - h_i) is above the cut that maximises true over claimed variance"
    source = "ratio of linear forms maximised at a cut; derived here"

    @property
    def name(self) -> str:
        """See Departure."""
        return f"worst-fan against {self.against}" if self.against else self.kind

    def for_focus(self, focus: Focus) -> WorstFan:
        """The same departure bound to a focal quantity.

        Raises
        ------
        ScenarioError
            If the focus has several rows.
        """
        if not focus.scalar:
            raise ScenarioError(
                f"'worst-fan' acts against one number, and the focus '{focus.name}' has {focus.k}",
                where="departure.against",
                remedy="Name a coefficient, a contrast, a mean or a new response.",
            )
        return replace(self, against=focus.name, row=tuple(float(x) for x in focus.L[0]), new=focus.kind is FocusKind.NEW)

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        gain, claim = self._forms(design)
        # Proportional forms: no profile moves the ratio.
        if not self.new and np.ptp(gain * claim.sum() - claim * gain.sum()) <= 1e-12 * claim.sum() * gain.sum():
            return (
                "not applicable, because on this design no spread profile makes the claimed variance too small; "
                "name another focal quantity"
            )
        return None

    def profile(self, design: Design, severity: float) -> Floats:
        """See SpreadDeparture."""
        gain, claim = self._forms(design)
        # A row with leverage 1 leaves no trace in the residuals; it is noisy first if the estimate leans on it at all.
        merit = np.divide(gain, claim, out=np.where(gain > 0.0, np.inf, 0.0), where=claim > 0.0)
        order = np.argsort(-merit, kind="stable")
        extra = severity**2 - 1.0
        top = gain.sum() + extra * _sums(gain[order]) + (severity**2 if self.new else 0.0)
        bottom = claim.sum() + extra * _sums(claim[order])
        noisy = int(np.argmax(top / bottom))
        result = np.ones(design.n)
        result[order[:noisy]] = severity
        return result

    def profile_at(self, design: Design, point: Point, severity: float) -> float:
        """See SpreadDeparture. A new response is taken at the noisy level, the worst it can be."""
        return severity

    def _forms(self, design: Design) -> tuple[Floats, Floats]:
        """Coefficients of s_i^2 in the true variance, a_i^2, and in the claimed one, 1 - h_i."""
        if self.row is None:
            raise ScenarioError(
                "'worst-fan' has not been told which focal quantity it acts against",
                where="departure.against",
                remedy='Name one focus: against = "...".',
            )
        if len(self.row) != design.p:
            raise ScenarioError(
                f"'worst-fan' has a focal row of length {len(self.row)} for a model with {design.p} columns",
                where="departure.against",
                remedy="Bind it to a focus of this study.",
            )
        a = design.estimator(np.array([self.row]))[0]
        claim = 1.0 - design.leverage
        claim[design.saturated_rows] = 0.0
        gain = a**2
        # What rounding leaves of a zero weight must not count against a row without a residual.
        gain[gain < 1e-24 * gain.sum()] = 0.0
        return gain, claim


def _sums(values: Floats) -> Floats:
    """Sums of the first 0, 1, ..., n - 1 values."""
    return np.concatenate(([0.0], np.cumsum(values[:-1])))
