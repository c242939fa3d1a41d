"""Median regression, with the sparsity of the errors estimated as one number or row by row."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.procedures.absolute import least_absolute
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.critical import student_critical
from withstand.procedures.fit import Fit, Flags, WaldFit
from withstand.procedures.normal import Products, solve
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

_NORMAL_QUARTILES = 1.34
"""Distance of the quartiles of a standard normal variable, rounded as it is used."""

_COLLAPSED = 1e-9
"""A bandwidth below this share of the root mean square residual is rounding: half of the rows are fitted exactly."""


def hall_sheather(n: int, level: float) -> float:
    """Half the range of probabilities around the median over which the quantile function is taken as straight.

    Notes
    -----
    n^(-1/3) z^(2/3) (1.5 phi(0)^2)^(1/3), z the normal quantile of the level (Hall & Sheather 1988); halved until it is below
    1/2, which matters up to 7 rows.
    """
    z = float(tails.normal_isf((1.0 - level) / 2.0))
    width = float(n ** (-1.0 / 3.0) * z ** (2.0 / 3.0) * (1.5 * tails.normal_pdf(0.0) ** 2) ** (1.0 / 3.0))
    while width >= 0.5:
        width /= 2.0
    return width


def bandwidths(residuals: Floats, level: float) -> Floats:
    """Bandwidth of the density at the median, (B,), from residuals (B, n).

    Notes
    -----
    min(SD, IQR / 1.34) (Phi^-1(1/2 + h) - Phi^-1(1/2 - h)), h of Hall & Sheather.
    """
    n = residuals.shape[1]
    ordered = np.sort(residuals, axis=1)
    place = 0.25 * (n - 1)
    low, part = int(place), place - int(place)
    lower = ordered[:, low] + part * (ordered[:, low + 1] - ordered[:, low])
    upper = ordered[:, n - 1 - low] - part * (ordered[:, n - 1 - low] - ordered[:, n - 2 - low])
    width = 2.0 * float(tails.normal_ppf(0.5 + hall_sheather(n, level)))
    return np.asarray(np.minimum(residuals.std(axis=1), (upper - lower) / _NORMAL_QUARTILES) * width)


@dataclass(frozen=True)
class MedianRegression(Procedure):
    """Least absolute deviations, exactly; see `absolute`."""

    family = "robust"
    target = "coefficients of the median of the response"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return "not applicable, because a median fit claims no variance for a new response"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        products = Products(design.Q)
        bases = [design.basis_rows(focus.L) for focus in foci]
        criticals = [student_critical(focus.k, design.df, level) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            e = np.ascontiguousarray(sample.residuals.T)
            step, basis, failed = least_absolute(design.Q, e)
            e -= step.T @ design.Q.T
            e[np.arange(len(e))[None, :], basis] = 0.0
            h = bandwidths(e, level)
            failed |= ~(h > _COLLAPSED * np.sqrt(np.einsum("bt,bt->b", e, e) / design.n))
            e /= np.where(failed, 1.0, h)[:, None]
            covariances, void = self.covariances(products, bases, kernel(e), np.where(failed, 1.0, h))
            failed |= void
            fits: list[Fit] = []
            for basis_rows, covariance, critical in zip(bases, covariances, criticals, strict=True):
                covariance[:, :, failed] = np.eye(len(basis_rows))[:, :, None]
                fits.append(WaldFit(basis_rows @ (sample.projections + step), failed, covariance, critical))
            return fits

        return fit

    @abstractmethod
    def covariances(self, products: Products, bases: list[Floats], K: Floats, h: Floats) -> tuple[list[Floats], Flags]:
        """Claimed covariances, (k, k, B) for each of `bases` (k, p), and where there are none.

        Parameters
        ----------
        products : Products
            Of the basis Q.
        bases : list of ndarray of shape (k, p)
            Focal rows in the coordinates of Q.
        K : ndarray of shape (B, n)
            Kernel at the residuals over the bandwidth.
        h : ndarray of shape (B,)
            Bandwidth.
        """


def kernel(u: Floats) -> Floats:
    """Epanechnikov's kernel 0.75 (1 - u^2) within 1, elementwise and in place."""
    np.multiply(u, u, out=u)
    np.subtract(1.0, u, out=u)
    np.maximum(u, 0.0, out=u)
    return np.multiply(u, 0.75, out=u)


@register
@dataclass(frozen=True)
class Lad(MedianRegression):
    """One sparsity for all rows.

    Notes
    -----
    The sparsity 1/f(0) is the reciprocal of a kernel estimate of the density of the residuals at 0. The p rows fitted exactly
    are counted, which makes intervals short where n is not many times p.
    """

    name = "lad"
    title = "median regression"
    formula = "min sum |r|; V = l'(X'X)^-1 l / (4 f^2), f = sum K(r/h) / (n h), K Epanechnikov, h Hall-Sheather, t(n - p)"
    source = "Koenker & Bassett (1978); Hall & Sheather (1988)"

    def covariances(self, products: Products, bases: list[Floats], K: Floats, h: Floats) -> tuple[list[Floats], Flags]:
        """See MedianRegression."""
        density = K.mean(axis=1) / h
        failed = ~(density > 0.0)
        factor = 0.25 / np.where(failed, 1.0, density) ** 2
        return [(rows @ rows.T)[:, :, None] * factor for rows in bases], failed


@register
@dataclass(frozen=True)
class LadKernel(MedianRegression):
    """A sparsity for each row: holds under unequal spread."""

    name = "lad-kernel"
    title = "median regression, kernel sandwich"
    formula = "min sum |r|; V = l' D^-1 X'X D^-1 l / 4, D = sum K(r/h) x x' / h, K and h as for lad, t(n - p)"
    source = "Koenker & Bassett (1978); Powell (1991); Hall & Sheather (1988)"

    def covariances(self, products: Products, bases: list[Floats], K: Floats, h: Floats) -> tuple[list[Floats], Flags]:
        """See MedianRegression."""
        D = products.normal(K.T) / h
        rights = [np.broadcast_to(rows.T[:, :, None], (*rows.T.shape, h.size)) for rows in bases]
        solved, singular = solve(D, np.concatenate(rights, axis=1))
        parts = np.split(solved, np.cumsum([len(rows) for rows in bases])[:-1], axis=1)
        return [0.25 * np.einsum("pib,pjb->ijb", part, part) for part in parts], singular
