import numpy as np
import pytest

from withstand.departures.world import World
from withstand.engine.job import Job
from withstand.procedures.base import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus
from withstand.study.rows import FixedRows
from withstand.study.study import Study


def make_study(n=24, p=3, seed=5, effect=0.8):
    generator = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), generator.standard_normal((n, p - 1))])
    names = ("Intercept", *(f"x{i}" for i in range(1, p)))
    columns = {name: X[:, i] for i, name in enumerate(names) if i}
    design = Design(X, names, columns=columns, fitted=X @ np.arange(1.0, p + 1))
    focus = (Focus.coefficient("x1", names, effect),)
    return Study("test", "y ~ x", design, focus, np.arange(1.0, p + 1), 2.0, FixedRows(design), digest=f"{n}-{p}-{seed}")


@pytest.fixture
def study():
    return make_study()


@pytest.fixture
def make_job():
    def make(study, worlds=(), procedures=("ols", "hc3"), seed=11):
        stacks = tuple(World(tuple(stack)) for stack in worlds)
        return Job(study, stacks, tuple(make_procedure(name) for name in procedures), seed)

    return make
