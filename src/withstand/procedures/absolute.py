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

_NUDGE = 1e-9
"""Residuals are nudged apart by up to this share of their root mean square, so that tied rows have an order."""

_GOLDEN = 0.6180339887498949


@dataclass(eq=False)
class Walkers:
    """Fits on their way, one a line: A of them.

    Parameters
    ----------
    residuals : ndarray of shape (A, n)
        Where they stand.
    directions : ndarray of shape (p, p, A)
        Column j of each matrix moves the fit along the edge that leaves row j of the basis and keeps the others fitted.
    basis : ndarray of shape (p, A)
        Rows fitted exactly; -1 where a direction is not tied to a row yet.
    work : ndarray of shape (3, at least A, n)
        Scratch space.
    """

    residuals: Floats
    directions: Floats
    basis: Ints
    work: Floats

    @classmethod
    def start(cls, residuals: Floats, p: int) -> Walkers:
        """At the least-squares fit, with no row tied."""
        count = len(residuals)
        directions = np.repeat(np.eye(p)[:, :, None], count, axis=2)
        basis = np.full((p, count), -1, dtype=np.int64)
        return cls(residuals.copy(), directions, basis, np.empty((3, *residuals.shape)))

    def some(self, kept: Ints) -> Walkers:
        """Some of them."""
        return Walkers(self.residuals[kept], self.directions[..., kept], self.basis[:, kept], self.work)

    @property
    def count(self) -> int:
        """A."""
        return len(self.residuals)

    def gains(self, Q: Floats) -> tuple[Floats, Floats]:
        """How fast the sum of absolute residuals falls along each edge, (p, A), and the dual values, (p, A)."""
        signs = np.copysign(1.0, self.residuals, out=self.work[0, : self.count])
        j, a = np.nonzero(self.basis >= 0)
        signs[a, self.basis[j, a]] = 0.0
        duals = np.einsum("ia,ija->ja", Q.T @ signs.T, self.directions)
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
        at = np.arange(self.count)
        steep = gains / np.sqrt(np.einsum("ija,ija->ja", self.directions, self.directions))
        steep[self.basis < 0] += 2.0 * (1.0 + np.abs(steep).max())
        j = np.argmax(steep, axis=0)
        way = np.where(duals[j, at] < 0.0, -1.0, 1.0)
        speed = (self.directions[:, j, at] * way).T @ Q.T
        step, row = self._search(speed, gains[j, at])
        speed *= step[:, None]
        self.residuals -= speed
        # A row just left keeps the side it was left on, even if the walk was no longer than its rounding.
        left = self.basis[j, at]
        tied = np.flatnonzero(left >= 0)
        self.residuals[tied, left[tied]] = -way[tied] * step[tied]
        self._pivot(at, j, row, Q)

    def _search(self, speed: Floats, gain: Floats) -> tuple[Floats, Ints]:
        """Length of the walk and the row that ends it, (A,).

        The sum of absolute residuals is piecewise linear along an edge: its slope starts at -gain and rises by twice the speed
        of each row whose residual changes sign. The walk ends where the slope is no longer negative.
        """
        signs, closing, times = (array[: self.count] for array in self.work)
        np.multiply(signs, speed, out=closing)
        least = _STILL * np.abs(closing).max(axis=1)[:, None]
        # Rows that stand still or draw away have no weight, so it does not matter when their turn comes.
        np.maximum(closing, least, out=closing)
        np.abs(self.residuals, out=times)
        np.divide(times, closing, out=times)
        closing -= least
        total = closing.sum(axis=1)
        # Off 0 and off the total by more than rounding: an edge on which nothing is gained has to end at a row that moves.
        row = first_to_reach(times, closing, np.clip(0.5 * gain, total * 1e-12, total * (1.0 - 1e-12)))
        return times[np.arange(self.count), row], row

    def _pivot(self, at: Ints, j: Ints, row: Ints, Q: Floats) -> None:
        """Tie direction j to the row that ended the walk."""
        ahead = np.einsum("ia,ija->ja", Q[row].T, self.directions)
        column = self.directions[:, j, at] / ahead[j, at]
        ahead[j, at] = 0.0
        self.directions -= column[:, None] * ahead[None]
        self.directions[:, j, at] = column
        self.basis[j, at] = row


