"""Runs the engine on a design for the published tables, as plainly as possible."""

import numpy as np

from withstand.departures import World
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.measures.compute import MEASURES, measure
from withstand.procedures.base import make_procedure
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind
from withstand.study.rows import FixedRows
from withstand.study.study import Study

ALLOWED = 4.5
"""Monte Carlo standard errors allowed: one false alarm in 150,000 checks of a true value."""


def coefficient(design, name, effect=None):
    return Focus.coefficient(name, design.names, effect)


def joint(design, columns, effect=None):
    L = np.zeros((len(columns), design.p))
    L[np.arange(len(columns)), columns] = 1.0
    return Focus("term", FocusKind.JOINT, L, np.zeros(len(columns)), effect)


def line(n):
    """Intercept and x = 1..n."""
    x = np.arange(1.0, n + 1)
    return Design(np.column_stack([np.ones(n), x]), ("Intercept", "x"), columns={"x": x}, order=x)


def groups(sizes):
    """One indicator a group but the first; the factor 'group' says where each row belongs."""
    codes = np.repeat(np.arange(len(sizes)), sizes)
    X = np.column_stack([np.ones(len(codes)), *(codes == g for g in range(1, len(sizes)))]).astype(float)
    names = ("Intercept", *(f"group{g}" for g in range(1, len(sizes))))
    return Design(X, names, factors={"group": Factor(codes.astype(np.int64), tuple(f"g{g}" for g in range(len(sizes))))})


def simulate(design, focus, stack, procedures, *, replicates, seed=1, rows=None):
    """Measures by procedure in one world.

    Parameters
    ----------
    stack : tuple of (Departure, float)
        The world; empty for the baseline.
    """
    rows = FixedRows(design) if rows is None else rows
    study = Study("published", "", design, (focus,), np.zeros(design.p), 1.0, rows, digest="published")
    made = tuple(make_procedure(p) for p in procedures)
    job = Job(study, (World(tuple(stack)),) if stack else (), made, seed)
    blocks = range(-(-replicates // job.width))
    where = 0 if stack else BASELINE
    found = Kernel(job).run(blocks, {where: range(len(made))})
    return {p: measure(found[where, i][0], list(MEASURES)) for i, p in enumerate(procedures)}


def agrees(estimate, value, published_replicates=None, scale=1.0):
    """Whether a simulated value agrees with an outside one, whose own Monte Carlo error is counted where it has one."""
    variance = estimate.mc_se**2
    if published_replicates is not None:
        variance += value * (1 - value) / published_replicates
    return abs(estimate.value - value) <= scale * ALLOWED * np.sqrt(variance)
