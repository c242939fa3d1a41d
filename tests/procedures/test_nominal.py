"""Coverage and size of every procedure under the ideal model: the exact value where there is one, else the nominal one."""

import numpy as np
import pytest

from withstand.departures import Serial, World
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.engine.tally import Feature
from withstand.exact import can_be_exact, coverage
from withstand.procedures import REGISTRY, Gls, LinearProcedure, make_procedure
from withstand.procedures.base import Answer
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus
from withstand.study.rows import FixedRows
from withstand.study.study import Study

ALLOWED = 4.5
"""Monte Carlo standard errors allowed: one false alarm in 150,000 checks of a true value."""

LEVEL = 0.95
BETA = np.array([25.0, 0.0, 0.0])
"""No effects, so that a mean on the log scale is as straight as one on the original scale."""

NAMES = ("Intercept", "x1", "late")


def make_study(n):
    rng = np.random.default_rng(22)
    x = rng.lognormal(0.0, 0.5, n)
    late = (np.arange(n) % 3 == 0).astype(float)
    X = np.column_stack([np.ones(n), x, late])
    design = Design(
        X,
        NAMES,
        columns={"x1": x},
        factors={"late": Factor(late.astype(np.int64), ("no", "yes"))},
        fitted=X @ BETA,
        order=np.arange(n, dtype=float),
        groups=(np.arange(n) % (n // 8)).astype(np.int64),
        weights=np.ones(n),
    )
    focus = Focus.coefficient("x1", NAMES)
    return Study("nominal", "", design, (focus,), BETA, 1.0, FixedRows(design), level=LEVEL, digest=f"nominal-{n}")


def simulate(procedure, n, replicates, stack=()):
    """Shares of intervals that cover and of tests that reject, and of failures."""
    study = make_study(n)
    job = Job(study, (World(stack),) if stack else (), (procedure,), seed=17)
    where = 0 if stack else BASELINE
    tally = Kernel(job).run(range(replicates // job.width), {where: (0,)})[where, 0][0]
    at = tally.products[Feature.ONE] / tally.replicates
    return study, tally.replicates, at[Feature.COVERED], at[Feature.REJECTED], 1.0 - at[Feature.OK]


def within(share, expected, replicates):
    return abs(share - expected) <= ALLOWED * np.sqrt(expected * (1.0 - expected) / replicates)


LINEAR = [name for name, cls in REGISTRY.items() if issubclass(cls, LinearProcedure)]
OTHERS = [name for name in REGISTRY if name not in LINEAR and name != "gls"]


@pytest.mark.parametrize("name", LINEAR)
def test_linear_procedures_are_as_far_from_nominal_as_theory_says(name):
    """Forty rows, where several are far from nominal; the exact value comes from the inversion of a quadratic form."""
    procedure = make_procedure(name)
    study, replicates, covered, rejected, failed = simulate(procedure, 40, 10_000)
    world = World().on(study.design)
    assert can_be_exact(procedure, study.focus[0], world) is None
    exact = coverage(procedure, study.design, study.focus[0], world, LEVEL).coverage
    assert failed == 0.0
    assert within(covered, exact, replicates)
    assert rejected == pytest.approx(1.0 - covered)


@pytest.mark.parametrize("name", OTHERS)
def test_others_are_nominal_in_large_samples(name):
    """Their distortions are of order p/n, here below 0.01, which is inside the Monte Carlo error of 2,000 replicates."""
    procedure = make_procedure(name)
    study, replicates, covered, rejected, failed = simulate(procedure, 400, 2000)
    given = procedure.answers(study.focus[0])
    assert failed == 0.0
    if Answer.INTERVAL in given:
        assert within(covered, LEVEL, replicates)
    if Answer.TEST in given:
        assert within(rejected, 1.0 - LEVEL, replicates)


@pytest.mark.parametrize("rho", [0.5, -0.3])
def test_gls_is_nominal_where_its_correlation_is_true(rho):
    """Exactly, in a sample of any size: the errors it makes are independent and normal."""
    _, replicates, covered, rejected, failed = simulate(Gls(rho=rho), 40, 10_000, ((Serial(), rho),))
    assert failed == 0.0
    assert within(covered, LEVEL, replicates)
    assert rejected == pytest.approx(1.0 - covered)
