"""Variance estimates that are quadratic forms in the residuals: e' D e, one D for each pair of focal rows.

The classical and every sandwich variance is one of three shapes. The simulator evaluates them on blocks; the exact answers
read the same matrices, so that both rest on a single definition.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy import sparse

from withstand.procedures.sample import Sample
from withstand.study.design import Floats, Ints


@dataclass(frozen=True, eq=False)
class ResidualForm(ABC):
    """A k x k matrix of quadratic forms in the residuals."""

    @property
    @abstractmethod
    def k(self) -> int:
        """Rows of the focal quantity."""

    @abstractmethod
    def evaluate(self, sample: Sample) -> Floats:
        """Covariance estimates (k, k, B) from the residuals of the sample."""

    @abstractmethod
    def times(self, M: Floats) -> Floats:
        """D M, (n, m), for a scalar focal quantity, never forming D."""


@dataclass(frozen=True, eq=False)
class Diagonal(ResidualForm):
    """V_ij = sum_t d_ij,t e_t^2.

    Parameters
    ----------
    weights : ndarray of shape (k, k, n)
        d, symmetric in its first two axes.
    """

    weights: Floats

    @property
    def k(self) -> int:
        """See ResidualForm."""
        return self.weights.shape[0]

    def evaluate(self, sample: Sample) -> Floats:
        """See ResidualForm."""
        k = self.k
        return np.asarray((self.weights.reshape(k * k, -1) @ sample.squared_residuals).reshape(k, k, -1))

    def times(self, M: Floats) -> Floats:
        """See ResidualForm."""
        return np.asarray(self.weights[0, 0][:, None] * M)


@dataclass(frozen=True, eq=False)
class Uniform(Diagonal):
    """V_ij = c_ij sum_t e_t^2: Diagonal with equal weights, from the residual sum of squares that is shared.

    Parameters
    ----------
    weights : ndarray of shape (k, k, n)
        c, repeated over the rows.
    """

    @classmethod
    def of(cls, c: Floats, n: int) -> Uniform:
        """The form with factors c (k, k) on n rows."""
        return cls(np.broadcast_to(c[:, :, None], (*c.shape, n)))

    def evaluate(self, sample: Sample) -> Floats:
        """See ResidualForm."""
        return np.asarray(self.weights[:, :, :1] * sample.residual_sum)


def evaluate_all(forms: Sequence[ResidualForm], sample: Sample) -> list[Floats]:
    """Evaluate several forms; those with plain diagonals share one product with the squared residuals.

    Parameters
    ----------
    forms : sequence of ResidualForm
        Forms of one procedure, one a focal quantity.
    sample : Sample
        The block.

    Returns
    -------
    list of ndarray of shape (k, k, B)
        One a form.
    """
    if len(forms) < 2 or not all(type(form) is Diagonal for form in forms):
        return [form.evaluate(sample) for form in forms]
    stacked = np.concatenate([form.weights.reshape(form.k**2, -1) for form in forms if isinstance(form, Diagonal)])
    values = stacked @ sample.squared_residuals
    ends = np.cumsum([form.k**2 for form in forms])[:-1]
    return [part.reshape(form.k, form.k, -1) for form, part in zip(forms, np.split(values, ends), strict=True)]


@dataclass(frozen=True, eq=False)
class Banded(ResidualForm):
    """V_ij = scale * sum_l w_l sum_t (a_i,t e_t)(a_j,t-l e_t-l), symmetrised, lag weights w_0 = 1, w_1, ..., w_L.

    Parameters
    ----------
    rows : ndarray of shape (k, n)
        a.
    lag_weights : ndarray of shape (L + 1,)
        w.
    scale : float
        Small-sample factor.
    """

    rows: Floats
    lag_weights: Floats
    scale: float

    @property
    def k(self) -> int:
        """See ResidualForm."""
        return self.rows.shape[0]

    def evaluate(self, sample: Sample) -> Floats:
        """See ResidualForm."""
        k, n = self.rows.shape
        scores = [np.multiply(self.rows[i][:, None], sample.residuals, out=sample.buffer(f"scores {i}")) for i in range(k)]
        result = np.zeros((k, k, sample.width))
        for i in range(k):
            for j in range(i, k):
                total = np.einsum("tb,tb->b", scores[i], scores[j])
                for lag, weight in enumerate(self.lag_weights[1:], start=1):
                    ahead = np.einsum("tb,tb->b", scores[i][lag:], scores[j][: n - lag])
                    if i != j:
                        total += weight * np.einsum("tb,tb->b", scores[j][lag:], scores[i][: n - lag])
                    total += (weight if i != j else 2.0 * weight) * ahead
                result[i, j] = result[j, i] = self.scale * total
        return result

    def times(self, M: Floats) -> Floats:
        """See ResidualForm."""
        a = self.rows[0][:, None]
        scored = a * M
        total = scored.copy()
        for lag, weight in enumerate(self.lag_weights[1:], start=1):
            total[lag:] += weight * scored[:-lag]
            total[:-lag] += weight * scored[lag:]
        return np.asarray(self.scale * a * total)


@dataclass(frozen=True, eq=False)
class Squares(ResidualForm):
    """V_ij = scale * sum_r (b_i,r' e)(b_j,r' e): clusters, or an orthogonal series.

    Parameters
    ----------
    rows : ndarray of shape (k, m, n)
        b.
    scale : float
        Small-sample factor.
    """

    rows: Floats
    scale: float

    @property
    def k(self) -> int:
        """See ResidualForm."""
        return self.rows.shape[0]

    def evaluate(self, sample: Sample) -> Floats:
        """See ResidualForm."""
        k, m, n = self.rows.shape
        parts = (self.rows.reshape(k * m, n) @ sample.residuals).reshape(k, m, -1)
        return np.asarray(self.scale * np.einsum("irb,jrb->ijb", parts, parts))

    def times(self, M: Floats) -> Floats:
        """See ResidualForm."""
        rows = self.rows[0]
        return np.asarray(self.scale * (rows.T @ (rows @ M)))


@dataclass(frozen=True, eq=False)
class Grouped(ResidualForm):
    """V_ij = scale * sum_g (sum_{t in g} b_i,t e_t)(sum_{t in g} b_j,t e_t): Squares whose rows live within clusters.

    Parameters
    ----------
    rows : ndarray of shape (k, n)
        b.
    codes : ndarray of shape (n,)
        Clusters 0..G-1.
    scale : float
        Small-sample factor.
    """

    rows: Floats
    codes: Ints
    scale: float

    @property
    def k(self) -> int:
        """See ResidualForm."""
        return self.rows.shape[0]

    @cached_property
    def sums(self) -> list[sparse.csr_array]:
        """One sparse matrix (G, n) a focal row, which sums scores within clusters."""
        n = self.rows.shape[1]
        index = np.arange(n)
        return [sparse.csr_array((row, (self.codes, index)), shape=(int(self.codes.max()) + 1, n)) for row in self.rows]

    def evaluate(self, sample: Sample) -> Floats:
        """See ResidualForm."""
        parts = np.stack([np.asarray(matrix @ sample.residuals) for matrix in self.sums])
        return np.asarray(self.scale * np.einsum("igb,jgb->ijb", parts, parts))

    def times(self, M: Floats) -> Floats:
        """See ResidualForm."""
        matrix = self.sums[0]
        return np.asarray(self.scale * (matrix.T @ (matrix @ M)))
