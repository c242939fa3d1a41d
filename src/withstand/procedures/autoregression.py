"""AR(1) fits of a whole block from sums over neighbouring rows: the rows themselves are visited once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from withstand.procedures.fit import Flags
from withstand.procedures.normal import Products, solve
from withstand.procedures.serial_sums import PairSums
from withstand.study.design import Floats, Ints

_ROUNDS = 200
_SETTLED = 1e-10
"""A change of rho below this ends the iteration."""

_STEEPEST = 0.9
"""Above this rate of contraction no leap is made ahead."""

_TINY = 1e-300


@dataclass(frozen=True, eq=False)
class Autoregression:
    """The fits of a block for any rho.

    Parameters
    ----------
    products : Products
        Of the basis Q.
    gaps : ndarray of shape (D,)
        Distinct gaps between neighbours, in units of the smallest.
    matrices, scores, squares : PairSums
        Sums of q q', q e and e e, e the residuals of the unweighted fit.
    """

    products: Products
    gaps: Floats
    matrices: PairSums
    scores: PairSums
    squares: PairSums

    def powers(self, rho: Floats) -> Floats:
        """rho^gap, (D, B); with several gaps rho is not negative."""
        if len(self.gaps) == 1:
            return np.asarray(rho[None, :])
        return np.asarray(np.exp(np.outer(self.gaps, np.log(np.maximum(rho, _TINY)))))

    def fit(self, rho: Floats, bases: Sequence[Floats]) -> tuple[Floats, list[Floats], Floats, Flags]:
        """The fit given rho (B,).

        Returns
        -------
        step : ndarray of shape (p, B)
            Coefficients minus the unweighted ones.
        inverses : list of ndarray of shape (p, k, B)
            N^-1 l for each of `bases` (k, p).
        square : ndarray of shape (B,)
            Sum of squares of the rows made independent.
        singular : ndarray of bool, shape (B,)
            Where there is no solution.
        """
        c = self.powers(rho)
        score = self.scores.at(c)
        right = [score[:, None], *(np.broadcast_to(b.T[:, :, None], (*b.T.shape, rho.size)) for b in bases)]
        solved, singular = solve(self.products.unpack(self.matrices.at(c)), np.concatenate(right, axis=1))
        step = solved[:, 0]
        ends = np.cumsum([1, *(len(b) for b in bases)]).tolist()
        inverses = [solved[:, end - len(b) : end] for b, end in zip(bases, ends[1:], strict=True)]
        square = self.squares.at(c)[0] - np.einsum("pb,pb->b", step, score)
        return step, inverses, square, singular

    def first(self) -> tuple[Floats, Flags]:
        """The estimate of rho from the residuals of the unweighted fit, and where there is none."""
        return self.correlation(np.zeros(self.scores.starts.shape))

    def correlation(self, step: Floats) -> tuple[Floats, Flags]:
        """The estimate of rho from residuals of the fit that is `step` (p, B) from the unweighted one; where there is none."""
        moved = self.products.squares(step)
        lagged = 0.5 * (self._crossed[0] - 2.0 * np.einsum("pb,pb->b", self._crossed[1], step) + self._crossed[2] @ moved)
        before = self.squares.before[:, 0] - 2.0 * np.einsum("gpb,pb->gb", self.scores.before, step)
        before += self.matrices.before[..., 0] @ moved
        total = before.sum(axis=0)
        failed = ~(np.abs(lagged) < total)
        lagged[failed] = 0.0
        total[failed] = 1.0
        rho = lagged / total
        return (rho if len(self.gaps) == 1 else root_of_gaps(lagged, before, self.gaps, rho)), failed

    @cached_property
    def _crossed(self) -> tuple[Floats, Floats, Floats]:
        """Sums over all gaps of the products with the row before."""
        return self.squares.cross.sum(axis=0)[0], self.scores.cross.sum(axis=0), self.matrices.cross.sum(axis=0)[:, 0]

    def settle(self) -> tuple[Floats, Flags]:
        """The estimate of rho repeated until it settles; columns that have settled leave the iteration.

        Notes
        -----
        F maps rho to its estimate from the fit given rho; F(rho) = rho is sought. From the second round on each column leaps to
        where the line through its last two points meets the diagonal, which needs half the rounds of plain repetition.
        """
        rho, failed = self.first()
        going, block = np.flatnonzero(~failed), self
        if going.size < rho.size:
            block = block.columns(going)
        before, value_before = np.zeros(going.size), np.zeros(going.size)
        now = rho[going]
        for turn in range(_ROUNDS):
            if going.size == 0:
                return rho, failed
            step, _, _, singular = block.fit(now, ())
            value, lost = block.correlation(step)
            lost |= singular
            rho[going] = value
            failed[going] |= lost
            move = value - now
            following = value if turn == 0 else leap(before, value_before, now, value)
            left = np.flatnonzero((np.abs(move) > _SETTLED) & ~lost)
            if left.size < going.size:
                block = block.columns(left)
            before, value_before, now, going = now[left], value[left], following[left], going[left]
        failed[going] = True
        return rho, failed

    def columns(self, kept: Ints) -> Autoregression:
        """The block of some of its replicates."""
        scores, squares = self.scores.columns(kept), self.squares.columns(kept)
        return Autoregression(self.products, self.gaps, self.matrices, scores, squares)


def leap(before: Floats, value_before: Floats, now: Floats, value: Floats) -> Floats:
    """Where the line through two points of F meets the diagonal; the plain next value where the line is too steep."""
    run = now - before
    slope = (value - value_before) / np.where(run == 0.0, 1.0, run)
    gentle = (np.abs(slope) < _STEEPEST) & (run != 0.0)
    target = now + (value - now) / np.where(gentle, 1.0 - slope, 1.0)
    return np.where(np.abs(target) < 1.0, target, value)


def root_of_gaps(lagged: Floats, before: Floats, gaps: Floats, start: Floats) -> Floats:
    """Solve sum_g rho^g before_g = lagged for 0 <= rho < 1.

    Parameters
    ----------
    lagged : ndarray of shape (B,)
        Below the sum of `before`; 0 or less gives 0.
    before : ndarray of shape (D, B)
        Positive.
    gaps : ndarray of shape (D,)
        At least 1, so that the left side is increasing and convex: Newton's method cannot miss.
    start : ndarray of shape (B,)
        Where to start.
    """
    target = np.maximum(lagged, 0.0)
    wanted = target > 0.0
    rho = np.where(wanted, np.maximum(start, 1e-3), 1e-3)
    for _ in range(_ROUNDS):
        terms = before * np.exp(np.outer(gaps, np.log(rho)))
        slope = gaps @ terms / rho
        move = (terms.sum(axis=0) - target) / np.where(slope > 0.0, slope, 1.0)
        # From the left of the root a step can leave the interval, where the powers would overflow.
        following = np.clip(rho - move, _TINY, 1.0)
        done = np.abs(following - rho)[wanted].max(initial=0.0) <= 1e-13
        rho = following
        if done:
            break
    return np.where(wanted, rho, 0.0)
