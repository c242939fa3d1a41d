"""M-estimates by iteratively reweighted least squares, all replicates at once."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand.errors import ScenarioError
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.critical import student_critical
from withstand.procedures.fit import Fit, Flags, WaldFit
from withstand.procedures.normal import Products
from withstand.procedures.reweighting import Reweighting, mad
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind


@dataclass(frozen=True)
class MEstimate(Procedure):
    """Solution of sum x psi(r / s) = 0 with the scale s = median |r| / 0.6745, re-estimated in every round."""

    family = "robust"
    target = "coefficients of the centre of the response, its mean where errors are symmetric"

    @property
    @abstractmethod
    def tuning(self) -> float:
        """Residuals, in scales, from which psi departs."""

    @abstractmethod
    def weights(self, u: Floats, out: Floats) -> Floats:
        """See Score."""

    @abstractmethod
    def slope(self, u: Floats, out: Floats) -> Floats:
        """See Score."""

    def __post_init__(self) -> None:
        if not 0.0 < self.tuning < np.inf:
            raise ScenarioError(
                f"the tuning constant is {self.tuning:g}",
                where=f"procedures.use: {self.name}",
                remedy="Give a positive number; the default is 95 % efficient at the normal.",
            )

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return "not applicable, because a robust fit claims no variance for a new response"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        products = Products(design.Q)
        bases = [design.basis_rows(focus.L) for focus in foci]
        criticals = [student_critical(focus.k, design.df, level) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            step, factor, failed = self.fit_block(products, sample.residuals)
            fits: list[Fit] = []
            for basis, critical in zip(bases, criticals, strict=True):
                covariance = (basis @ basis.T)[:, :, None] * factor
                fits.append(WaldFit(basis @ (sample.projections + step), failed, covariance, critical))
            return fits

        return fit

    def fit_block(self, products: Products, e: Floats) -> tuple[Floats, Floats, Flags]:
        """Estimates and covariance factors of a block.

        Parameters
        ----------
        products : Products
            Of the basis Q.
        e : ndarray of shape (n, B)
            Residuals of the least-squares fit.

        Returns
        -------
        step : ndarray of shape (p, B)
            M-estimate minus least squares, in the coordinates of Q.
        factor : ndarray of shape (B,)
            H1 covariance is this times (X'X)^-1.
        failed : ndarray of bool, shape (B,)
            No convergence, or a scale that has collapsed.
        """
        first = np.ascontiguousarray(e.T)
        step, failed = Reweighting(self, products, first).run()
        factor = self.h1(first - step @ products.Q.T, products.Q.shape[1])
        failed |= ~((factor > 0.0) & np.isfinite(factor))
        return np.ascontiguousarray(step.T), np.where(failed, 1.0, factor), failed

    def h1(self, residuals: Floats, p: int) -> Floats:
        """Huber's first covariance, as a factor of (X'X)^-1.

        Parameters
        ----------
        residuals : ndarray of shape (B, n)
            Of the M-estimates.
        p : int
            Columns of the model.

        Returns
        -------
        ndarray of shape (B,)
            K^2 s^2 (sum psi^2 / (n - p)) / m^2, m = mean psi', K = 1 + (p/n) var(psi') / m^2.
        """
        n = residuals.shape[1]
        u = np.abs(residuals)
        scale = mad(u)
        u /= np.where(scale > 0.0, scale, 1.0)[:, None]
        slope = self.slope(u, np.empty_like(u))
        mean = slope.mean(axis=1)
        spread = np.maximum(np.einsum("bt,bt->b", slope, slope) / n - mean**2, 0.0)
        psi = self.weights(u, np.empty_like(u))
        psi *= u
        sure = np.where(mean == 0.0, np.nan, mean)
        K = 1.0 + p / n * spread / sure**2
        return np.asarray(K**2 * scale**2 * np.einsum("bt,bt->b", psi, psi) / (n - p) / sure**2)


@register
@dataclass(frozen=True)
class Huber(MEstimate):
    """Residuals count in full up to k scales, and no more beyond.

    Parameters
    ----------
    k : float
        Tuning constant, in scales; 1.345 is 95 % efficient at the normal.
    """

    k: float = 1.345

    name = "huber"
    title = "Huber's M-estimate"
    formula = "psi(u) = max(-k, min(k, u)), s = median|r|/0.6745, V = H1, t(n - p)"
    source = "Huber (1964, 1973, 1981)"

    @property
    def tuning(self) -> float:
        """See MEstimate."""
        return self.k

    def weights(self, u: Floats, out: Floats) -> Floats:
        """See Score."""
        np.maximum(u, self.k, out=out)
        return np.divide(self.k, out, out=out)

    def slope(self, u: Floats, out: Floats) -> Floats:
        """See Score."""
        return np.less_equal(u, self.k, out=out)


@register
@dataclass(frozen=True)
class Bisquare(MEstimate):
    """Residuals count less the larger they are, and not at all beyond c scales.

    Parameters
    ----------
    c : float
        Tuning constant, in scales; 4.685 is 95 % efficient at the normal.
    """

    c: float = 4.685

    name = "bisquare"
    title = "Tukey's bisquare M-estimate"
    formula = "psi(u) = u (1 - (u/c)^2)^2 within c, s = median|r|/0.6745, V = H1, t(n - p)"
    source = "Beaton & Tukey (1974); covariance of Huber (1973, 1981)"

    @property
    def tuning(self) -> float:
        """See MEstimate."""
        return self.c

    def weights(self, u: Floats, out: Floats) -> Floats:
        """See Score."""
        self._kept(u, out)
        return np.multiply(out, out, out=out)

    def slope(self, u: Floats, out: Floats) -> Floats:
        """See Score."""
        self._kept(u, out)
        out *= 5.0 * out - 4.0
        return out

    def _kept(self, u: Floats, out: Floats) -> Floats:
        """1 - (u/c)^2 within c, 0 beyond."""
        np.multiply(u, 1.0 / self.c, out=out)
        np.multiply(out, out, out=out)
        np.subtract(1.0, out, out=out)
        return np.maximum(out, 0.0, out=out)
