"""Cluster-robust variances CR0, CR1 and CR2."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.procedures.base import LinearProcedure, register
from withstand.procedures.forms import Grouped, ResidualForm
from withstand.study.design import Design, Floats, Ints
from withstand.study.focus import Focus

_SINGULAR = 1e-10
"""Eigenvalues of I - H within a cluster below this count as 0: the cluster fits itself in that direction."""


@dataclass(frozen=True)
class ClusterRobust(LinearProcedure):
    """V = scale * sum over clusters of (sum of b_t e_t)^2."""

    family = "cluster"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if design.groups is None:
            return "not applicable, because the study names no groups"
        if design.group_count <= focus.k:
            return (
                f"not applicable, because {design.group_count} groups cannot carry a test of {focus.k} "
                f"quantit{'y' if focus.k == 1 else 'ies'}"
            )
        return None

    def scale(self, design: Design) -> float:
        """Small-sample factor."""
        return 1.0

    def scores(self, design: Design, A: Floats) -> Floats:
        """b, (k, n): what multiplies the residuals."""
        return A

    def form(self, design: Design, A: Floats) -> ResidualForm:
        """See LinearProcedure."""
        return Grouped(self.scores(design, A), codes(design), self.scale(design))

    def degrees_of_freedom(self, design: Design, A: Floats) -> float:
        """Number of clusters minus one."""
        return design.group_count - 1


@register
@dataclass(frozen=True)
class Cr0(ClusterRobust):
    """Scores summed within clusters."""

    name = "cr0"
    title = "cluster sandwich"
    formula = "V = sum_g (sum_(t in g) a_t e_t)^2, t(G - 1)"
    source = "Liang & Zeger (1986)"


@register
@dataclass(frozen=True)
class Cr1(ClusterRobust):
    """CR0 with a small-sample factor."""

    name = "cr1"
    title = "cluster sandwich with a small-sample factor"
    formula = "V = G/(G - 1) (n - 1)/(n - p) CR0, t(G - 1)"
    source = "Liang & Zeger (1986); Cameron & Miller (2015)"

    def scale(self, design: Design) -> float:
        """See ClusterRobust."""
        G, n = design.group_count, design.n
        return G / (G - 1) * (n - 1) / design.df


@register
@dataclass(frozen=True)
class Cr2(ClusterRobust):
    """Unbiased when errors are independent with equal variances, with Satterthwaite degrees of freedom."""

    name = "cr2"
    title = "bias-reduced cluster sandwich"
    formula = "b_g = (I - H_gg)^(-1/2) a_g, t(df), df = (tr O)^2 / ||O||^2, O_gh = b_g' M_gh b_h"
    source = "Bell & McCaffrey (2002); Pustejovsky & Tipton (2018)"

    def scores(self, design: Design, A: Floats) -> Floats:
        """See ClusterRobust."""
        adjusted = np.empty_like(A)
        groups = codes(design)
        for g in range(design.group_count):
            rows = np.flatnonzero(groups == g)
            # (I - H_gg)^(-1/2) = I + U diag((1 - s^2)^(-1/2) - 1) U', from the thin SVD of Q_g: never larger than rows x p.
            U, s, _ = np.linalg.svd(design.Q[rows], full_matrices=False)
            share = 1.0 - s**2
            stretch = np.where(share > _SINGULAR, 1.0 / np.sqrt(np.maximum(share, _SINGULAR)), 0.0) - 1.0
            adjusted[:, rows] = A[:, rows] + (A[:, rows] @ U * stretch) @ U.T
        return adjusted

    def degrees_of_freedom(self, design: Design, A: Floats) -> float:
        """Satterthwaite, under independent errors with equal variances."""
        b = self.scores(design, A)[0]
        groups, G = codes(design), design.group_count
        own = np.bincount(groups, b**2, minlength=G)
        shared = np.zeros((G, design.p))
        np.add.at(shared, groups, b[:, None] * design.Q)
        omega = np.diag(own) - shared @ shared.T
        return float(np.trace(omega) ** 2 / np.sum(omega**2))

    def critical(self, design: Design, A: Floats, level: float) -> float:
        """See LinearProcedure; a joint statistic has the approximate Hotelling law of Pustejovsky & Tipton."""
        k = A.shape[0]
        if k == 1:
            return super().critical(design, A, level)
        eta = self._hotelling_degrees(design, A)
        return float(tails.f_isf(1.0 - level, k, eta - k + 1) * eta / (eta - k + 1))

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        reason = super().not_applicable(design, focus)
        if reason is None and not focus.scalar and self._hotelling_degrees(design, design.estimator(focus.L)) <= focus.k - 1:
            return "not applicable, because the groups leave no degrees of freedom for the joint test"
        return reason

    def _hotelling_degrees(self, design: Design, A: Floats) -> float:
        """Degrees of freedom eta of the approximate Hotelling law, matching total variance (Pustejovsky & Tipton 2018).

        The statistic is invariant to the coordinates of the k quantities, so they are taken orthonormal: E[V] = A A' = I.
        With b_s,g the scores of quantity s, Var(V_st) = sum_gh (O_ss,gh O_tt,gh + O_st,gh O_ts,gh), and
        eta = k (k + 1) / sum_st Var(V_st).
        """
        k = A.shape[0]
        root = np.linalg.cholesky(A @ A.T)
        b = self.scores(design, np.linalg.solve(root, A))
        groups, G = codes(design), design.group_count
        shared = np.zeros((k, G, design.p))
        for s in range(k):
            np.add.at(shared[s], groups, b[s][:, None] * design.Q)
        omega = np.empty((k, k, G, G))
        for s in range(k):
            for t in range(k):
                omega[s, t] = np.diag(np.bincount(groups, b[s] * b[t], minlength=G)) - shared[s] @ shared[t].T
        total = sum(np.sum(omega[s, s] * omega[t, t]) + np.sum(omega[s, t] * omega[s, t].T) for s in range(k) for t in range(k))
        return float(k * (k + 1) / total)


def codes(design: Design) -> Ints:
    """Cluster codes of a design that has them."""
    if design.groups is None:
        raise TypeError("cluster-robust variances need groups; not_applicable says so first")
    return design.groups
