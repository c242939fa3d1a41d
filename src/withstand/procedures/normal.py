"""Weighted least squares for all replicates at once: B normal matrices, factored side by side.

Everything is in the coordinates of an orthonormal basis Q of the model space, where the matrices are as well conditioned as
the weights allow.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from withstand.procedures.fit import Flags
from withstand.study.design import Floats, Ints

_SINGULAR = 1e-12
"""A pivot below this share of its diagonal element counts as zero."""


@dataclass(frozen=True, eq=False)
class Products:
    """Products of the columns of a basis, from which every weighted normal matrix is one matrix product.

    Parameters
    ----------
    Q : ndarray of shape (n, p)
        Basis.
    """

    Q: Floats

    @cached_property
    def pairs(self) -> tuple[Ints, Ints]:
        """Row and column numbers of the upper triangle."""
        return np.triu_indices(self.Q.shape[1])

    @cached_property
    def table(self) -> Floats:
        """q_i q_j for i <= j, (p(p + 1)/2, n)."""
        i, j = self.pairs
        return np.ascontiguousarray((self.Q[:, i] * self.Q[:, j]).T)

    def normal(self, weights: Floats) -> Floats:
        """Q' diag(w) Q for every replicate.

        Parameters
        ----------
        weights : ndarray of shape (n, B)
            w.

        Returns
        -------
        ndarray of shape (p, p, B)
            Normal matrices.
        """
        return self.unpack(self.table @ weights)

    def unpack(self, packed: Floats) -> Floats:
        """Symmetric matrices (p, p, B) from their upper triangles (p(p + 1)/2, B)."""
        p = self.Q.shape[1]
        full = np.empty((p, p, packed.shape[1]))
        i, j = self.pairs
        full[i, j] = packed
        full[j, i] = packed
        return full

    def diagonal(self, inner: Floats) -> Floats:
        """q_t' S q_t for every row and replicate, (n, B), S (p, p, B) symmetric."""
        i, j = self.pairs
        return np.asarray(self.table.T @ (inner[i, j] * self.multiplicity[:, None]))

    @cached_property
    def multiplicity(self) -> Floats:
        """How often each element of the upper triangle stands in the whole matrix, (p(p + 1)/2,)."""
        i, j = self.pairs
        return np.where(i == j, 1.0, 2.0)

    def squares(self, vectors: Floats) -> Floats:
        """v_i v_j, as often as it stands in v v', (p(p + 1)/2, B): its product with a packed S is v' S v."""
        i, j = self.pairs
        product = vectors[i] * vectors[j]
        product *= self.multiplicity[:, None]
        return np.asarray(product)


def solve(matrices: Floats, right: Floats) -> tuple[Floats, Flags]:
    """Solve positive definite systems of all replicates by Cholesky.

    Parameters
    ----------
    matrices : ndarray of shape (p, p, B)
        Symmetric matrices.
    right : ndarray of shape (p, m, B)
        Right-hand sides.

    Returns
    -------
    solution : ndarray of shape (p, m, B)
        Undefined but finite where a matrix is not positive definite.
    singular : ndarray of bool, shape (B,)
        Where that is.
    """
    p = matrices.shape[0]
    lower = matrices.copy()
    x = right.copy()
    singular = np.zeros(matrices.shape[2], dtype=bool)
    for j in range(p):
        lost = ~(lower[j, j] > _SINGULAR * matrices[j, j])
        if lost.any():
            # A matrix that is lost goes on as the identity, so that the others need no masks.
            singular |= lost
            lower[:, :, lost] = np.eye(p)[:, :, None]
            x[:, :, lost] = 0.0
        lower[j:, j] /= np.sqrt(lower[j, j])
        x[j] /= lower[j, j]
        for i in range(j + 1, p):
            lower[i, j + 1 : i + 1] -= lower[i, j] * lower[j + 1 : i + 1, j]
            x[i] -= lower[i, j] * x[j]
    for j in reversed(range(p)):
        x[j] /= lower[j, j]
        for i in range(j):
            x[i] -= lower[j, i] * x[j]
    return x, singular


def quadratic(rows: Floats, solved: Floats) -> Floats:
    """L N^-1 L' from L (k, p) and N^-1 L' (p, k, B), as (k, k, B)."""
    return np.asarray(np.einsum("ip,pjb->ijb", rows, solved))
