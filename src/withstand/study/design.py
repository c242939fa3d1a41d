"""The model matrix, factored once, with the columns that departures and procedures look at."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from withstand.errors import DesignError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

RANK_TOLERANCE = 1e-10
"""Smallest accepted ratio of a diagonal element of R to the norm of its column of X."""

FULL_LEVERAGE = 1.0 - 1e-9
"""A leverage at or above this counts as 1: the row fits itself and has no residual."""


@dataclass(frozen=True)
class Factor:
    """A categorical column: `codes` (n,) index into `levels`."""

    codes: Ints
    levels: tuple[str, ...]

    def rows(self, index: Ints) -> Factor:
        """The same factor on the rows `index`."""
        return Factor(self.codes[index], self.levels)


@dataclass(frozen=True, eq=False)
class Design:
    """A full-rank model matrix with its rows in analysis order (time order where there is one).

    Parameters
    ----------
    X : ndarray of shape (n, p)
        Model matrix, in the units of the predictors.
    names : tuple of str, length p
        Names of its columns.
    columns : mapping of str to ndarray of shape (n,)
        Numeric data columns, by name, in their own units.
    factors : mapping of str to Factor
        Categorical data columns.
    fitted : ndarray of shape (n,), optional
        Reference fitted mean, in the unit of the response.
    order : ndarray of shape (n,), optional
        Position along the order column; never decreasing.
    groups : ndarray of shape (n,), optional
        Cluster codes 0..G-1.
    weights : ndarray of shape (n,), optional
        Known weights, proportional to the reciprocal of the error variance.

    Raises
    ------
    DesignError
        If n <= p or X has not full column rank.
    """

    X: Floats
    names: tuple[str, ...]
    columns: Mapping[str, Floats] = field(default_factory=dict)
    factors: Mapping[str, Factor] = field(default_factory=dict)
    fitted: Floats | None = None
    order: Floats | None = None
    groups: Ints | None = None
    weights: Floats | None = None

    def __post_init__(self) -> None:
        n, p = self.X.shape
        if n <= p:
            raise DesignError(
                f"{n} rows cannot carry a model with {p} columns ({_listed(self.names)})",
                remedy="Collect more rows or drop terms; at least one residual degree of freedom is needed.",
            )
        short = np.abs(np.diag(self.R)) <= RANK_TOLERANCE * np.linalg.norm(self.X, axis=0)
        if short.any():
            place = int(np.argmax(short))
            raise DesignError(
                f"the model matrix has rank below {p}: column '{self.names[place]}' is a combination of the columns before it "
                f"({_listed(self.names[:place])})",
                remedy="Drop one of the terms involved; an empty cell of an interaction has the same effect.",
            )

    @property
    def n(self) -> int:
        """Number of rows."""
        return self.X.shape[0]

    @property
    def p(self) -> int:
        """Number of model columns."""
        return self.X.shape[1]

    @property
    def df(self) -> int:
        """Residual degrees of freedom, n - p."""
        return self.n - self.p

    @cached_property
    def _qr(self) -> tuple[Floats, Floats]:
        Q, R = np.linalg.qr(self.X)
        return np.ascontiguousarray(Q), R

    @property
    def Q(self) -> Floats:
        """Orthonormal basis of the model space, (n, p)."""
        return self._qr[0]

    @property
    def R(self) -> Floats:
        """Upper triangular factor, X = Q R, (p, p)."""
        return self._qr[1]

    @cached_property
    def leverage(self) -> Floats:
        """Diagonal of the projection on the model space, (n,), in [0, 1]."""
        return np.einsum("ij,ij->i", self.Q, self.Q)

    @cached_property
    def saturated_rows(self) -> Ints:
        """Rows with leverage 1: they fit themselves."""
        return np.flatnonzero(self.leverage >= FULL_LEVERAGE)

    @property
    def group_count(self) -> int:
        """Number of clusters; 0 without groups."""
        return 0 if self.groups is None else int(self.groups.max()) + 1

    def estimator(self, L: Floats) -> Floats:
        """Rows A with L b = A y for the least-squares coefficients b.

        Parameters
        ----------
        L : ndarray of shape (k, p)
            Linear quantities of the coefficients.

        Returns
        -------
        ndarray of shape (k, n)
            L R^-1 Q'.
        """
        return self.basis_rows(L) @ self.Q.T

    def basis_rows(self, L: Floats) -> Floats:
        """L R^-1, (k, p): the focal quantities in the coordinates of Q."""
        return np.asarray(solve_triangular(self.R, L.T, trans="T").T)

    def coefficients(self, y: Floats) -> Floats:
        """Least-squares coefficients of y, (p,) or (p, B)."""
        return np.asarray(solve_triangular(self.R, self.Q.T @ y))

    @cached_property
    def weighted(self) -> Design:
        """The design of the weighted fit: rows multiplied by the square root of their weight.

        Raises
        ------
        DesignError
            Without weights.
        """
        if self.weights is None:
            raise DesignError("no known weights in this study", remedy='Name a column: weights = "...".')
        return Design(
            X=self.X * np.sqrt(self.weights)[:, None],
            names=self.names,
            columns=self.columns,
            factors=self.factors,
            fitted=self.fitted,
            order=self.order,
            groups=self.groups,
        )

    def rows(self, index: Ints) -> Design:
        """The design on the rows `index` (which may repeat), groups renumbered."""
        groups = None
        if self.groups is not None:
            groups = np.unique(self.groups[index], return_inverse=True)[1].astype(np.int64)
        return Design(
            X=self.X[index],
            names=self.names,
            columns={name: values[index] for name, values in self.columns.items()},
            factors={name: factor.rows(index) for name, factor in self.factors.items()},
            fitted=None if self.fitted is None else self.fitted[index],
            order=None if self.order is None else self.order[index],
            groups=groups,
            weights=None if self.weights is None else self.weights[index],
        )


def _listed(names: tuple[str, ...]) -> str:
    """Names for a message, not more than can be read."""
    more = f" and {len(names) - 12} more" if len(names) > 12 else ""
    return ", ".join(names[:12]) + more
