"""Random problems for the exact answers, and a slow route to the same probabilities that shares no code with them.

The slow route writes out every n x n matrix from the formula in the literature and inverts the characteristic function of the
quadratic form from its eigenvalues.
"""

from dataclasses import dataclass

import numpy as np
from scipy import linalg, stats

from withstand.departures import Clusters, Serial, World
from withstand.departures.world import Disturbance
from withstand.procedures import make_procedure
from withstand.procedures.base import Procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind, Point

PROCEDURES = (
    *("ols", "hc0", "hc1", "hc2", "hc2-bm", "hc3", "hc4", "hc4m", "hc5", "hac", "hac-cosine", "cr0", "cr1", "cr2"),
    "known-weights",
)
DEPENDENCES = ("none", "serial", "serial within groups", "clusters")


@dataclass(frozen=True, eq=False)
class Case:
    """A question, with the correlation matrix R of its errors written out."""

    procedure: Procedure
    design: Design
    focus: Focus
    disturbance: Disturbance
    level: float
    R: np.ndarray

    @property
    def ask(self):
        return self.procedure, self.design, self.focus, self.disturbance, self.level

    @property
    def unit(self):
        """SD of the estimate under independent errors of SD 1; effects are counted in it."""
        return float(np.sqrt(np.sum(estimator(self) ** 2)))


