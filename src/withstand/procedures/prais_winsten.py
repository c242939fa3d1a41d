"""Generalised least squares for first-order autoregression, with a known or an estimated correlation."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand.departures.chain import AR1
from withstand.departures.dependence import Serial
from withstand.errors import ScenarioError
from withstand.procedures.autoregression import Autoregression
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.critical import student_critical
from withstand.procedures.fit import Fit, WaldFit
from withstand.procedures.normal import Products, quadratic
from withstand.procedures.sample import Sample
from withstand.procedures.serial_sums import Neighbours
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind


@register
@dataclass(frozen=True)
class PraisWinsten(Procedure):
    """Feasible generalised least squares: rho from the residuals, the fit given rho, in turn until rho settles.

    Parameters
    ----------
    within : {'groups'}, optional
        A series of its own in each group, instead of one through all rows.
    iterate : bool
        False stops after one estimate of rho (two-step).

    Notes
    -----
    Rows `gap` steps apart have correlation rho^gap, and every first row of a series is kept (Prais & Winsten 1954). rho is the
    regression coefficient of residuals on those of the row before; with several gaps it solves
    sum e_s (e_t - rho^gap e_s) = 0, and is taken as 0 where that sum calls for a negative value, which has no power at every
    gap. Estimates of 1 or more are failures. A new response is taken to come from no particular place in the series: its
    variance is s^2, that of one error.
    """

    within: str | None = None
    iterate: bool = True

    name = "prais-winsten"
    family = "serial"
    title = "feasible least squares for AR(1)"
    formula = "rho = sum e_t e_(t-1) / sum e_(t-1)^2, y_t - rho y_(t-1) with y_1 sqrt(1 - rho^2), iterated; t(n - p)"
    source = "Prais & Winsten (1954)"

    def __post_init__(self) -> None:
        _check_within(self.name, self.within)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        return Serial(0.5, within=self.within).not_applicable(design)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        neighbours = Neighbours.of(design, self.within is not None)
        products = Products(design.Q)
        matrices = neighbours.of_products(products)
        bases = [design.basis_rows(focus.L) for focus in foci]
        criticals = [student_critical(focus.k, design.df, level) for focus in foci]
        predicts = [focus.kind is FocusKind.NEW for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            e = sample.residuals
            scores, squares = neighbours.of_scores(design.Q, e), neighbours.of_squares(e)
            block = Autoregression(products, neighbours.gaps, matrices, scores, squares)
            rho, failed = block.settle() if self.iterate else block.first()
            rho = np.where(failed, 0.0, rho)
            step, inverses, square, singular = block.fit(rho, bases)
            scale = square / design.df
            failed |= singular | ~(scale > 0.0)
            fits: list[Fit] = []
            for basis, inverse, critical, predict in zip(bases, inverses, criticals, predicts, strict=True):
                covariance = np.where(failed, 1.0, scale) * (quadratic(basis, inverse) + float(predict))
                fits.append(WaldFit(basis @ (sample.projections + step), failed, covariance, critical))
            return fits

        return fit


@register
@dataclass(frozen=True)
class Gls(Procedure):
    """Generalised least squares with a known first-order autoregression.

    Parameters
    ----------
    rho : float
        Correlation of errors one step apart, between -1 and 1.
    within : {'groups'}, optional
        A series of its own in each group, instead of one through all rows.
    step : float, optional
        Length of one step, in the unit of the order column; left out, as for serial errors.

    Notes
    -----
    Rows are made independent by (y_t - rho^gap y_(t-1)) / sqrt(1 - rho^(2 gap)), first rows stay as they are.
    """

    rho: float = 0.5
    within: str | None = None
    step: float | None = None

    name = "gls"
    family = "serial"
    title = "least squares for AR(1) with known correlation"
    formula = "V = s^2 l'(X' R^-1 X)^-1 l, R_ts = rho^|t - s|, t(n - p)"
    source = "Aitken (1936)"

    def __post_init__(self) -> None:
        if not -1.0 < self.rho < 1.0:
            raise ScenarioError(
                f"rho is {self.rho:g}", where="procedures.use: gls.rho", remedy="Give a number between -1 and 1, both excluded."
            )
        if self.step is not None and not 0.0 < self.step < np.inf:
            raise ScenarioError(
                f"step is {self.step:g}",
                where="procedures.use: gls.step",
                remedy="Give a positive length in the unit of the order column, or leave it out.",
            )
        _check_within(self.name, self.within)

    def _serial(self) -> Serial:
        return Serial(self.rho, within=self.within, step=self.step)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        return self._serial().not_applicable(design)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        dependence = self._serial().dependence(design, self.rho)
        whitened = Design(whiten(design.X, dependence), design.names)
        bases = [whitened.basis_rows(focus.L) for focus in foci]
        criticals = [student_critical(focus.k, design.df, level) for focus in foci]
        shares = [b @ b.T + float(focus.kind is FocusKind.NEW) for b, focus in zip(bases, foci, strict=True)]

        def fit(sample: Sample) -> list[Fit]:
            seen = Sample(whitened, whiten(sample.errors, dependence), sample.noise)
            scale = seen.residual_sum / whitened.df
            return [
                WaldFit(basis @ seen.projections, None, share[:, :, None] * scale, critical)
                for basis, share, critical in zip(bases, shares, criticals, strict=True)
            ]

        return fit


def whiten(M: Floats, dependence: AR1 | None) -> Floats:
    """Make the rows of M (n, m) independent under the autoregression; None is independence already."""
    if dependence is None:
        return M
    links = dependence.links[:, None]
    return np.asarray((M - links * M[dependence.previous]) / np.sqrt((1.0 - links) * (1.0 + links)))


def _check_within(name: str, within: str | None) -> None:
    if within not in (None, "groups"):
        raise ScenarioError(
            f"within is '{within}'", where=f"procedures.use: {name}.within", remedy='Use within = "groups", or leave it out.'
        )
