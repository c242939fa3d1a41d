"""Random problems for the exact answers, and a slow route to the same probabilities that shares no code with them."""

import numpy as np
from scipy import linalg

from withstand.departures import World
from withstand.departures.chain import AR1
from withstand.departures.exchangeable import Exchangeable
from withstand.departures.world import Disturbance
from withstand.procedures import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind, Point

PROCEDURES = ("ols", "hc0", "hc1", "hc2", "hc2-bm", "hc3", "hc4", "hc4m", "hc5", "hac", "hac-cosine", "cr0", "cr1", "known-weights")


def random_design(rng, n, p, leverage=None):
    """Rows with a heavy-tailed predictor; the last row is moved out until it has the leverage asked for."""
    X = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1)) * np.exp(0.5 * rng.standard_normal((n, 1)))])
    if leverage is not None:
        rest = X[:-1]
        inner = np.linalg.solve(rest.T @ rest, X[-1]) @ X[-1]
        # h = q / (1 + q) with q = x'(X'X)^-1 x of the other rows; the intercept is scaled with the row.
        X[-1] *= np.sqrt(leverage / (1 - leverage) / inner)
    groups = rng.integers(0, max(3, n // 6), n)
    groups = np.unique(groups, return_inverse=True)[1].astype(np.int64)
    names = ("Intercept", *(f"x{j}" for j in range(1, p)))
    weights = np.exp(rng.standard_normal(n) * 0.5)
    return Design(X, names, order=np.arange(float(n)), groups=groups, weights=weights)


def disturb(design, *, mean=None, spread=None, dependence=None):
    """A disturbance from arrays, normalised as worlds do it."""
    scale = 1.0 if spread is None else float(np.sqrt(np.mean(spread**2)))
    spread = None if spread is None else spread / scale
    return Disturbance(World(), design, mean, spread, scale, None, dependence, ())


def fan(rng, design, ratio):
    return ratio ** rng.permutation(np.linspace(0, 1, design.n))


def chain(design, rho, *, interleaved=False):
    previous = np.arange(-1, design.n - 1)
    if interleaved:
        previous = np.full(design.n, -1)
        for g in range(design.group_count):
            rows = np.flatnonzero(design.groups == g)
            previous[rows[1:]] = rows[:-1]
    return AR1(np.where(previous >= 0, rho, 0.0), previous.astype(np.int64))


def shared(design, icc):
    return Exchangeable(icc, design.groups)


def random_case(rng, n, p, procedure, dependence, *, mean=False, leverage=None, new=False):
    design = random_design(rng, n, p, leverage)
    found = {
        "none": lambda: None,
        "chain": lambda: chain(design, rng.uniform(-0.99, 0.99)),
        "interleaved": lambda: chain(design, rng.uniform(-0.99, 0.99), interleaved=True),
        "groups": lambda: shared(design, rng.uniform(0.0, 0.95)),
    }[dependence]()
    ratio = np.exp(rng.uniform(0, np.log(20)))
    shift = rng.standard_normal(n) * rng.uniform(0.1, 1.0) if mean else None
    disturbance = disturb(design, mean=shift, spread=fan(rng, design, ratio), dependence=found)
    L = rng.standard_normal((1, p))
    kind, point = (FocusKind.NEW, Point()) if new else (FocusKind.CONTRAST, None)
    return make_procedure(procedure), design, Focus("focus", kind, L, np.zeros(1), point=point), disturbance


def dense_covariance(disturbance):
    return disturbance.covariance(np.eye(disturbance.design.n))


def quadratic_form(procedure, design, focus, disturbance, level, effect=0.0):
    """Weights, noncentralities and shift of the form that is positive where the test rejects, from n x n matrices.

    Q = sum_j weight_j (z_j + shift_j)^2 + constant with independent standard normal z.
    """
    used = procedure.fitted_design(design)
    root = np.sqrt(design.weights) if procedure.weighted else np.ones(design.n)
    A = used.estimator(focus.L)
    M = np.eye(design.n) - used.X @ np.linalg.solve(used.X.T @ used.X, used.X.T)
    K = M @ procedure.form(used, A).times(M)
    a = A[0]
    covariance = root[:, None] * dense_covariance(disturbance) * root
    mean = root * (np.zeros(design.n) if disturbance.mean is None else disturbance.mean)
    if focus.kind is FocusKind.NEW:
        K = K + M / used.df
        a = np.append(a, -1.0)
        K = linalg.block_diag(K, 0.0)
        covariance = linalg.block_diag(covariance, disturbance.spread_at(focus.point) ** 2)
        mean = np.append(mean, 0.0)
    c = procedure.critical(used, A, level)
    B = np.outer(a, a) - c**2 * K
    # An effect moves the mean along (X'X)^-1 directions that leave residuals alone.
    move = np.zeros(len(a))
    move[: design.n] = A[0] / (A[0] @ A[0]) * effect
    mean = mean + move
    G = linalg.cholesky(covariance, lower=True)
    weights, U = np.linalg.eigh(G.T @ B @ G)
    start = linalg.solve_triangular(G, mean, lower=True)
    return weights, U.T @ start


def imhof(weights, shift):
    """P(sum weights (z + shift)^2 > 0) by Imhof (1961), Biometrika 48:419, with t = exp(x) and a fine equally spaced sum."""
    weights = weights / np.abs(weights).max()
    x = np.arange(-45.0, 75.0, 0.01)
    t = np.exp(x)
    tw = weights[:, None] * t
    theta = 0.5 * np.sum(np.arctan(tw) + shift[:, None] ** 2 * tw / (1 + tw**2), axis=0)
    log_rho = np.sum(0.25 * np.log1p(tw**2) + 0.5 * shift[:, None] ** 2 * tw**2 / (1 + tw**2), axis=0)
    return 0.5 + np.sum(np.sin(theta) * np.exp(-log_rho)) * 0.01 / np.pi