def least_absolute(Q: Floats, e: Floats) -> tuple[Floats, Ints, Flags]:
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
    basis : ndarray of shape (p, B)
        The rows it fits.
    failed : ndarray of bool, shape (B,)
        Where no optimum was reached.

    Notes
    -----
    Exact: d fits p rows, and their dual values lie between -1 and 1 (Barrodale & Roberts 1973 walk the same edges). Replicates
    that have arrived leave.
    """
    (B, n), p = e.shape, Q.shape[1]
    d, basis, failed = np.zeros((p, B)), np.zeros((p, B), dtype=np.int64), np.zeros(B, dtype=bool)
    size = _NUDGE * np.sqrt(np.einsum("bt,bt->b", e, e) / n)
    going, walkers = np.arange(B), Walkers.start(e + size[:, None] * (np.arange(1, n + 1) * _GOLDEN % 1.0 - 0.5), p)
    for _ in range(_ROUNDS * (p + 1)):
        gains, duals = walkers.gains(Q)
        arrived = (gains.max(axis=0) <= _SLACK) & (walkers.basis >= 0).all(axis=0)
        if arrived.any():
            some = walkers.some(np.flatnonzero(arrived))
            d[:, going[arrived]] = fitted_exactly(Q, e[going[arrived]], some)
            basis[:, going[arrived]] = some.basis
            left = np.flatnonzero(~arrived)
            going, walkers, gains, duals = going[left], walkers.some(left), gains[:, left], duals[:, left]
            walkers.work[0, : left.size] = walkers.work[0, left]
        if going.size == 0:
            break
        walkers.walk(Q, gains, duals)
    failed[going] = True
    return d, basis, failed


def fitted_exactly(Q: Floats, e: Floats, walkers: Walkers) -> Floats:
    """Solve for the coefficients (p, A) that fit the rows of the basis, refined once against the rounding of the walk."""
    rows = Q[walkers.basis]
    wanted = np.take_along_axis(e, walkers.basis.T, axis=1).T
    d = np.einsum("ija,ja->ia", walkers.directions, wanted)
    d += np.einsum("ija,ja->ia", walkers.directions, wanted - np.einsum("jai,ia->ja", rows, d))
    return np.asarray(d)


def first_to_reach(times: Floats, weights: Floats, enough: Floats) -> Ints:
    """In order of time, the element at which the summed weight reaches enough: a weighted quantile of each line.

    Parameters
    ----------
    times : ndarray of shape (A, n)
        Not negative, finite.
    weights : ndarray of shape (A, n)
        Not negative.
    enough : ndarray of shape (A,)
        Below the sum of the weights.

    Returns
    -------
    ndarray of shape (A,)
        Index of the element.

    Notes
    -----
    Times and indices are sorted as one: the last bits of the time, below its rounding error, give way to the index, and
    doubles that are not negative sort as their bits do. Walks end early as a rule, so that few elements need a full sort.
    """
    A, n = times.shape
    mask = (1 << max(n - 1, 1).bit_length()) - 1
    keys = times.view(np.int64) & ~mask
    keys |= np.arange(n)
    found = np.zeros(A, dtype=np.int64)
    waiting = np.arange(A)
    for some in (max(8, n // 4), n):
        lines = keys if waiting.size == A else keys[waiting]
        if some < n:
            lines.view(np.float64).partition(some - 1, axis=1)
        head = lines[:, :some].copy()
        head.view(np.float64).sort(axis=1)
        head &= mask
        reached = np.cumsum(weights[waiting[:, None], head], axis=1) >= enough[waiting, None]
        place = np.argmax(reached, axis=1)
        at = np.arange(waiting.size)
        found[waiting] = head[at, place]
        waiting = waiting[~reached[at, place]]
        if waiting.size == 0:
            break
    return found
