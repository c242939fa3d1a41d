r"""P(Q > 0) for Q = |w|^2 - c^2 V by integrating the moment generating function along a path beside the imaginary axis.

    P(Q > 0) = 1/(2 pi i) * integral over Re s = c > 0 of E[exp(s Q)] / s ds;   over Re s = c < 0 it gives -P(Q < 0).

Any c at which E[exp(c Q)] exists gives the same value; near the saddle point of the integrand it is a sum of terms no larger
than the answer, so that small probabilities keep their leading digits (Rice 1980, SIAM J. Sci. Stat. Comput. 1:438; Lugannani
& Rice 1980).

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

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, wofz

from withstand.errors import NumericalError
from withstand.exact.problem import Problem
from withstand.exact.structure import structure_of
from withstand.exact.tilt import Structure, Tilt, Values, join, tilt
from withstand.study.design import Floats, Ints

WANTED = 1e-8
"""Largest accepted absolute error of a probability."""

_WIDTH = 0.8
"""Scale of a path in units of the width of the saddle."""

_BENDS = np.array([-0.25, -0.125, 0.0, 0.125, 0.25]) * np.pi
_LOOKS = np.array([1.0, 2.0, 3.0, 4.0, 6.0, 9.0])
"""Bends among which a path is chosen, and the x at which they are compared."""

_POOR = 1e-4
"""Relative error at which a bent path is given up for the straight one."""

_EXTENSIONS = 8
"""How often the candidates are carried on towards 0, each time by eight octaves."""

_STEP = 0.5
_BLOCK = 14
_BLOCKS = 40
_LEVELS = 7
_NEGLIGIBLE = 1e-12
_AIM = 1e-9
"""Relative error at which the step is not halved again."""


@dataclass(frozen=True, eq=False)
class Probabilities:
    """For each of E effects, (E,).

    Parameters
    ----------
    beyond, within : ndarray
        P(|w| > c sqrt V) and its complement, each computed without loss where it is the smaller.
    below, above : ndarray or None
        The two parts of `beyond`: w < 0 and w > 0; None for several focal coordinates.
    error : ndarray
        Estimate, on the safe side, of the absolute error of each, from the convergence of the sums and rounding.
    """

    beyond: Floats
    within: Floats
    below: Floats | None
    above: Floats | None
    error: Floats


class Inverter:
    """Probabilities of one problem at any effects; tilts are computed once and kept.

    Parameters
    ----------
    problem : Problem
        The question.
    structure : Structure, optional
        Another structure than the cheapest that carries it, for comparison.
    """

    def __init__(self, problem: Problem, structure: Structure | None = None) -> None:
        self.problem = problem
        self.structure = structure_of(problem) if structure is None else structure
        self.variance = self._variance()
        self._paths: dict[tuple[float, float, float], _Path] = {}
        self._trials: dict[tuple[float, float], tuple[Values, Values, Tilt]] = {}
        self._grid, self._grid_tilt = self._candidates()

    def _variance(self) -> float:
        """Largest variance of a focal coordinate, new response included."""
        focal = self.problem.Q[:, -self.problem.k :]
        return float(np.linalg.eigvalsh(focal.T @ self.problem.covariance(focal))[-1]) + self.problem.added

    def tilt(self, s: Values) -> Tilt:
        """The tilt at s (t,), real or complex."""
        return tilt(self.structure, 2.0 * self.problem.threshold * s, self.problem.k, self.problem.added)

    def _candidates(self) -> tuple[Floats, Tilt]:
        """Real s of both signs at which E[exp(s Q)] exists, and their tilts."""
        grid = np.exp2(np.arange(-9.0, 3.01, 0.5)) / (2.0 * self.variance)
        grid = np.concatenate([-grid, grid])
        found = self.tilt(grid)
        exists = np.isfinite(self._log_mgf(found, grid, np.zeros((1, self.problem.k)))[0])
        last = grid[exists].max()
        close = last + (2.0**0.5 - 1.0) * last * (1.0 - np.exp2(-np.arange(1.0, 7.0)))
        grid = np.concatenate([grid[exists], close])
        found = join([found.at(np.flatnonzero(exists)), self.tilt(close)])
        exists = np.isfinite(self._log_mgf(found, grid, np.zeros((1, self.problem.k)))[0])
        return grid[exists], found.at(np.flatnonzero(exists))

    def _saddles(self, d: Floats) -> Ints:
        """For each effect (E, k) the candidate at which E[exp(s Q)]/|s| is least."""
        for _ in range(_EXTENSIONS):
            heights = self._log_mgf(self._grid_tilt, self._grid, d).real - np.log(np.abs(self._grid))
            best = np.argmin(np.where(np.isnan(heights), np.inf, heights), axis=1)
            least = np.abs(self._grid).min()
            if np.all(np.abs(self._grid[best]) > least):
                break
            # Far effects, or a bias of many SDs, have their saddle close to 0.
            finer = least * np.exp2(-np.arange(1.0, 9.0))
            finer = np.concatenate([-finer, finer])
            self._grid = np.concatenate([self._grid, finer])
            self._grid_tilt = join([self._grid_tilt, self.tilt(finer)])
        return best

    @staticmethod
    def _log_mgf(found: Tilt, s: Values, d: Floats) -> Values:
        with np.errstate(all="ignore"):
            return found.log_integral(s, d)

    def probabilities(self, effects: Floats, *, sides: bool = False) -> Probabilities:
        """Probabilities that the test rejects.

        Parameters
        ----------
        effects : ndarray of shape (E, k)
            True minus hypothesised value, in the coordinates of w.
        sides : bool
            Whether to tell the sides apart (k = 1).

        Raises
        ------
        NumericalError
            If WANTED is not reached.
        """
        d = self.problem.shift + effects
        values = np.empty((3, len(d)))
        error = np.empty(len(d))
        best = self._saddles(d)
        for index in np.unique(best):
            chosen = best == index
            values[:, chosen], error[chosen] = self._integrate(float(self._grid[index]), d[chosen], sides)
        if not np.all(error <= WANTED):
            raise NumericalError(
                f"an exact probability was reached to {np.nan_to_num(error, nan=np.inf).max():.1e} only, with {WANTED:.0e} "
                f"wanted ({self.problem.n} rows, {self.problem.p} columns)"
            )
        negative = self._grid[best] < 0.0
        main = np.clip(np.where(negative, -values[0], values[0]), 0.0, 1.0)
        beyond, within = np.where(negative, 1.0 - main, main), np.where(negative, main, 1.0 - main)
        if not sides:
            return Probabilities(beyond, within, None, None, error)
        mean = d[:, 0] / np.sqrt(self.variance)
        below = np.clip(values[1] + np.where(negative, ndtr(-mean), 0.0), 0.0, 1.0)
        above = np.clip(values[2] + np.where(negative, ndtr(mean), 0.0), 0.0, 1.0)
        return Probabilities(beyond, within, below, above, error)

    def _integrate(self, c: float, d: Floats, sides: bool) -> tuple[Floats, Floats]:
        """The integral through c for effects d (E, k), see _Path.integrate; effects that suit the same path share it."""
        scales = self._scales(c, d)
        bends = np.empty(len(d))
        for scale in np.unique(scales):
            bends[scales == scale] = self._bends(c, float(scale), d[scales == scale])
        values, error = np.empty((3, len(d))), np.empty(len(d))

        def follow(those: Ints) -> None:
            for scale, bend in sorted(set(zip(scales[those].tolist(), bends[those].tolist(), strict=True))):
                chosen = those[(scales[those] == scale) & (bends[those] == bend)]
                if (c, scale, bend) not in self._paths:
                    self._paths[c, scale, bend] = _Path(self, c, scale, bend)
                values[:, chosen], error[chosen] = self._paths[c, scale, bend].integrate(d[chosen], sides)

        follow(np.arange(len(d)))
        # Along the straight line the integrand never rises above its value at c; a bend may have met a hill further out.
        poor = ~(error <= np.minimum(WANTED, _POOR * np.abs(values[0]))) & (bends != 0.0)
        bends[poor] = 0.0
        follow(np.flatnonzero(poor))
        return values, error

    def _scales(self, c: float, d: Floats) -> Floats:
        """Scales (E,) that fit the curvature of the integrand at c; powers of two times c, so that few are different."""
        aside = np.array([c, c + 0.1j * abs(c)])
        fall = np.diff(self._log_mgf(self.tilt(aside), aside, d).real, axis=1)[:, 0]
        curvature = -2.0 * fall / (0.1 * c) ** 2 + 1.0 / c**2
        return np.asarray(abs(c) * np.exp2(np.floor(np.log2(_WIDTH / (abs(c) * np.sqrt(curvature))))))

    def _bends(self, c: float, scale: float, d: Floats) -> Floats:
        """Bends (E,) with which the integrand falls fastest along the path."""
        if (c, scale) not in self._trials:
            s, weights = _hyperbola(c, scale, _BENDS[:, None], _LOOKS[None, :])
            self._trials[c, scale] = s.ravel(), weights.ravel(), self.tilt(s.ravel())
        s, weights, found = self._trials[c, scale]
        log_moduli = self._log_mgf(found, s, d).real + np.log(np.abs(weights / s))
        heights = np.where(np.isnan(log_moduli), np.inf, log_moduli).reshape(len(d), len(_BENDS), len(_LOOKS))
        return np.asarray(_BENDS[np.argmin(np.logaddexp.reduce(heights, axis=2), axis=1)])


def _hyperbola(c: float, scale: float, bend: Floats | float, x: Values) -> tuple[Values, Values]:
    """Points s(x) of a path and their weights s'(x)/i."""
    s = c + scale * (np.sin(bend) * (np.cosh(x) - 1.0) + 1j * np.cos(bend) * np.sinh(x))
    return s, scale * (np.cos(bend) * np.cosh(x) - 1j * np.sin(bend) * np.sinh(x))


