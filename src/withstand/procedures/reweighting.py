"""The iteration behind M-estimates with a median scale: reweighted least squares far out, Newton's method near the end."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np

from withstand.procedures.fit import Flags
from withstand.procedures.normal import Products, solve
from withstand.study.design import Floats, Ints

NORMAL_MAD = 0.6744897501960817
"""Median absolute deviation of a standard normal variable, the 0.6745 of the textbooks."""

_ROUNDS = 100
"""Rounds of reweighting before a replicate counts as failed."""

_ROUNDS_NEWTON = 40
"""Rounds with Newton's method in between. A replicate that needs more is going in circles, and starts again without."""

_SETTLED = 1e-9
"""The iteration ends when no orthonormal coordinate moves by more than this many scales, about as many standard errors."""

_SETTLED_NEWTON = 1e-7
"""The same for a Newton step, after which the error is about the square of the move, or the move over n at a kink of psi."""

_NEAR = 0.4
"""Newton's method takes over when a reweighting step is below this many scales."""

_LEAP = 10.0
"""A reweighting step that covers 1 - q of the way leaves q / (1 - q) of itself to the Newton step after it: q is up to 0.9."""

_STEEP = 0.1
"""Smallest denominator of the rank-one update that is trusted."""

_COLLAPSED = 1e-10
"""A scale below this share of the first one has collapsed: half of the rows are fitted exactly."""


class Score(Protocol):
    """What an M-estimate does to a residual."""

    def weights(self, u: Floats, out: Floats) -> Floats:
        """psi(u) / u for u = |r| / s >= 0, elementwise, written to `out`."""

    def slope(self, u: Floats, out: Floats) -> Floats:
        """psi'(u), elementwise, written to `out`."""


