r"""Paths for the inversion of a moment generating function, and sums along them.

The integrand is analytic off the real axis: E[exp(s Q)] is singular where 2 s is a reciprocal eigenvalue of Sigma times the
matrix of Q, and these are real. So the line may be bent into the branch of a hyperbola

    s = c + h (sin(phi) (cosh x - 1) + i cos(phi) sinh x),

on which the sum over equally spaced x converges geometrically. With many rows V hardly varies, so along the line the integrand
turns many times before it has decayed; bent to the right (phi > 0) it decays like exp(-s c^2 V) instead.

The logarithms need no unwrapping on the bent path either: with P(theta) the tilted precision of w, theta = 2 c^2 s, the
imaginary part of P(theta)/theta is negative definite for Im s > 0 (P is a matrix-valued complete Bernstein function), so all
pivots of P - 2 s I have arguments between arg(s) - pi and arg(s).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import wofz

from withstand.exact.tilt import Tilt, Values
from withstand.study.design import Floats

_STEP = 0.5
_BLOCK = 14
_BLOCKS = 40
_LEVELS = 7
_NEGLIGIBLE = 1e-12
_AIM = 1e-9
"""Relative error at which the step is not halved again."""


def log_mgf(found: Tilt, s: Values, d: Floats) -> Values:
    """Log E[exp(s Q)], (E, t), for effects d (E, k); not finite where it does not exist."""
    with np.errstate(all="ignore"):
        return found.log_integral(s, d)


def hyperbola(c: float, scale: float, bend: Floats | float, x: Values) -> tuple[Values, Values]:
    """Points s(x) of the path through c and their weights s'(x)/i.

    Parameters
    ----------
    c, scale : float
        Where it crosses the real axis, and h.
    bend : float or ndarray
        phi, in radians; 0 for a straight line.
    x : ndarray
        Not negative.
    """
    s = c + scale * (np.sin(bend) * (np.cosh(x) - 1.0) + 1j * np.cos(bend) * np.sinh(x))
    return s, scale * (np.cos(bend) * np.cosh(x) - 1j * np.sin(bend) * np.sinh(x))


class Path:
    """One path with its nodes, computed block by block and level by level, and kept.

    Parameters
    ----------
    tilt : callable
        Gives the tilts at s (t,).
    c, scale, bend : float
        See `hyperbola`.
    n : int
        Rows of the design, from which rounding is guessed.
    """

    def __init__(self, tilt: Callable[[Values], Tilt], c: float, scale: float, bend: float, n: int) -> None:
        self._tilt, self._c, self._scale, self._bend = tilt, c, scale, bend
        self._rounding = 4e-16 * float(np.sqrt(n))
        self._nodes: dict[tuple[int, int], tuple[Values, Values, Tilt]] = {}

    def integrate(self, d: Floats, sides: bool) -> tuple[Floats, Floats]:
        """Integrate over both halves of the path.

        Parameters
        ----------
        d : ndarray of shape (E, k)
            Effects, the bias included.
        sides : bool
            Whether to tell the sides apart.

        Returns
        -------
        values : ndarray of shape (3, E)
            The whole and its parts from w + d < 0 and w + d > 0; the latter 0 where they are not asked for.
        error : ndarray of shape (E,)
            Of each of them; infinite or not a number where the sums went astray.
        """
        # What overflows or is not a number makes the error infinite or not a number, which is refused in the end.
        with np.errstate(all="ignore"):
            return self._sum(d, sides)

    def _sum(self, d: Floats, sides: bool) -> tuple[Floats, Floats]:
        size = np.zeros(len(d))
        total = np.zeros((3, len(d)))
        for blocks in range(1, _BLOCKS + 1):
            terms, magnitudes, last = self._terms(0, blocks - 1, d, sides)
            total += terms
            size += magnitudes
            if np.all(last <= _NEGLIGIBLE * np.maximum(np.abs(total[0]), 1e-6 * size)):
                break
        factor = _STEP / np.pi
        value, cut = factor * total, factor * last * 4.0 / _STEP
        error = np.full(len(d), np.inf)
        for level in range(1, _LEVELS + 1):
            for block in range(blocks):
                terms, magnitudes, _ = self._terms(level, block, d, sides)
                total += terms
                size += magnitudes
            factor = _STEP / 2.0**level / np.pi
            finer, whole = factor * total, factor * size
            # Sums that underflow altogether are zero to 300 decimals.
            change = np.max(np.abs(finer - value), axis=0) / np.maximum(whole, np.finfo(np.float64).tiny)
            value = finer
            # Halving squares the relative error of a geometrically convergent sum; the power 1.5 leaves room.
            rounding = self._rounding * whole
            error = whole * change**1.5 + cut + rounding
            if np.all(error <= np.maximum(_AIM * np.abs(value[0]), 2.0 * (rounding + cut))):
                break
        return value, error

    def _terms(self, level: int, block: int, d: Floats, sides: bool) -> tuple[Floats, Floats, Floats]:
        """Sums of terms (3, E), of their moduli (E,), and the last modulus (E,)."""
        s, weight, found = self._at(level, block)
        whole = np.exp(log_mgf(found, s, d))
        parts = whole[None]
        if sides:
            parts = np.stack([whole, *split(found, s, d[:, 0], whole)])
        terms = parts * (weight / s)
        result = np.zeros((3, len(d)))
        result[: len(terms)] = terms.real.sum(axis=2)
        moduli = np.abs(terms).max(axis=0)
        return result, moduli.sum(axis=1), moduli[:, -1]

    def _at(self, level: int, block: int) -> tuple[Values, Values, Tilt]:
        if (level, block) not in self._nodes:
            if level > 1:
                self._nodes[level, block] = self._evaluate(np.arange(1.0, _BLOCK * 2.0**level, 2.0) / 2.0**level, block)
            else:
                # The first halving is always wanted, and one call for many nodes is cheaper than two.
                s, weight, found = self._evaluate(np.arange(2.0 * _BLOCK) / 2.0, block)
                if block == 0:
                    weight[0] *= 0.5
                for parity in (0, 1):
                    those = np.arange(parity, 2 * _BLOCK, 2)
                    self._nodes[parity, block] = s[those], weight[those], found.at(those)
        return self._nodes[level, block]

    def _evaluate(self, steps: Floats, block: int) -> tuple[Values, Values, Tilt]:
        """Nodes, weights and tilts at steps counted from the beginning of a block."""
        s, weight = hyperbola(self._c, self._scale, self._bend, _STEP * (block * _BLOCK + steps))
        return s, weight, self._tilt(s)


def split(found: Tilt, s: Values, d: Floats, whole: Values) -> tuple[Values, Values]:
    """The integral of exp(s (w + d)^2) under the tilt over w + d < 0 and w + d > 0, each (E, t)."""
    precision, linear = found.precision[:, 0, 0], found.linear[:, 0]
    root = np.sqrt(precision - 2.0 * s)
    zeta = (linear + precision * d[:, None]) / root
    sign = np.where(zeta.real < 0.0, -1.0, 1.0)
    # exp(zeta^2/2) Phi(-sign zeta) = w(i sign zeta / sqrt 2)/2 with Faddeeva's w, bounded in this half-plane; what the
    # exponent is without zeta^2/2 is its value at w = -d.
    log_edge = found.log_mass - 0.5 * precision * d[:, None] ** 2 - linear * d[:, None] - np.log(root)
    small = 0.5 * np.exp(log_edge) * wofz(1j * sign * zeta / np.sqrt(2.0))
    return np.where(sign > 0.0, small, whole - small), np.where(sign > 0.0, whole - small, small)
