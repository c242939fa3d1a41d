r"""Exponentially tilted laws: everything exact rests on E[exp(-theta V / 2); w], V = e' D e, for many complex theta at once.

Write G = Sigma^-1 + theta D, and eliminate the errors from the quadratic form in (errors, coordinates b = Q'errors, multipliers
that keep the residuals orthogonal to Q). What is left are three small matrices that involve no difference of large numbers,

    A = P'(Sigma^-1 - Sigma^-1 G^-1 Sigma^-1)P,   B = P' Sigma^-1 G^-1 Q,   C = Q' G^-1 Q,

P being Q, with the residual mean nu as a further column where there is one, and det(I + theta Sigma D). The Schur complement
S = A + B C^-1 B' is the precision of b under the tilt; its column of nu carries the mean.

For theta with positive real part every matrix met here is complex symmetric with a positive definite real part. Such matrices
need no pivoting (Higham 1998, Mathematics of Computation 67:1591), and the logarithm of their determinant on the right branch
is the sum of the principal logarithms of the pivots: no phase has to be unwrapped.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Values = NDArray[Any]
"""Real or complex, as theta is."""


@dataclass(frozen=True, eq=False)
class Pieces:
    """What a structure gives for theta (t,): r = p, or p + 1 with a residual mean.

    Parameters
    ----------
    log_determinant : ndarray of shape (t,)
        Log det(I + theta Sigma D); not finite where a real theta is out of range.
    A : ndarray of shape (r, r, t)
    B : ndarray of shape (r, p, t)
    C : ndarray of shape (p, p, t)
    """

    log_determinant: Values
    A: Values
    B: Values
    C: Values


class Structure(Protocol):
    """The covariance and D of one problem, in a shape whose pieces can be had without an n x n matrix."""

    def pieces(self, theta: Values) -> Pieces:
        """The pieces for theta (t,), real or complex."""


@dataclass(frozen=True, eq=False)
class Tilt:
    """E[exp(-theta V/2); w in dw] = (2 pi)^(-k/2) exp(log_mass - w' precision w / 2 + linear' w) dw.

    Parameters
    ----------
    log_mass : ndarray of shape (t,)
    precision : ndarray of shape (t, k, k)
    linear : ndarray of shape (t, k)
    """

    log_mass: Values
    precision: Values
    linear: Values

    def log_laplace(self) -> Values:
        """Log E[exp(-theta V/2)], (t,)."""
        return self.log_integral(0.0, np.zeros((1, self.linear.shape[1])))[0]

    def log_integral(self, s: Values | float, d: Values) -> Values:
        """Log of the integral of exp(s |w + d|^2) under the tilt.

        Parameters
        ----------
        s : ndarray of shape (t,)
            Not finite in the result where a real s is too large.
        d : ndarray of shape (E, k)

        Returns
        -------
        ndarray of shape (E, t)

        Notes
        -----
        With F = precision - 2 s, completing the square leaves b'F^-1 b / 2 + 2 s d'F^-1 b + s d'F^-1 P d in the exponent
        (b linear, P precision), in which nothing cancels for large s.
        """
        k = self.linear.shape[1]
        s = np.asarray(s) * np.ones(self.log_mass.shape)
        if k == 1:
            P, b = self.precision[:, 0, 0], self.linear[:, 0]
            F = P - 2.0 * s
            return self.log_mass - 0.5 * np.log(F) + (0.5 * b**2 + s * d * (2.0 * b + P * d)) / F
        F = self.precision - 2.0 * s[:, None, None] * np.eye(k)
        log_pivots, _ = eliminate(np.moveaxis(F, 0, 2).copy(), k)
        # At the very end of its range a real s leaves a pivot that is nothing but rounding; F may be singular to the solver.
        usable = np.isfinite(log_pivots) & (np.linalg.slogdet(np.where(np.isfinite(F), F, 0.0))[0] != 0.0)
        right = np.concatenate([self.linear[:, :, None], self.precision @ d.T], axis=2)
        solved = np.full(right.shape, np.nan, dtype=right.dtype)
        solved[usable] = np.linalg.solve(F[usable], right[usable])
        own, moved = solved[:, :, 0], solved[:, :, 1:]
        energy = 0.5 * np.sum(self.linear * own, axis=1) + 2.0 * s * (d @ own.T)
        return self.log_mass - 0.5 * log_pivots + energy + s * np.einsum("ek,tke->et", d, moved)

    def at(self, index: Values) -> Tilt:
        """The tilt at some of the theta."""
        return Tilt(self.log_mass[index], self.precision[index], self.linear[index])


def join(parts: Sequence[Tilt]) -> Tilt:
    """Tilts one after another."""
    return Tilt(*(np.concatenate([getattr(part, name) for part in parts]) for name in ("log_mass", "precision", "linear")))


def tilt(structure: Structure, theta: Values, k: int, added: float) -> Tilt:
    """The tilted law of w.

    Parameters
    ----------
    structure : Structure
        Its last k columns of Q are the focal directions.
    theta : ndarray of shape (t,)
        Real or complex; not finite results where a real theta is out of range.
    k : int
        Focal coordinates.
    added : float
        Variance of an independent normal variable added to w (k = 1).
    """
    with np.errstate(all="ignore"):
        pieces = structure.pieces(theta)
        p = pieces.C.shape[0]
        r = pieces.A.shape[0]
        bordered = np.empty((p + r, p + r, theta.size), dtype=pieces.A.dtype)
        bordered[:p, :p] = pieces.C
        bordered[p:, :p] = -pieces.B
        bordered[:p, p:] = pieces.B.transpose(1, 0, 2)
        bordered[p:, p:] = pieces.A
        log_pivots, rest = eliminate(bordered, 2 * p - k)
        log_mass = -0.5 * (pieces.log_determinant + log_pivots)
        precision = rest[:k, :k].transpose(2, 0, 1)
        linear = np.zeros((theta.size, k), dtype=rest.dtype)
        if r > p:
            log_mass = log_mass - 0.5 * rest[k, k]
            linear = rest[:k, k].T
        if added > 0.0:
            # Convolution of the tilted density, normal in shape, with that of the added variable.
            widened = 1.0 + added * precision[:, 0, 0]
            log_mass = log_mass - 0.5 * np.log(widened) + 0.5 * added * linear[:, 0] ** 2 / widened
            precision = precision / widened[:, None, None]
            linear = linear / widened[:, None]
        return Tilt(log_mass, precision, linear)


def eliminate(M: Values, count: int) -> tuple[Values, Values]:
    """Gaussian elimination without pivoting, for many matrices at once.

    Parameters
    ----------
    M : ndarray of shape (m, m, t)
        Overwritten.
    count : int
        Leading pivots to take.

    Returns
    -------
    log_pivots : ndarray of shape (t,)
        Sum of the principal logarithms of the pivots; not finite where a real pivot is not positive.
    rest : ndarray of shape (m - count, m - count, t)
        The Schur complement.
    """
    with np.errstate(all="ignore"):
        for i in range(count):
            M[i + 1 :, i + 1 :] -= M[i + 1 :, i, None] * (M[i, i + 1 :] / M[i, i])
        pivots = np.arange(count)
        return np.log(M[pivots, pivots]).sum(axis=0), M[count:, count:]
