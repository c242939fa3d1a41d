"""Is the error SD the same in every row? Score tests on squared residuals, and a ratio of two halves."""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.departures.along import FITTED, column_along
from withstand.diagnostics.base import Diagnostic, Statistic, independent_columns, register
from withstand.errors import ScenarioError
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats

MODEL = "model"
"""Stands for all columns of the model matrix."""


def score_along(design: Design, z: Floats) -> Statistic:
    """Koenker's statistic along one variable, as a signed root.

    Parameters
    ----------
    design : Design
        The rows.
    z : ndarray of shape (n,)
        What the log variance is thought to follow; not constant.

    Returns
    -------
    callable
        Maps a Sample to sign(r) sqrt(n r^2), (B,), r the correlation of z with the squared residuals; its square is the
        one-degree-of-freedom statistic of Koenker (1981).
    """
    direction = z - z.mean()
    direction /= np.linalg.norm(direction)

    def statistic(sample: Sample) -> Floats:
        squares = sample.squared_residuals
        total = np.einsum("tb,tb->b", squares, squares) - sample.residual_sum**2 / design.n
        return np.asarray(np.sqrt(design.n) * (direction @ squares) / np.sqrt(total))

    return statistic


@dataclass(frozen=True)
class SquaredResiduals(Diagnostic):
    """Regression of the squared residuals on some variables Z.

    Parameters
    ----------
    along : str
        A numeric column, "fitted" for the reference fitted mean, or "model" for all columns of the model matrix.
    """

    along: str = MODEL

    null = "the error variance does not depend on Z"

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if self._basis(design).shape[1] == 0:
            return f"not applicable, because '{self.along}' is the same in every row; name a column that varies"
        return super().not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of chi-square with as many degrees of freedom as Z has columns."""
        return np.asarray(tails.chi2_sf(values, self._basis(design).shape[1]))

    def variables(self, design: Design) -> Floats:
        """Z, (n, m)."""
        return design.X if self.along == MODEL else column_along(design, self.along, self.name)[:, None]

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        basis = self._basis(design)

        def statistic(sample: Sample) -> Floats:
            explained = basis.T @ sample.squared_residuals
            return self.combine(sample, np.einsum("qb,qb->b", explained, explained))

        return statistic

    @abstractmethod
    def combine(self, sample: Sample, explained: Floats) -> Floats:
        """The statistic, (B,), from the explained sum of squares (B,) of the squared residuals."""

    def _basis(self, design: Design) -> Floats:
        return independent_columns(self.variables(design))


@dataclass(frozen=True)
class Studentised(SquaredResiduals):
    """N R^2 of the auxiliary regression."""

    def combine(self, sample: Sample, explained: Floats) -> Floats:
        """See SquaredResiduals."""
        squares, n = sample.squared_residuals, sample.design.n
        total = np.einsum("tb,tb->b", squares, squares) - sample.residual_sum**2 / n
        return np.asarray(n * explained / total)


@register
@dataclass(frozen=True)
class Koenker(Studentised):
    """The studentised score test of constant variance."""

    name = "koenker"
    title = "Koenker's studentised score test"
    formula = "n R^2 of e^2 on (1, Z), chi-square(columns of Z)"
    source = "Koenker (1981)"


@register
@dataclass(frozen=True)
class BreuschPagan(SquaredResiduals):
    """The score test of constant variance that takes the errors to be normal."""

    name = "breusch-pagan"
    title = "Breusch-Pagan score test"
    formula = "half the explained sum of squares of e^2 / (e'e/n) on (1, Z), chi-square(columns of Z)"
    source = "Breusch & Pagan (1979)"

    def combine(self, sample: Sample, explained: Floats) -> Floats:
        """See SquaredResiduals."""
        return np.asarray(0.5 * explained / (sample.residual_sum / sample.design.n) ** 2)


@register
@dataclass(frozen=True)
class White(Studentised):
    """Koenker's statistic with the squares and products of the model columns for Z."""

    name = "white"
    title = "White's general test"
    formula = "n R^2 of e^2 on the products of all pairs of model columns, chi-square(their rank)"
    source = "White (1980)"

    def variables(self, design: Design) -> Floats:
        """All products of two columns of (1, X); those of the intercept are the columns themselves."""
        columns = np.column_stack([np.ones(design.n), design.X])
        left, right = np.triu_indices(columns.shape[1])
        return np.asarray(columns[:, left] * columns[:, right])


@register
@dataclass(frozen=True)
class GoldfeldQuandt(Diagnostic):
    """Ratio of the residual variances of two separate fits, to the rows low and high in a variable.

    Parameters
    ----------
    along : str
        A numeric column, or "fitted".
    drop : float
        Share of the rows left out in the middle.
    """

    along: str = FITTED
    drop: float = 0.2

    name = "goldfeld-quandt"
    title = "Goldfeld-Quandt ratio"
    null = "the error variance does not grow along the variable"
    formula = "residual mean square of the upper rows over that of the lower rows, F"
    source = "Goldfeld & Quandt (1965)"

    def __post_init__(self) -> None:
        if not 0.0 <= self.drop < 1.0:
            raise ScenarioError(
                f"drop is {self.drop:g} in 'goldfeld-quandt'", where="diagnostic.drop", remedy="Give a share from 0 to below 1."
            )

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        try:
            self._degrees(design)
        except ScenarioError as refusal:
            return f"not applicable, because {refusal.what}"
        return super().not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of F."""
        low, high = self._degrees(design)
        return np.asarray(tails.f_sf(values, high, low))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        low, high = self._halves(design)
        df_low, df_high = self._degrees(design)
        bases = [_column_space(design.X[rows]) for rows in (low, high)]

        def statistic(sample: Sample) -> Floats:
            sums = []
            for rows, basis in zip((low, high), bases, strict=True):
                part = sample.residuals[rows]
                left = part - basis @ (basis.T @ part)
                sums.append(np.einsum("tb,tb->b", left, left))
            return np.asarray((sums[1] / df_high) / (sums[0] / df_low))

        return statistic

    def _halves(self, design: Design) -> tuple[np.ndarray, np.ndarray]:
        order = np.argsort(column_along(design, self.along, self.name), kind="stable")
        half = (design.n - int(self.drop * design.n)) // 2
        return order[:half], order[-half:]

    def _degrees(self, design: Design) -> tuple[int, int]:
        low, high = (len(rows) - _column_space(design.X[rows]).shape[1] for rows in self._halves(design))
        if min(low, high) < 1:
            raise ScenarioError(
                f"a part of the rows split along '{self.along}' is too small to carry the model",
                where="diagnostic.drop",
                remedy="Leave out fewer rows in the middle, or use koenker.",
            )
        return low, high


def _column_space(X: Floats) -> Floats:
    """Orthonormal basis of the columns of X, which may be dependent on a part of the rows."""
    length = np.linalg.norm(X, axis=0)
    U, s, _ = np.linalg.svd(X[:, length > 0.0] / length[length > 0.0], full_matrices=False)
    return np.ascontiguousarray(U[:, s > 1e-10 * s[0]])