def random_design(rng, n, p, leverage=None):
    """Rows with a heavy-tailed predictor; the last row is moved out until it has the leverage asked for."""
    X = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1)) * np.exp(0.5 * rng.standard_normal((n, 1)))])
    if leverage is not None:
        rest = X[:-1]
        inner = np.linalg.solve(rest.T @ rest, X[-1]) @ X[-1]
        # h = q / (1 + q) with q = x'(X'X)^-1 x of the other rows; the intercept is scaled with the row.
        X[-1] *= np.sqrt(leverage / (1 - leverage) / inner)
    groups = np.unique(rng.integers(0, max(4, n // 6), n), return_inverse=True)[1].astype(np.int64)
    names = ("Intercept", *(f"x{j}" for j in range(1, p)))
    order = np.cumsum(rng.choice([1.0, 1.0, 1.0, 2.0, 5.0], n))
    return Design(X, names, order=order, groups=groups, weights=np.exp(rng.standard_normal(n) * 0.5))


def disturb(design, *, mean=None, spread=None, dependence=None):
    """A disturbance from arrays, normalised as worlds do it."""
    scale = 1.0 if spread is None else float(np.sqrt(np.mean(spread**2)))
    spread = None if spread is None else spread / scale
    return Disturbance(World(), design, mean, spread, scale, None, dependence, ())


def dependence_of(kind, design, severity):
    """A dependence and its correlation matrix, the latter written out here."""
    same = design.groups[:, None] == design.groups[None, :]
    power = np.abs(design.order[:, None] - design.order[None, :])
    match kind:
        case "none":
            return None, np.eye(design.n)
        case "serial":
            return Serial((severity,), step=1.0).dependence(design, severity), severity**power
        case "serial within groups":
            found = Serial((severity,), within="groups", step=1.0).dependence(design, severity)
            return found, np.where(same, severity**power, 0.0)
        case "clusters":
            return Clusters((severity,)).dependence(design, severity), np.where(same, severity, 0.0) + np.eye(design.n) * (
                1 - severity
            )


def random_case(rng, n, p, procedure, kind, *, mean=False, leverage=None, new=False, level=0.95):
    """Fan ratio up to 20, |rho| and intraclass correlation up to 0.99."""
    design = random_design(rng, n, p, leverage)
    severity = rng.uniform(0.01, 0.99) * (-1 if kind.startswith("serial") and rng.integers(2) else 1)
    dependence, R = dependence_of(kind, design, severity)
    spread = np.exp(rng.uniform(0, np.log(20)) * rng.permutation(np.linspace(0, 1, n)))
    shift = rng.standard_normal(n) * rng.uniform(0.1, 1.0) if mean else None
    disturbance = disturb(design, mean=shift, spread=spread, dependence=dependence)
    kind, point = (FocusKind.NEW, Point()) if new else (FocusKind.CONTRAST, None)
    focus = Focus("focus", kind, rng.standard_normal((1, p)), np.zeros(1), point=point)
    return Case(make_procedure(procedure), design, focus, disturbance, level, R)


def any_case(rng, largest):
    """A case over the whole range that exact answers are meant for."""
    n = int(np.exp(rng.uniform(np.log(15), np.log(largest))))
    p = max(2, min(int(rng.integers(2, 13)), n // 2))
    procedure = str(rng.choice(PROCEDURES))
    return random_case(
        rng,
        n,
        p,
        procedure,
        str(rng.choice(DEPENDENCES)),
        mean=bool(rng.integers(2)),
        leverage=rng.uniform(0.5, 0.99) if rng.integers(2) else None,
        new=procedure != "known-weights" and rng.integers(5) == 0,
        level=float(rng.choice([0.9, 0.95, 0.99])),
    )


def roots(case):
    """Square roots of the weights of the fit."""
    return np.sqrt(case.design.weights) if case.procedure.weighted else np.ones(case.design.n)


def estimator(case):
    """a of the fitted response, (n,)."""
    X = roots(case)[:, None] * case.design.X
    return (case.focus.L @ np.linalg.solve(X.T @ X, X.T))[0]


def middle(case):
    """D of the variance estimate e' D e, (n, n), and the degrees of freedom of its t distribution."""
    X = roots(case)[:, None] * case.design.X
    n, p = X.shape
    H = X @ np.linalg.solve(X.T @ X, X.T)
    h, a, df, name = np.diag(H), estimator(case), n - p, case.procedure.name
    M = np.eye(n) - H
    relative = h * n / p
    if name in ("ols", "known-weights"):
        return np.eye(n) * (a @ a) / df, df
    if name.startswith("hc") or name == "hac":
        weights = {
            "hc0": np.ones(n),
            "hac": np.ones(n),
            "hc1": np.full(n, n / df),
            "hc2": 1 / (1 - h),
            "hc2-bm": 1 / (1 - h),
            "hc3": 1 / (1 - h) ** 2,
            "hc4": (1 - h) ** -np.minimum(4, relative),
            "hc4m": (1 - h) ** -(np.minimum(1, relative) + np.minimum(1.5, relative)),
            "hc5": (1 - h) ** (-np.minimum(relative, max(4, 0.7 * relative.max())) / 2),
        }
    if name == "hac":
        L = int(4 * (n / 100) ** (2 / 9))
        distance = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
        return n / df * np.outer(a, a) * np.maximum(0, 1 - distance / (L + 1)), df
    if name == "hac-cosine":
        nu = max(1, int(0.4 * n ** (2 / 3)))
        rows = [np.sqrt(2) * a * np.cos(np.pi * j * (np.arange(1, n + 1) - 0.5) / n) for j in range(1, nu + 1)]
        return sum(np.outer(b, b) for b in rows) / nu, nu
    if name.startswith("cr"):
        G = case.design.group_count
        D = np.zeros((n, n))
        for g in range(G):
            rows = np.flatnonzero(case.design.groups == g)
            values, vectors = np.linalg.eigh(M[np.ix_(rows, rows)])
            # Pseudo-inverse root where the cluster fits itself in some direction.
            root = vectors @ np.diag([v**-0.5 if v > 1e-10 else 0.0 for v in values]) @ vectors.T
            b = a[rows] @ root if name == "cr2" else a[rows]
            D[np.ix_(rows, rows)] = np.outer(b, b)
        if name == "cr1":
            D *= G / (G - 1) * (n - 1) / df
        MD = M @ D
        return D, np.trace(MD) ** 2 / np.trace(MD @ MD) if name == "cr2" else G - 1
    D = np.diag(a**2 * weights[name])
    MD = M @ D
    return D, np.trace(MD) ** 2 / np.trace(MD @ MD) if name == "hc2-bm" else df


def ingredients(case, effect=0.0):
    """Mean and covariance of the fitted response, a, the matrix of the claimed variance, and the critical value.

    A new response is a further element of the response.
    """
    n, root, a = case.design.n, roots(case), estimator(case)
    X = root[:, None] * case.design.X
    M = np.eye(n) - X @ np.linalg.solve(X.T @ X, X.T)
    D, df = middle(case)
    K = M @ D @ M
    scale = root * (np.ones(n) if case.disturbance.spread is None else case.disturbance.spread)
    covariance = scale[:, None] * case.R * scale
    mean = root * (np.zeros(n) if case.disturbance.mean is None else case.disturbance.mean)
    # The effect moves the mean within the model space.
    mean = mean + a / (a @ a) * effect
    if case.focus.kind is FocusKind.NEW:
        K = linalg.block_diag(K + M / (n - X.shape[1]), 0.0)
        covariance = linalg.block_diag(covariance, 1 / case.disturbance.spread_scale**2)
        a, mean = np.append(a, -1.0), np.append(mean, 0.0)
    return mean, covariance, a, K, stats.t.isf((1 - case.level) / 2, df)


def dense_size(case, effect=0.0):
    """Rejection probability by eigenvalues."""
    mean, covariance, a, K, c = ingredients(case, effect)
    G = linalg.cholesky(covariance, lower=True)
    weights, U = np.linalg.eigh(G.T @ (np.outer(a, a) - c**2 * K) @ G)
    return imhof(weights, U.T @ linalg.solve_triangular(G, mean, lower=True))


def imhof(weights, shift):
    """P(sum weights (z + shift)^2 > 0) by Imhof (1961), Biometrika 48:419, with t = exp(x) and a fine equally spaced sum."""
    weights = weights / np.abs(weights).max()
    x = np.arange(-45.0, 75.0, 0.02)
    t = np.exp(x)
    tw = weights[:, None] * t
    theta = 0.5 * np.sum(np.arctan(tw) + shift[:, None] ** 2 * tw / (1 + tw**2), axis=0)
    log_rho = np.sum(0.25 * np.log1p(tw**2) + 0.5 * shift[:, None] ** 2 * tw**2 / (1 + tw**2), axis=0)
    return 0.5 + np.sum(np.sin(theta) * np.exp(-log_rho)) * 0.02 / np.pi
