"""Deletion of outlying rows before the fit, as it is often done."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.errors import ScenarioError
from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.fit import Fit, Flags, WaldFit
from withstand.procedures.sample import Sample
from withstand.study.design import FULL_LEVERAGE, Design, Floats
from withstand.study.focus import Focus, FocusKind

_SINGULAR = 1e-10
"""Smallest accepted eigenvalue of Q'WQ, W the rows kept: below it they no longer determine the coefficients."""


@register
@dataclass(frozen=True)
class DropOutliers(Procedure):
    """Least squares after one round of deletion, with the classical errors of the rows that are left.

    Parameters
    ----------
    beyond : float
        Rows whose externally studentised residual exceeds this in absolute value are deleted.

    Notes
    -----
    The interval takes no account of the deletion: it is judged as it is used. A replicate whose remaining rows leave a
    coefficient or the variance undetermined counts as a failure.
    """

    beyond: float = 3.0

    name = "drop-outliers"
    family = "deletion"
    title = "least squares without outlying rows"
    formula = "rows with |externally studentised residual| > 3 deleted, then OLS on the rest"
    source = "common practice; residuals as in Cook & Weisberg (1982)"
    target = "coefficients of the mean of the rows that are left"

    def __post_init__(self) -> None:
        if not self.beyond > 0.0:
            raise ScenarioError(
                f"beyond is {self.beyond:g}", where="procedures.use: drop-outliers.beyond", remedy="Give a positive number."
            )

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if design.df < 2:
            return "not applicable, because leaving a row out leaves no degree of freedom to studentise its residual"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        bases = [design.basis_rows(focus.L) for focus in foci]
        # All numbers of deleted rows that leave a degree of freedom.
        degrees = np.arange(design.df, 0, -1)
        t = tails.t_isf((1.0 - level) / 2.0, degrees)
        criticals = [np.asarray(t if focus.scalar else tails.f_isf(1.0 - level, focus.k, degrees)) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            left = _refit(design, sample, self.beyond)
            fits: list[Fit] = []
            for basis, focus, critical in zip(bases, foci, criticals, strict=True):
                spread = np.einsum("kp,bpq,lq->klb", basis, left.inverse, basis, optimize=True)
                if focus.kind is FocusKind.NEW:
                    spread = spread + 1.0
                bound = critical[np.minimum(left.deleted, design.df - 1)]
                fits.append(WaldFit(basis @ left.coefficients, left.failed, spread * left.mean_square, bound))
            return fits

        return fit


@dataclass(frozen=True, eq=False)
class _Left:
    """The fit to the rows that are left.

    Parameters
    ----------
    coefficients : ndarray of shape (p, B)
        In the coordinates of Q.
    inverse : ndarray of shape (B, p, p)
        (Q'WQ)^-1, W the rows kept.
    mean_square : ndarray of shape (B,)
        Residual mean square.
    deleted : ndarray of int, shape (B,)
        Rows deleted.
    failed : ndarray of bool, shape (B,), or None
        Replicates in which too little is left.
    """

    coefficients: Floats
    inverse: Floats
    mean_square: Floats
    deleted: np.ndarray
    failed: Flags | None


def outlying(design: Design, sample: Sample, beyond: float) -> Flags:
    """Rows whose externally studentised residual exceeds `beyond` in absolute value, (n, B).

    Notes
    -----
    t^2 = (df - 1) q / (1 - q) with q = e^2 / ((1 - h) e'e), and t > beyond exactly where q > beyond^2 / (df - 1 + beyond^2).
    """
    share = np.where(design.leverage >= FULL_LEVERAGE, np.inf, 1.0 - design.leverage)
    bound = beyond**2 / (design.df - 1.0 + beyond**2)
    return np.asarray(sample.squared_residuals > bound * share[:, None] * sample.residual_sum)


def _refit(design: Design, sample: Sample, beyond: float) -> _Left:
    Q, p = design.Q, design.p
    out = outlying(design, sample, beyond)
    deleted = np.count_nonzero(out, axis=0)
    coefficients = sample.projections.copy()
    inverse = np.broadcast_to(np.eye(p), (sample.width, p, p)).copy()
    total = sample.residual_sum.copy()
    touched = np.flatnonzero(deleted)
    failed = np.zeros(sample.width, dtype=bool)
    if len(touched):
        kept = 1.0 - out[:, touched]
        normal = (kept.T @ (Q[:, :, None] * Q[:, None, :]).reshape(design.n, -1)).reshape(-1, p, p)
        lost = np.linalg.eigvalsh(normal)[:, 0] <= _SINGULAR
        lost |= deleted[touched] >= design.df
        normal[lost] = np.eye(p)
        inverse[touched] = np.linalg.inv(normal)
        # From the residuals of the first fit: what the deletion adds to the coefficients, free of their size.
        e = sample.residuals[:, touched]
        step = np.einsum("bpq,qb->pb", inverse[touched], Q.T @ (kept * e))
        coefficients[:, touched] += step
        left = kept * (e - Q @ step)
        total[touched] = np.einsum("nb,nb->b", left, left)
        failed[touched] = lost
    mean_square = total / np.maximum(design.df - deleted, 1)
    return _Left(coefficients, inverse, mean_square, deleted, failed if failed.any() else None)
