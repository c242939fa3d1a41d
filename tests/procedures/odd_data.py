"""Random data sets that are hard on a procedure: ties, two rows more than columns, heavy outliers, high leverage."""

import numpy as np

from withstand.engine.noise import BlockNoise
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind

REPLICATES = 8
KINDS = ("plain", "tied", "smallest", "outlying", "leverage", "factor", "plain wide")
SEEDS = (1, 2)
CASES = [(kind, seed) for kind in KINDS for seed in SEEDS]
"""14 designs of 8 replicates: 112 data sets."""


def make(kind, seed):
    """A design and errors (n, 8)."""
    rng = np.random.default_rng([KINDS.index(kind), seed])
    p = 5 if kind == "plain wide" else 3
    n = p + 2 if kind == "smallest" else 60 if kind == "plain wide" else 20 + seed
    Z = rng.standard_normal((n, p - 1))
    errors = rng.standard_normal((n, REPLICATES))
    if kind == "tied":
        Z, errors = np.round(Z), np.round(errors)
    elif kind == "outlying":
        errors = rng.standard_t(1.5, (n, REPLICATES))
        errors[rng.integers(0, n, 2)] *= 30.0
    elif kind == "leverage":
        Z[0] *= 12.0
    elif kind == "factor":
        Z[:, 1] = np.arange(n) % 4 == 0
    names = ("Intercept", *(f"x{i}" for i in range(1, p)))
    design = Design(
        np.column_stack([np.ones(n), Z]),
        names,
        columns={"x1": Z[:, 0]},
        order=np.arange(n, dtype=float),
        groups=(np.arange(n) % max(3, n // 4)).astype(np.int64),
    )
    return design, errors


def sample_of(design, errors, seed=3, **more):
    return Sample(design, errors, BlockNoise(seed, 0, errors.shape[1]), **more)


def slope(design):
    return Focus.coefficient("x1", design.names)


def two_slopes(design):
    L = np.zeros((2, design.p))
    L[0, 1] = L[1, 2] = 1.0
    return Focus("x1, x2", FocusKind.JOINT, L, np.zeros(2))


def mean_at(design, at=0.3):
    L = np.full((1, design.p), at)
    L[0, 0] = 1.0
    return Focus("mean", FocusKind.MEAN, L, np.zeros(1))


def new_at(design, at=0.3):
    return Focus("new", FocusKind.NEW, mean_at(design, at).L, np.zeros(1))
