"""The matrix D of a variance estimate e' D e for one focal quantity, in the shapes that large designs can afford.

D comes from the same object that the simulator evaluates; here it is scaled to a unit focal quantity and given a ridge where a
new response is predicted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.procedures.forms import Banded, Diagonal, Grouped, ResidualForm, Squares
from withstand.study.design import Floats, Ints


@dataclass(frozen=True, eq=False)
class DiagonalMiddle:
    """D = diag(d), d (n,)."""

    d: Floats

    def times(self, M: Floats) -> Floats:
        """D M, (n, m)."""
        return np.asarray(self.d[:, None] * M)


@dataclass(frozen=True, eq=False)
class BandMiddle:
    """D[i, i - l] = D[i - l, i] = lags[l, i] for i >= l; lags (L + 1, n), zero for i < l."""

    lags: Floats

    def times(self, M: Floats) -> Floats:
        """D M, (n, m)."""
        result = self.lags[0][:, None] * M
        for lag, entries in enumerate(self.lags[1:], start=1):
            result[lag:] += entries[lag:, None] * M[:-lag]
            result[:-lag] += entries[lag:, None] * M[lag:]
        return np.asarray(result)


@dataclass(frozen=True, eq=False)
class RowsMiddle:
    """D = B'B + ridge I, B (m, n)."""

    rows: Floats
    ridge: float

    def times(self, M: Floats) -> Floats:
        """D M, (n, m)."""
        return np.asarray(self.rows.T @ (self.rows @ M) + self.ridge * M)


@dataclass(frozen=True, eq=False)
class GroupedMiddle:
    """D = sum_g b_g b_g' + ridge I, where b_g is b (n,) within group g and zero elsewhere."""

    b: Floats
    codes: Ints
    ridge: float

    def sums(self, M: Floats) -> Floats:
        """b_g' M for every group, (G, m)."""
        count = int(self.codes.max()) + 1
        return np.stack([np.bincount(self.codes, self.b * column, minlength=count) for column in M.T], axis=1)

    def as_rows(self) -> RowsMiddle:
        """The same D with every b_g written out, (G, n)."""
        rows = np.zeros((int(self.codes.max()) + 1, self.b.size))
        rows[self.codes, np.arange(self.b.size)] = self.b
        return RowsMiddle(rows, self.ridge)

    def times(self, M: Floats) -> Floats:
        """D M, (n, m)."""
        return np.asarray(self.b[:, None] * self.sums(M)[self.codes] + self.ridge * M)


Middle = DiagonalMiddle | BandMiddle | RowsMiddle | GroupedMiddle


def middle_of(form: ResidualForm, factor: float, ridge: float) -> Middle | None:
    """Read a form for a scalar focal quantity.

    Parameters
    ----------
    form : ResidualForm
        e' D e.
    factor : float
        Multiplies D.
    ridge : float
        Added to the diagonal after that.

    Returns
    -------
    Middle or None
        None if the form is of a shape not known here.
    """
    match form:
        case Diagonal():
            return DiagonalMiddle(factor * form.weights[0, 0] + ridge)
        case Banded():
            a = form.rows[0]
            lags = np.zeros((len(form.lag_weights), a.size))
            for lag, weight in enumerate(form.lag_weights):
                lags[lag, lag:] = factor * form.scale * weight * a[lag:] * a[: a.size - lag]
            lags[0] += ridge
            return BandMiddle(lags) if len(lags) > 1 else DiagonalMiddle(lags[0])
        case Squares():
            return RowsMiddle(np.sqrt(factor * form.scale) * form.rows[0], ridge)
        case Grouped():
            return GroupedMiddle(np.sqrt(factor * form.scale) * form.rows[0], form.codes, ridge)
        case _:
            return None
