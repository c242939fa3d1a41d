r"""P(Q > 0) for Q = |w|^2 - c^2 V by integrating the moment generating function along a path beside the imaginary axis.

    P(Q > 0) = 1/(2 pi i) * integral over Re s = c > 0 of E[exp(s Q)] / s ds;   over Re s = c < 0 it gives -P(Q < 0).

Any c at which E[exp(c Q)] exists gives the same value; near the saddle point of the integrand it is a sum of terms no larger
than the answer, so that small probabilities keep their leading digits (Rice 1980, SIAM J. Sci. Stat. Comput. 1:438; Lugannani
& Rice 1980).

The line may be bent, see `path`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from withstand.errors import NumericalError
from withstand.exact.path import Path, hyperbola, log_mgf
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
        self._paths: dict[tuple[float, float, float], Path] = {}
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
        exists = np.isfinite(log_mgf(found, grid, np.zeros((1, self.problem.k)))[0])
        last = grid[exists].max()
        close = last + (2.0**0.5 - 1.0) * last * (1.0 - np.exp2(-np.arange(1.0, 7.0)))
        grid = np.concatenate([grid[exists], close])
        found = join([found.at(np.flatnonzero(exists)), self.tilt(close)])
        exists = np.isfinite(log_mgf(found, grid, np.zeros((1, self.problem.k)))[0])
        return grid[exists], found.at(np.flatnonzero(exists))

    def _saddles(self, d: Floats) -> tuple[Ints, Floats]:
        """For each effect (E, k) the candidate at which E[exp(s Q)]/|s| is least, and the logarithm of that."""
        for _ in range(_EXTENSIONS):
            heights = log_mgf(self._grid_tilt, self._grid, d).real - np.log(np.abs(self._grid))
            best = np.argmin(np.where(np.isnan(heights), np.inf, heights), axis=1)
            innermost = np.abs(self._grid).min()
            if np.all(np.abs(self._grid[best]) > innermost):
                break
            # Far effects, or a bias of many SDs, have their saddle close to 0.
            finer = innermost * np.exp2(-np.arange(1.0, 9.0))
            finer = np.concatenate([-finer, finer])
            self._grid = np.concatenate([self._grid, finer])
            self._grid_tilt = join([self._grid_tilt, self.tilt(finer)])
        return best, heights[np.arange(len(d)), best]

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
        best, least = self._saddles(d)
        for index in np.unique(best):
            chosen = best == index
            values[:, chosen], error[chosen] = self._integrate(float(self._grid[index]), d[chosen], sides)
        # Chernoff's bound: P(Q > 0) <= E[exp(c Q)] for c > 0, and likewise below 0. Where an integral fails at the edge of what
        # exists or of what can be written down, the probability is mostly zero to more decimals than are wanted.
        bound = np.exp(np.minimum(least + np.log(np.abs(self._grid[best])), 0.0))
        nothing = ~(error <= WANTED) & (bound <= WANTED)
        values[:, nothing], error[nothing] = 0.0, bound[nothing]
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
        """The integral through c for effects d (E, k), see Path.integrate; effects that suit the same path share it."""
        scales = self._scales(c, d)
        bends = np.empty(len(d))
        for scale in np.unique(scales):
            bends[scales == scale] = self._bends(c, float(scale), d[scales == scale])
        values, error = np.empty((3, len(d))), np.empty(len(d))

        def follow(those: Ints) -> None:
            for scale, bend in sorted(set(zip(scales[those].tolist(), bends[those].tolist(), strict=True))):
                chosen = those[(scales[those] == scale) & (bends[those] == bend)]
                if (c, scale, bend) not in self._paths:
                    self._paths[c, scale, bend] = Path(self.tilt, c, scale, bend, self.problem.n)
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
        fall = np.diff(log_mgf(self.tilt(aside), aside, d).real, axis=1)[:, 0]
        curvature = -2.0 * fall / (0.1 * c) ** 2 + 1.0 / c**2
        return np.asarray(abs(c) * np.exp2(np.floor(np.log2(_WIDTH / (abs(c) * np.sqrt(curvature))))))

    def _bends(self, c: float, scale: float, d: Floats) -> Floats:
        """Bends (E,) with which the integrand falls fastest along the path."""
        if (c, scale) not in self._trials:
            s, weights = hyperbola(c, scale, _BENDS[:, None], _LOOKS[None, :])
            self._trials[c, scale] = s.ravel(), weights.ravel(), self.tilt(s.ravel())
        s, weights, found = self._trials[c, scale]
        log_moduli = log_mgf(found, s, d).real + np.log(np.abs(weights / s))
        heights = np.where(np.isnan(log_moduli), np.inf, log_moduli).reshape(len(d), len(_BENDS), len(_LOOKS))
        return np.asarray(_BENDS[np.argmin(np.logaddexp.reduce(heights, axis=2), axis=1)])
