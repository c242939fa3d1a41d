"""The wild cluster bootstrap: the residuals of a cluster change sign together."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from scipy import sparse

from withstand.procedures.base import Fitter, Procedure, register
from withstand.procedures.bootstrap import NO_LAW, full_square
from withstand.procedures.cluster import Cr1, codes
from withstand.procedures.fit import Fit, Flags, IntervalFit
from withstand.procedures.forms import ResidualForm
from withstand.procedures.multipliers import (
    DRAWS,
    MULTIPLIERS,
    allowed_exceedances,
    check_draws,
    check_multipliers,
    exceeded,
    ratio,
    slabs,
    wald,
    without_residuals,
)
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

FEW_CLUSTERS = 12
"""Below this many clusters signs alone give too few different samples, and Webb's six points are used."""

_DOUBLINGS = 10
"""A value 3 * 2^10 standard errors away that is still accepted means an interval without end, which counts as a failure."""

_HALVINGS = 22
"""Ends of intervals are found to about a millionth of a standard error."""


@register
@dataclass(frozen=True)
class WildClusterBootstrap(Procedure):
    """Least squares with the law of its CR1 t statistic taken from responses whose residuals change sign by cluster.

    Parameters
    ----------
    weights : {"auto", "rademacher", "webb"}
        Signs or Webb's six points; "auto" takes Webb's below 12 clusters.
    draws : int
        Bootstrap samples.

    Notes
    -----
    The null hypothesis is imposed, as Cameron, Gelbach & Miller (2008) recommend. The interval holds the values that the test
    accepts, found by bisection from the estimate outwards.
    """

    weights: str = "auto"
    draws: int = DRAWS

    name = "wild-cluster-bootstrap"
    family = "bootstrap"
    title = "wild cluster bootstrap"
    formula = "y* = restricted fit + v_g e, one v a cluster; |t*| with CR1 errors; interval by inverting the test"
    source = "Cameron, Gelbach & Miller (2008); Webb (2014)"

    def __post_init__(self) -> None:
        if self.weights != "auto":
            check_multipliers(self.weights, self.name)
        check_draws(self.draws, self.name)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if focus.kind is FocusKind.NEW:
            return NO_LAW
        return Cr1().not_applicable(design, focus)

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure."""
        allowed = allowed_exceedances(self.draws, 1.0 - level, self.name)
        machines = [_Machine.of(design, focus) for focus in foci]
        law = self.weights if self.weights != "auto" else "webb" if design.group_count < FEW_CLUSTERS else "rademacher"

        def draw(generator: np.random.Generator) -> Floats:
            return MULTIPLIERS[law](generator, (self.draws, design.group_count))

        def fit(sample: Sample) -> list[Fit]:
            return [_fit(machine, sample, allowed, draw) for machine in machines]

        return fit


Draw = Callable[[np.random.Generator], Floats]


def _fit(machine: _Machine, sample: Sample, allowed: int, draw: Draw) -> Fit:
    estimate = machine.basis @ sample.projections
    covariance = machine.form.evaluate(sample)
    if len(estimate) > 1:
        test_of_all = partial(_joint_test, machine, sample, estimate, covariance, allowed, draw)
        return IntervalFit(estimate, without_residuals(sample), test=test_of_all)
    claimed = covariance[0, 0]
    curves = [
        (part, _Curve.of(machine, V, sample.residuals[:, part], claimed[part], allowed))
        for part, V in slabs(sample, WildClusterBootstrap.name, draw)
    ]
    reach = np.empty((2, sample.width))
    for part, curve in curves:
        start = 3.0 * np.sqrt(claimed[part])
        reach[0, part], reach[1, part] = curve.furthest_accepted(start), curve.furthest_accepted(-start)
    failed: Flags = ~np.isfinite(reach).all(axis=0) | (claimed <= 0.0)
    reach[:, failed] = 0.0

    def test(value: Floats) -> Flags:
        distance = estimate[0] - value[0]
        return np.concatenate([curve.rejects(distance[part]) for part, curve in curves])

    low, high = estimate[0] - reach[0], estimate[0] - reach[1]
    return IntervalFit(estimate, failed if failed.any() else None, low, high, claimed, test)


def _joint_test(
    machine: _Machine, sample: Sample, estimate: Floats, covariance: Floats, allowed: int, draw: Draw, value: Floats
) -> Flags:
    distance = estimate - value.reshape(len(estimate), -1)
    observed = wald(distance, covariance)
    restricted = sample.residuals + machine.back @ distance
    rejected = np.empty(sample.width, dtype=bool)
    for part, V in slabs(sample, WildClusterBootstrap.name, draw):
        numerator, pairs = machine.parts(V, restricted[:, part])
        rejected[part] = exceeded(wald(numerator, full_square(pairs)), observed[part], allowed)
    return rejected


@dataclass(frozen=True, eq=False)
class _Machine:
    """Estimates and CR1 covariances of responses v_g u, for many v and u at once.

    With s_g = a_g'u_g, m_g = Q_g'a_g and c = sum v_g Q_g'u_g, the score of cluster g is v_g s_g - m_g'c, so that sums of
    squared scores are sum v_g^2 s_g^2 - 2 c' sum v_g s_g m_g + c' (sum m_g m_g') c.

    Parameters
    ----------
    basis : ndarray of shape (k, p)
        Focal quantities in the coordinates of Q.
    back : ndarray of shape (n, k)
        A'(AA')^-1: what the restricted fit moves the residuals by.
    sums : sparse matrix of shape (p G, n)
        Sums within clusters of the columns of Q times what it is applied to.
    means : ndarray of shape (k, G, p)
        m.
    form : ResidualForm
        CR1 of the data.
    scale : float
        Small-sample factor of CR1.
    """

    basis: Floats
    back: Floats
    sums: sparse.csr_array
    means: Floats
    form: ResidualForm
    scale: float

    @classmethod
    def of(cls, design: Design, focus: Focus) -> _Machine:
        """Prepare a focal quantity on a design."""
        A, groups, cr1 = design.estimator(focus.L), codes(design), Cr1()
        places = (groups[:, None] + design.group_count * np.arange(design.p)).ravel()
        index = np.repeat(np.arange(design.n), design.p)
        sums = sparse.csr_array((design.Q.ravel(), (places, index)), shape=(design.p * design.group_count, design.n))
        means = np.stack([np.asarray(sums @ row).reshape(design.p, -1).T for row in A])
        back = np.linalg.solve(A @ A.T, A).T
        return cls(design.basis_rows(focus.L), np.asarray(back), sums, means, cr1.form(design, A), cr1.scale(design))

    def parts(self, V: Floats, U: Floats) -> tuple[Floats, Floats]:
        """Estimates (k, r, B*) and the k (k + 1) / 2 covariances (m, r, B*) for rows of V (B*, G) and columns of U (n, r)."""
        (draws, G), r, p = V.shape, U.shape[1], self.basis.shape[1]
        within = np.asarray(self.sums @ U).reshape(p, G, r)
        score = np.einsum("kp,pgr->kgr", self.basis, within)
        c = (within.transpose(0, 2, 1).reshape(-1, G) @ V.T).reshape(p, r, draws)
        squares = (V * V).T
        pairs = []
        for i, j in zip(*np.triu_indices(len(self.basis)), strict=True):
            crossed = score[i, :, :, None] * self.means[j][:, None, :] + score[j, :, :, None] * self.means[i][:, None, :]
            g = (crossed.transpose(2, 1, 0).reshape(-1, G) @ V.T).reshape(p, r, draws)
            inner = self.means[i].T @ self.means[j]
            curved = (inner @ c.reshape(p, -1)).reshape(p, r, draws)
            first = (score[i] * score[j]).T @ squares
            form = first + np.einsum("prj,prj->rj", c, curved - g)
            # Left-over rounding must not pass for a variance: with equal weights the restricted part of u is fitted away.
            form[np.abs(form) <= 1e-12 * np.abs(first)] = 0.0
            pairs.append(form)
        return (self.basis @ c.reshape(p, -1)).reshape(-1, r, draws), self.scale * np.stack(pairs)


@dataclass(frozen=True, eq=False)
class _Curve:
    """The test of one quantity as a function of the distance d from the estimate to the tested value.

    Restricted residuals are e + d a/(a'a), so that t*^2 = (n0 + d n1)^2 / (q0 + d q1 + d^2 q2), against d^2 / claimed.
    """

    n0: Floats
    n1: Floats
    q0: Floats
    q1: Floats
    q2: Floats
    claimed: Floats
    allowed: int

    @classmethod
    def of(cls, machine: _Machine, V: Floats, residuals: Floats, claimed: Floats, allowed: int) -> _Curve:
        """The curves of r replicates, residuals (n, r)."""
        step = np.sqrt(np.where(claimed > 0.0, claimed, 1.0))
        n0, q0 = (part[0] for part in machine.parts(V, residuals))
        n1, q2 = (part[0] for part in machine.parts(V, machine.back))
        _, moved = (part[0] for part in machine.parts(V, residuals + machine.back * step))
        q1 = (moved - q0 - step[:, None] ** 2 * q2) / step[:, None]
        return cls(n0, n1, q0, q1, q2, claimed, allowed)

    def rejects(self, distance: Floats) -> Flags:
        """Whether the test rejects the value at each distance (r,)."""
        d = distance[:, None]
        numerator, variance = self.n0 + d * self.n1, self.q0 + d * (self.q1 + d * self.q2)
        return exceeded(wald(numerator[None], variance[None, None]), ratio(distance**2, self.claimed), self.allowed)

    def furthest_accepted(self, start: Floats) -> Floats:
        """From 0 in the direction of `start` (r,): the distance at which the test begins to reject; inf if it never does."""
        inside, outside = np.zeros_like(start), start.copy()
        open_ended = ~self.rejects(outside)
        for _ in range(_DOUBLINGS):
            if not open_ended.any():
                break
            inside = np.where(open_ended, outside, inside)
            outside = np.where(open_ended, 2.0 * outside, outside)
            open_ended &= ~self.rejects(outside)
        for _ in range(_HALVINGS):
            middle = 0.5 * (inside + outside)
            rejected = self.rejects(middle)
            inside, outside = np.where(rejected, inside, middle), np.where(rejected, middle, outside)
        return np.where(open_ended, np.inf, outside)