class _Path:
    """Nodes on one path, computed block by block and level by level."""

    def __init__(self, inverter: Inverter, c: float, scale: float, bend: float) -> None:
        self._inverter, self._c, self._scale, self._bend = inverter, c, scale, bend
        self._nodes: dict[tuple[int, int], tuple[Values, Values, Tilt]] = {}

    def integrate(self, d: Floats, sides: bool) -> tuple[Floats, Floats]:
        """Integrals of the whole and of its two sides, (3, E), and the error, (E,)."""
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
            rounding = 4e-16 * np.sqrt(self._inverter.problem.n) * whole
            error = whole * change**1.5 + cut + rounding
            if np.all(error <= np.maximum(_AIM * np.abs(value[0]), 2.0 * (rounding + cut))):
                break
        return value, error

    def _terms(self, level: int, block: int, d: Floats, sides: bool) -> tuple[Floats, Floats, Floats]:
        """Sums of terms (3, E), of their moduli (E,), and the last modulus (E,)."""
        s, weight, found = self._at(level, block)
        log_mgf = self._inverter._log_mgf(found, s, d)
        parts = np.exp(log_mgf)[None]
        if sides:
            parts = np.stack([parts[0], *_split(found, s, d[:, 0], parts[0])])
        terms = parts * (weight / s)
        result = np.zeros((3, len(d)))
        result[: len(terms)] = terms.real.sum(axis=2)
        moduli = np.abs(terms).max(axis=0)
        return result, moduli.sum(axis=1), moduli[:, -1]

    def _at(self, level: int, block: int) -> tuple[Values, Values, Tilt]:
        if (level, block) not in self._nodes:
            step = _STEP / 2.0**level
            inner = np.arange(_BLOCK) if level == 0 else np.arange(1.0, _BLOCK * 2.0**level, 2.0)
            x = block * _BLOCK * _STEP + inner * step
            s, weight = _hyperbola(self._c, self._scale, self._bend, x)
            if level == 0 and block == 0:
                weight[0] *= 0.5
            self._nodes[level, block] = s, weight, self._inverter.tilt(s)
        return self._nodes[level, block]


def _split(found: Tilt, s: Values, d: Floats, whole: Values) -> tuple[Values, Values]:
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
