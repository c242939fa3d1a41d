"""Permutation of the residuals of the restricted fit; a test only."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from withstand.procedures.base import Answer, Fitter, Procedure, register
from withstand.procedures.fit import Fit, Flags, IntervalFit
from withstand.procedures.multipliers import DRAWS, allowed_exceedances, check_draws, exceeded, ratio, slabs, without_residuals
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats, Ints
from withstand.study.focus import Focus, FocusKind


@register
@dataclass(frozen=True)
class Permutation(Procedure):
    """The classical t or F test with the law of its statistic taken from permuted residuals of the restricted fit.

    Parameters
    ----------
    draws : int
        Permutations.
    """

    draws: int = DRAWS

    name = "permutation"
    family = "permutation"
    title = "permutation of restricted residuals"
    formula = "y* = restricted fit + permuted restricted residuals; |t*| or F*"
    source = "Freedman & Lane (1983)"
    claims_variance = False

    def __post_init__(self) -> None:
        check_draws(self.draws, self.name)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return "not applicable, because permuting tests a hypothesis, and a new response has none"
        ones = np.ones(design.n)
        intercept = np.linalg.norm(ones - design.Q @ (design.Q.T @ ones)) <= 1e-8 * np.sqrt(design.n)
        level = np.abs(design.estimator(focus.L) @ ones) > 1e-8 * np.abs(design.estimator(focus.L)) @ ones
        if intercept and level.any():
            return "not applicable, because permuted residuals keep their mean, and the quantity contains the level"
        return None

    def answers(self, focus: Focus) -> frozenset[Answer]:
        """See Procedure; the estimate is that of least squares, and there is no interval."""
        return frozenset({Answer.TEST})

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        allowed = allowed_exceedances(self.draws, 1.0 - level, self.name)

        def draw(generator: np.random.Generator) -> Ints:
            return generator.permuted(np.tile(np.arange(design.n), (self.draws, 1)), axis=1)

        machines = [_Machine.of(design, focus) for focus in foci]

        def fit(sample: Sample) -> list[Fit]:
            fits: list[Fit] = []
            for machine in machines:
                estimate = machine.basis @ sample.projections

                def test(value: Floats, machine: _Machine = machine, estimate: Floats = estimate) -> Flags:
                    return machine.rejects(sample, estimate - value.reshape(len(estimate), -1), allowed, draw)

                fits.append(IntervalFit(estimate, without_residuals(sample), test=test))
            return fits

        return fit


@dataclass(frozen=True, eq=False)
class _Machine:
    """F ratios without their degrees of freedom: |O'Q'y|^2 over the residual sum of squares.

    Parameters
    ----------
    basis : ndarray of shape (k, p)
        Focal quantities in the coordinates of Q.
    directions : ndarray of shape (p, p)
        Orthonormal; the last k columns span the focal directions O.
    back : ndarray of shape (n, k)
        A'(AA')^-1: what the restricted fit moves the residuals by.
    """

    design: Design
    basis: Floats
    directions: Floats
    back: Floats

    @classmethod
    def of(cls, design: Design, focus: Focus) -> _Machine:
        """Prepare a focal quantity on a design."""
        A, basis = design.estimator(focus.L), design.basis_rows(focus.L)
        directions, _ = np.linalg.qr(basis.T, mode="complete")
        directions = np.roll(directions, -len(basis), axis=1)
        return cls(design, basis, directions, np.asarray(np.linalg.solve(A @ A.T, A).T))

    def rejects(self, sample: Sample, distance: Floats, allowed: int, draw: Callable[[np.random.Generator], Ints]) -> Flags:
        """Whether the test rejects the value at `distance` (k, B) from the estimate."""
        k, n, p = len(self.basis), self.design.n, self.design.p
        moved = self.back @ distance
        observed = ratio(np.einsum("nb,nb->b", moved, moved), sample.residual_sum)
        restricted = sample.residuals + moved
        loads = self.design.Q @ self.directions
        rejected = np.empty(sample.width, dtype=bool)
        for part, codes in slabs(sample, Permutation.name, draw):
            # Place t of the permuted residuals holds residual codes[t]: its load goes to that residual.
            placed = np.empty((p, *codes.shape))
            np.put_along_axis(placed, np.broadcast_to(codes, placed.shape), loads.T[:, None, :], axis=2)
            u = restricted[:, part]
            c = (u.T @ placed.reshape(-1, n).T).reshape(-1, p, len(codes))
            squares = c * c
            focal = squares[:, p - k :].sum(axis=1)
            total = np.einsum("nr,nr->r", u, u)[:, None]
            left = total - squares.sum(axis=1)
            left[left <= 1e-12 * total] = 0.0
            rejected[part] = exceeded(ratio(focal, left), observed[part], allowed)
        return rejected
