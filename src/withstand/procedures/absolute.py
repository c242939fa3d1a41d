"""Least absolute deviations for all replicates at once: a simplex that walks along edges, with exact line searches."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.procedures.fit import Flags
from withstand.study.design import Floats, Ints

_ROUNDS = 20
"""Edges walked at most, a column of the model; and as many more for all."""

_SLACK = 1e-9
"""How far above 1 a dual value may be at the optimum."""

_STILL = 1e-9
"""A row that moves by less than this share of the fastest along an edge counts as standing still."""


@dataclass(eq=False)
class Walkers:
    """Fits on their way, one a line: A of them.

    Parameters
    ----------
    residuals : ndarray of shape (A, n)
        Where they stand.
    signs : ndarray of shape (A, n)
        Side of the fit each row counts on, +1 or -1; 0 in the rows of the basis. A row with residual 0 outside the basis keeps
        a side, so that ties need no special case.
    directions : ndarray of shape (p, p, A)
        Column j of each matrix moves the fit along the edge that leaves row j of the basis and keeps the others fitted.
    basis : ndarray of shape (p, A)
        Rows fitted exactly; -1 where a direction is not tied to a row yet.
    """

    residuals: Floats
    signs: Floats
    directions: Floats
    basis: Ints

    @classmethod
    def start(cls, residuals: Floats, p: int) -> Walkers:
        """At the least-squares fit, with no row tied."""
        count = len(residuals)
        directions = np.repeat(np.eye(p)[:, :, None], count, axis=2)
        signs = np.where(residuals < 0.0, -1.0, 1.0)
        return cls(residuals.copy(), signs, directions, np.full((p, count), -1, dtype=np.int64))

    def some(self, kept: Ints) -> Walkers:
        """Some of them."""
        return Walkers(self.residuals[kept], self.signs[kept], self.directions[..., kept], self.basis[:, kept])

    def gains(self, Q: Floats) -> tuple[Floats, Floats]:
        """How fast the sum of absolute residuals falls along each edge, (p, A), and the dual values, (p, A)."""
        duals = np.einsum("ia,ija->ja", (self.signs @ Q).T, self.directions)
        return np.abs(duals) - (self.basis >= 0), duals

    def walk(self, Q: Floats, gains: Floats, duals: Floats) -> None:
        """Walk every fit along its steepest edge, or one not tied yet, to the best point of it.

        Parameters
        ----------
        Q : ndarray of shape (n, p)
            Basis of the model space.
        gains, duals : ndarray of shape (p, A)
            As `gains` gives them.
        """
        at = np.arange(gains.shape[1])
        steep = gains / np.sqrt(np.einsum("ija,ija->ja", self.directions, self.directions))
        steep[self.basis < 0] += 2.0 * (1.0 + np.abs(steep).max())
        j = np.argmax(steep, axis=0)
        way = np.where(duals[j, at] < 0.0, -1.0, 1.0)
        speed = (self.directions[:, j, at] * way).T @ Q.T
        step, row = self._search(speed, gains[j, at])
        left = self.basis[j, at]
        tied = left >= 0
        speed *= step[:, None]
        self.residuals -= speed
        self.signs[at[tied], left[tied]] = -way[tied]
        self.signs[at, row] = 0.0
        self._pivot(at, j, row, Q)

    def _search(self, speed: Floats, gain: Floats) -> tuple[Floats, Ints]:
        """Length of the walk and the row that ends it, (A,); rows passed change sides.

        The sum of absolute residuals is piecewise linear along an edge: its slope starts at -gain and rises by twice the speed
        of each row that is passed. The walk ends where the slope is no longer negative.
        """
        closing = self.signs * speed
        fastest = np.abs(speed).max(axis=1)
        closing[closing <= _STILL * fastest[:, None]] = 0.0
        times = np.full(closing.shape, np.inf)
        np.divide(np.abs(self.residuals), closing, out=times, where=closing > 0.0)
        order = np.argsort(times, axis=1)
        passed = np.take_along_axis(closing, order, axis=1)
        np.cumsum(passed, axis=1, out=passed)
        enough = np.minimum(0.5 * gain, passed[:, -1] * (1.0 - 1e-12))
        at = np.arange(len(gain))
        row = order[at, np.argmax(passed >= enough[:, None], axis=1)]
        step = times[at, row]
        np.negative(self.signs, out=self.signs, where=times < step[:, None])
        return step, row

    def _pivot(self, at: Ints, j: Ints, row: Ints, Q: Floats) -> None:
        """Tie direction j to the row that ended the walk."""
        ahead = np.einsum("ia,ija->ja", Q[row].T, self.directions)
        column = self.directions[:, j, at] / ahead[j, at]
        ahead[j, at] = 0.0
        self.directions -= column[:, None] * ahead[None]
        self.directions[:, j, at] = column
        self.basis[j, at] = row


def least_absolute(Q: Floats, e: Floats) -> tuple[Floats, Flags]:
    """Minimise sum |e - Q d| for every replicate.

    Parameters
    ----------
    Q : ndarray of shape (n, p)
        Orthonormal basis of the model space.
    e : ndarray of shape (B, n)
        Residuals of the least-squares fits.

    Returns
    -------
    d : ndarray of shape (p, B)
        Least absolute minus least squares; a vertex, one of them where there are several.
    failed : ndarray of bool, shape (B,)
        Where no optimum was reached.

    Notes
    -----
    Exact: d fits p rows, and their dual values lie between -1 and 1 (Barrodale & Roberts 1973 walk the same edges). Replicates
    that have arrived leave.
    """
    B, p = e.shape[0], Q.shape[1]
    d, failed = np.zeros((p, B)), np.zeros(B, dtype=bool)
    going, walkers = np.arange(B), Walkers.start(e, p)
    for _ in range(_ROUNDS * (p + 1)):
        gains, duals = walkers.gains(Q)
        done = (gains.max(axis=0) <= _SLACK) & (walkers.basis >= 0).all(axis=0)
        if done.any():
            d[:, going[done]] = fitted_exactly(Q, e[going[done]], walkers.some(np.flatnonzero(done)))
            left = np.flatnonzero(~done)
            going, walkers, gains, duals = going[left], walkers.some(left), gains[:, left], duals[:, left]
        if going.size == 0:
            break
        walkers.walk(Q, gains, duals)
    failed[going] = True
    return d, failed


def fitted_exactly(Q: Floats, e: Floats, walkers: Walkers) -> Floats:
    """Solve for the coefficients (p, A) that fit the rows of the basis, refined once against the rounding of the walk."""
    rows = Q[walkers.basis]
    wanted = np.take_along_axis(e, walkers.basis.T, axis=1).T
    d = np.einsum("ija,ja->ia", walkers.directions, wanted)
    d += np.einsum("ija,ja->ia", walkers.directions, wanted - np.einsum("jai,ia->ja", rows, d))
    return np.asarray(d)