def middle(absolute: Floats, work: Floats | None = None) -> tuple[Floats, Floats]:
    """The two middle values (equal if n is odd) of each row of absolute residuals (B, n)."""
    n = absolute.shape[1]
    ordered = np.empty_like(absolute) if work is None else work
    ordered[:] = absolute
    ordered.sort(axis=1)
    return ordered[:, (n - 1) // 2].copy(), ordered[:, n // 2].copy()


def mad(absolute: Floats) -> Floats:
    """Median of absolute residuals (B, n) over 0.6745, (B,): the scale of each replicate."""
    low, high = middle(absolute)
    return np.asarray((low + high) / (2.0 * NORMAL_MAD))


@dataclass(eq=False)
class Reweighting:
    """One block's iteration. Replicates are rows here: the median sorts each one, and sorting wants neighbours.

    Parameters
    ----------
    score : Score
        The M-estimate.
    products : Products
        Of the basis Q.
    first : ndarray of shape (B, n)
        Residuals of the least-squares fit.

    Notes
    -----
    Both steps seek sum psi(r / s) q = 0 with s = median |r| / 0.6745. The reweighting step solves Q'WQ d = Q'W r. Newton's
    step replaces W by psi' and lets the scale follow the residuals of the middle rows m: (N - h g') d = Q'W r, N = Q'psi'Q,
    with h = sum psi' r q / s and g = mean of sign(r_m) q_m / 0.6745. A Newton step that does not halve the Newton step
    before it, or is out of proportion to the reweighting step before it, is not taken, and reweighting goes on until the fit is
    ten times nearer. Replicates that come to nothing start again without
    Newton's method, so that a failure is one of reweighting.
    """

    score: Score
    products: Products
    first: Floats

    def run(self) -> tuple[Floats, Flags]:
        """Iterate.

        Returns
        -------
        step : ndarray of shape (B, p)
            M-estimate minus least squares, in the coordinates of Q.
        failed : ndarray of bool, shape (B,)
            No convergence, no solution, or a scale that has collapsed.
        """
        step, failed = self._iterate(_NEAR, _ROUNDS_NEWTON)
        again = np.flatnonzero(failed)
        if again.size:
            step[again], failed[again] = Reweighting(self.score, self.products, self.first[again])._iterate(0.0, _ROUNDS)
        return step, failed

    def _iterate(self, nearness: float, rounds: int) -> tuple[Floats, Flags]:
        """So many rounds, with Newton's method for steps below `nearness`; replicates that have settled leave."""
        B, p = self.first.shape[0], self.products.Q.shape[1]
        step, failed = np.zeros((B, p)), np.zeros(B, dtype=bool)
        least = _COLLAPSED * mad(np.abs(self.first))
        going, residuals = np.arange(B), self.first.copy()
        near, bound = np.full(B, nearness), np.full(B, np.inf)
        size = bound
        for _ in range(rounds):
            newton = size < near
            change, scale, lost, astray = self._change(residuals, newton, least[going])
            move = np.abs(change).max(axis=1) / scale
            small = np.where(newton, _SETTLED_NEWTON, _SETTLED)
            astray |= newton & (move > bound) & (move > small)
            near[astray] *= 0.1
            change[astray] = 0.0
            move[astray] = np.inf
            step[going] += change
            failed[going[lost]] = True
            left = np.flatnonzero((move > small) & ~lost)
            if left.size < going.size:
                going, residuals, change = going[left], residuals[left], change[left]
                near, move, newton = near[left], move[left], newton[left]
            if going.size == 0:
                break
            residuals -= change @ self.products.Q.T
            size, bound = move, np.where(newton, 0.5, _LEAP) * move
        failed[going] = True
        step[failed] = 0.0
        return step, failed

    def _change(self, residuals: Floats, newton: Flags, least: Floats) -> tuple[Floats, Floats, Flags, Flags]:
        """The next step (A, p) of the replicates still going, their scales, which are lost and whose Newton step is void."""
        Q, count = self.products.Q, len(residuals)
        u, weights, slopes = (array[:count] for array in self._work)
        np.abs(residuals, out=u)
        low, high = middle(u, slopes)
        scale = (low + high) / (2.0 * NORMAL_MAD)
        lost = ~(scale > least)
        scale[lost] = 1.0
        any_newton = bool(newton.any())
        turn = self._turn(residuals, u, low, high) if any_newton else None
        u *= (1.0 / scale)[:, None]
        self.score.weights(u, weights)
        right = np.empty((Q.shape[1], 2 if any_newton else 1, count))
        if any_newton:
            others = np.flatnonzero(~newton)
            self.score.slope(u, slopes)
            slopes[others] = weights[others]
            normal = self.products.normal(slopes.T)
            slopes *= residuals
            np.divide(Q.T @ slopes.T, scale, out=right[:, 1])
            right[:, 1, others] = 0.0
        else:
            normal = self.products.normal(weights.T)
        weights *= residuals
        np.matmul(Q.T, weights.T, out=right[:, 0])
        solved, singular = solve(normal, right)
        change = solved[:, 0]
        astray = singular & newton
        if turn is not None:
            bend = solved[:, 1]
            share = 1.0 - np.einsum("pb,pb->b", turn, bend)
            void = ~(share > _STEEP)
            change = change + bend * (np.einsum("pb,pb->b", turn, change) / np.where(void, 1.0, share))
            astray |= void
        return np.ascontiguousarray(change.T), scale, lost | (singular & ~newton), astray

    @cached_property
    def _work(self) -> Floats:
        """Three work arrays of the shape of the block, (3, B, n)."""
        return np.empty((3, *self.first.shape))

    def _turn(self, residuals: Floats, absolute: Floats, low: Floats, high: Floats) -> Floats:
        """g, (p, A): how the scale falls as the fit moves."""
        at = np.arange(len(low))
        rows: tuple[Ints, Ints] = (np.argmax(absolute == low[:, None], axis=1), np.argmax(absolute == high[:, None], axis=1))
        parts = [np.sign(residuals[at, row])[:, None] * self.products.Q[row] for row in rows]
        return np.ascontiguousarray((parts[0] + parts[1]).T) / (2.0 * NORMAL_MAD)
