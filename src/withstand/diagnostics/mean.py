"""Is the mean what the model says? Terms added to the regression."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.departures.mean import Curvature
from withstand.diagnostics.base import Diagnostic, Statistic, Tail, register
from withstand.errors import ScenarioError
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats


def added_column_t(design: Design, column: Floats) -> Statistic:
    """The t statistic of one column added to the model.

    Parameters
    ----------
    design : Design
        The rows; at least two residual degrees of freedom.
    column : ndarray of shape (n,)
        Not in the span of X.

    Returns
    -------
    callable
        Maps a Sample to the t statistic on n - p - 1 degrees of freedom, (B,).
    """
    beyond = column - design.Q @ (design.Q.T @ column)
    beyond /= np.linalg.norm(beyond)

    def statistic(sample: Sample) -> Floats:
        slope = beyond @ sample.residuals
        left = np.maximum(sample.residual_sum - slope**2, np.finfo(float).tiny)
        return np.asarray(slope / np.sqrt(left / (design.df - 1)))

    return statistic


@register
@dataclass(frozen=True)
class AddedSquare(Diagnostic):
    """The t statistic of the square of a predictor added to the model.

    Parameters
    ----------
    along : str
        A numeric column. Where the model has its square already, the next power is added.
    """

    along: str = ""

    name = "added-square"
    title = "t of an added squared term"
    null = "the mean is straight in the predictor"
    formula = "t of v^2 added to X, t(n - p - 1)"
    source = "common practice"
    tail = Tail.BOTH

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if design.df < 2:
            return "not applicable, because an added term would leave no degree of freedom; collect more rows"
        return Curvature(along=self.along).not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Two-sided t."""
        return np.asarray(2.0 * tails.t_sf(np.abs(values), design.df - 1))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        return added_column_t(design, Curvature(along=self.along).shift(design, 1.0))


@register
@dataclass(frozen=True)
class Reset(Diagnostic):
    """F test of powers of the fitted values added to the model.

    Parameters
    ----------
    power : int
        Powers 2 up to this one.
    """

    power: int = 3

    name = "reset"
    title = "RESET of the fitted values"
    null = "powers of the fitted mean add nothing"
    formula = "F of fitted^2, ..., fitted^power added to X, F(power - 1, n - p - power + 1)"
    source = "Ramsey (1969)"
    needs = "response"

    def __post_init__(self) -> None:
        if self.power < 2:
            raise ScenarioError(f"power is {self.power} in 'reset'", where="diagnostic.power", remedy="Give 2 or more.")

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if self._denominator(design) < 1:
            return "not applicable, because the added powers would leave no degree of freedom; collect more rows"
        if np.unique(design.X, axis=0).shape[0] <= design.p:
            return "not applicable, because the model fits every distinct row its own mean; nothing can be added to it"
        return super().not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of F; exact under normal errors."""
        return np.asarray(tails.f_sf(values, self.power - 1, self._denominator(design)))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        Q, terms = design.Q, self.power - 1
        ones = np.ones(design.n)
        intercept = bool(np.linalg.norm(ones - Q @ (Q.T @ ones)) < 1e-8 * np.sqrt(design.n))

        def statistic(sample: Sample) -> Floats:
            fitted = Q @ (Q.T @ sample.response)
            # With an intercept the powers of the centred values span the same space and are far better conditioned.
            fitted = fitted - fitted.mean(axis=0) if intercept else fitted
            fitted = fitted / np.abs(fitted).max(axis=0)
            added = np.stack([fitted**power for power in range(2, self.power + 1)])
            added -= Q @ (Q.T @ added)
            basis, _ = np.linalg.qr(np.moveaxis(added, (0, 1, 2), (2, 1, 0)))
            explained = np.sum(np.einsum("btq,tb->bq", basis, sample.residuals) ** 2, axis=1)
            left = sample.residual_sum - explained
            return np.asarray((explained / terms) / (left / self._denominator(design)))

        return statistic

    def _denominator(self, design: Design) -> int:
        return design.df - self.power + 1
