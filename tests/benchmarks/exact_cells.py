"""Random cells that have exact answers, and their simulation through the engine."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from withstand.departures import (
    Bowtie,
    Clusters,
    Contaminated,
    Curvature,
    Departure,
    Fan,
    HeavyTails,
    LevelSpread,
    Outliers,
    PowerSpread,
    Serial,
    Skew,
    World,
    WorstFan,
)
from withstand.engine.block import Kernel
from withstand.engine.job import Job
from withstand.exact import can_be_exact, coverage
from withstand.measures.compute import measure
from withstand.procedures import make_procedure
from withstand.procedures.base import LinearProcedure
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind, Point
from withstand.study.rows import FixedRows
from withstand.study.study import Study

PROCEDURES = (
    *("ols", "hc0", "hc1", "hc2", "hc2-bm", "hc3", "hc4", "hc4m", "hc5", "hac", "hac-cosine", "cr0", "cr1", "cr2"),
    "known-weights",
)
MEASURES = ("coverage", "miss_below", "miss_above", "power", "width", "bias")


def make_design(rng: np.random.Generator, n: int) -> Design:
    """Three predictors, one of them skewed, with order, groups, weights and a factor."""
    x = np.column_stack([rng.standard_normal(n), np.exp(rng.standard_normal(n)), rng.uniform(-1, 1, n)])
    names = ("Intercept", "x1", "x2", "x3")
    codes = np.unique(rng.integers(0, n // 4, n), return_inverse=True)[1].astype(np.int64)
    return Design(
        np.column_stack([np.ones(n), x]),
        names,
        columns={f"x{i + 1}": x[:, i] for i in range(3)},
        factors={"site": Factor((np.arange(n) % 3).astype(np.int64), ("a", "b", "c"))},
        fitted=x.sum(axis=1),
        order=np.cumsum(rng.choice([1.0, 1.0, 2.0], n)),
        groups=codes,
        weights=np.exp(0.5 * rng.standard_normal(n)),
    )


def make_world(rng: np.random.Generator) -> World:
    """One or two departures with normal errors, of any severity."""
    ratio = float(np.exp(rng.uniform(0, np.log(10))))
    rho = float(rng.uniform(-0.9, 0.9))
    spread: list[tuple[Departure, float]] = [
        (Fan((ratio,), along="x1"), ratio),
        (Bowtie((ratio,), along="x2"), ratio),
        (PowerSpread((1.0,), along="x2"), float(rng.uniform(0.1, 1.5))),
        (LevelSpread((ratio,), along="site", noisy=("b",)), ratio),
    ]
    other: list[tuple[Departure, float]] = [
        (Serial((rho,), step=1.0), rho),
        (Serial((rho,), step=1.0, within="groups"), rho),
        (Clusters((abs(rho),)), abs(rho)),
        (Curvature((1.0,), along="x1"), float(rng.uniform(0.1, 1.5))),
    ]
    first, second = spread[rng.integers(4)], other[rng.integers(4)]
    return World(((first,), (second,), (first, second))[rng.integers(3)])


def make_focus(rng: np.random.Generator, design: Design, procedure: str) -> Focus:
    """A coefficient, a mean, a new response or, with the classical variance, several coefficients at once."""
    kind = rng.integers(5 if procedure == "ols" else 4 if procedure != "known-weights" else 3)
    effect = 2.5 / math.sqrt(design.n)
    point = Point({"x1": 0.5, "x2": 1.0, "x3": 0.2}, {"site": "a"}, 1.7)
    if kind < 2:
        return Focus.coefficient(f"x{rng.integers(1, 4)}", design.names, effect)
    row = np.array([[1.0, 0.5, 1.0, 0.2]])
    if kind == 2:
        return Focus("mean", FocusKind.MEAN, row, np.zeros(1), np.array([effect]), point)
    if kind == 3:
        return Focus("new", FocusKind.NEW, row, np.zeros(1), None, point)
    return Focus("slopes", FocusKind.JOINT, np.eye(4)[1:], np.zeros(3), np.full(3, effect))


@dataclass(frozen=True)
class Comparison:
    """A simulated value against the exact one."""

    measure: str
    what: str
    z: float


def compare(seed: int, replicates: int) -> list[Comparison]:
    """One cell on a design and with a seed of its own; nothing is shared with other cells."""
    rng = np.random.default_rng(seed)
    design = make_design(rng, int(rng.integers(16, 41)))
    name = str(rng.choice(PROCEDURES))
    procedure = make_procedure(name)
    world, focus = make_world(rng), make_focus(rng, design, name)
    study = Study("cell", "", design, (focus,), np.zeros(4), 1.0, FixedRows(design), digest=str(seed))
    disturbance = world.on(design)
    reason = can_be_exact(procedure, focus, disturbance)
    if reason is not None or not isinstance(procedure, LinearProcedure):
        raise AssertionError(f"{name}, {focus.kind}: {reason}")
    effects = None if focus.effect is None else focus.effect[None]
    exact = coverage(procedure, design, focus, disturbance, study.level, effects=effects)
    truth = {"coverage": exact.coverage, "miss_below": exact.miss_below, "miss_above": exact.miss_above, "width": exact.width}
    if exact.power is not None:
        truth["power"] = float(exact.power[0])
    job = Job(study, (world,), (procedure,), seed)
    tally = Kernel(job).run(range(-(-replicates // job.width)), {0: (0,)})[0, 0][0]
    if tally is None:
        raise AssertionError(f"{name} had no answer for {focus.kind}")
    found = []
    for key, estimate in measure(tally, list(truth)).items():
        value = truth[key]
        if value is None:
            continue
        se = estimate.mc_se if key == "width" else math.sqrt(value * (1 - value) / tally.replicates)
        # A rate of next to nothing has no normal z-score.
        if key == "width" or min(value, 1 - value) * tally.replicates >= 50:
            found.append(Comparison(key, f"seed {seed}: {name}, {focus.kind}, {world.key}", (estimate.value - value) / se))
    return found


def control_variate_gains(replicates: int) -> list[tuple[str, str, float, float]]:
    """Departure, procedure, coverage, and the variance of the plain estimate over that with the known baseline."""
    rng = np.random.default_rng(1)
    design = make_design(rng, 40)
    focus = Focus.coefficient("x1", design.names)
    study = Study("gain", "", design, (focus,), np.zeros(4), 1.0, FixedRows(design), digest="gain")
    departures: tuple[Departure, ...] = (
        HeavyTails(),
        Contaminated(),
        Skew(),
        Outliers(),
        Fan(along="x1"),
        WorstFan().for_focus(focus),
        Serial(),
        Clusters(),
        Curvature(along="x1"),
    )
    worlds = [(f"{d.kind} {s:g}", World(((d, s),))) for d in departures for s in (d.ladder[0], d.ladder[-1])]
    procedures = ("ols", "hc3")
    job = Job(study, tuple(world for _, world in worlds), tuple(make_procedure(name) for name in procedures), 5)
    active = {i: tuple(range(len(procedures))) for i in range(len(worlds))}
    tallies = Kernel(job).run(range(-(-replicates // job.width)), active)
    rows = []
    for i, (label, _) in enumerate(worlds):
        for j, name in enumerate(procedures):
            tally = tallies[i, j][0]
            if tally is None:
                raise AssertionError(f"{name} had no answer under {label}")
            found = measure(tally, ["coverage"])["coverage"]
            rows.append((label, name, found.value, (found.mc_se / found.shift_se) ** 2))
    return rows
