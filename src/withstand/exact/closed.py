"""The ideal model's own test has closed forms: independent errors of one variance, no shift, a variance estimate RSS/df.

|w|^2 over that estimate is then F, with noncentrality |effect|^2 in error SDs, and its probabilities are Poisson mixtures of
incomplete beta functions (Patnaik 1949, Biometrika 36:202). All terms are positive, so that small probabilities keep their
leading digits on both sides.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import betainc, gammaln, xlogy

from withstand.exact.contour import Inverter, Probabilities
from withstand.exact.middle import DiagonalMiddle
from withstand.exact.problem import Problem
from withstand.study.design import Floats

_MOST = 500.0
"""Largest half of a noncentrality: beyond it the Poisson weights lose digits, and there are many of them."""

_ERROR = 1e-12
"""Absolute error of each probability, on the safe side."""


@dataclass(frozen=True, eq=False)
class ClosedForm:
    """Answers one problem of the ideal model.

    Parameters
    ----------
    k, df : int
        Focal coordinates, residual degrees of freedom.
    sd : float
        Of every error.
    scale : float
        D is this times the identity.
    threshold : float
        c^2.
    """

    k: int
    df: int
    sd: float
    scale: float
    threshold: float

    def reaches(self, effects: Floats) -> bool:
        """Whether effects (E, k), in the coordinates of w, are not too large for the sums."""
        return bool(np.all(self._halves(effects) <= _MOST))

    def probabilities(self, effects: Floats, *, sides: bool = False) -> Probabilities:
        """See Inverter; the sides are told apart where nothing is off, by symmetry."""
        half = self._halves(effects)
        j = np.arange(math.ceil(half.max() + 12.0 * math.sqrt(half.max())) + 40.0 if half.max() > 0.0 else 1.0)
        weights = np.exp(xlogy(j, half[:, None]) - half[:, None] - gammaln(j + 1.0))
        ratio = self.scale * self.threshold
        beyond = weights @ betainc(0.5 * self.df, 0.5 * self.k + j, 1.0 / (1.0 + ratio))
        within = weights @ betainc(0.5 * self.k + j, 0.5 * self.df, ratio / (1.0 + ratio))
        # The larger of the two is the one whose rounding shows.
        rare = beyond < within
        beyond, within = np.where(rare, beyond, 1.0 - within), np.where(rare, 1.0 - beyond, within)
        side = 0.5 * beyond if sides else None
        return Probabilities(beyond, within, side, side, np.full(len(half), _ERROR))

    def expected_root(self) -> float:
        """E[sqrt(V)], the mean of a chi variable."""
        chi = math.sqrt(2.0) * math.exp(math.lgamma(0.5 * (self.df + 1)) - math.lgamma(0.5 * self.df))
        return self.sd * math.sqrt(self.scale) * chi

    def _halves(self, effects: Floats) -> Floats:
        return np.asarray(0.5 * np.sum((effects / self.sd) ** 2, axis=1))


def closed_form(problem: Problem) -> ClosedForm | None:
    """The closed form of a problem; None where it has none."""
    if not isinstance(problem.middle, DiagonalMiddle) or problem.disturbance.dependence is not None or problem.added > 0.0:
        return None
    if problem.residual_mean is not None or problem.shift.any():
        return None
    d, spread = problem.middle.d, problem.spread
    if np.any(d != d[0]) or np.any(spread != spread[0]):
        return None
    return ClosedForm(problem.k, problem.n - problem.p, float(spread[0]), float(d[0]), problem.threshold)


def answering_for(problem: Problem, effects: Floats | None = None) -> ClosedForm | Inverter:
    """What answers a problem at no effect and at effects (E, k) in the coordinates of w: the closed form where there is one."""
    closed = closed_form(problem)
    return closed if closed is not None and (effects is None or closed.reaches(effects)) else Inverter(problem)
