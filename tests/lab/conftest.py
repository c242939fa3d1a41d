import numpy as np
import pytest

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.mean import Curvature
from withstand.departures.shape import Skew
from withstand.departures.spread import Fan
from withstand.lab.plan import Axis, Plan
from withstand.procedures.base import make_procedure
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind
from withstand.study.rows import FixedRows
from withstand.study.study import Study


def build_study(with_response=True, effect=0.1, joint=False, rows=None):
    """Twenty-four boards in four charges: y ~ hours + C(wood)."""
    rng = np.random.default_rng(20)
    n = 24
    hours = 20.0 * np.exp(0.4 * rng.standard_normal(n))
    wood = np.arange(n) % 2
    X = np.column_stack([np.ones(n), hours, wood])
    beta = np.array([2.0, 0.05, 0.5])
    names = ("Intercept", "hours", "C(wood)[T.oak]")
    design = Design(
        X,
        names,
        columns={"hours": hours},
        factors={"wood": Factor(wood.astype(np.int64), ("beech", "oak"))},
        fitted=X @ beta,
        order=np.arange(float(n)),
        groups=(np.arange(n) // 6).astype(np.int64),
    )
    foci = [Focus.coefficient("hours", names, effect)]
    if joint:
        foci.append(Focus("both", FocusKind.JOINT, np.eye(3)[1:], np.zeros(2)))
    # Errors with a fan, so that the residuals allow one.
    y = X @ beta + np.exp(hours / 30.0) * rng.standard_normal(n)
    b = np.linalg.lstsq(X, y, rcond=None)[0]
    sd = float(np.sqrt(np.sum((y - X @ b) ** 2) / (n - 3)))
    return Study(
        "boards",
        "y ~ hours + C(wood)",
        design,
        tuple(foci),
        b,
        sd,
        rows or FixedRows(design),
        response=y if with_response else None,
        roles={"order": "run", "groups": "charge"},
        digest="boards" + ("" if with_response else " planned") + (" drawn" if rows else ""),
    )


def build_plan(axes=None, procedures=("ols", "hc3"), **options):
    if axes is None:
        axes = [Fan(along="hours", severity=(2.0, 4.0)), Skew(severity=(1.0, 4.0))]
    axes = [axis if isinstance(axis, Axis) else Axis(axis) for axis in axes]
    effort = {"seed": 5, "repetitions": 2000, "most": 8000} | options
    return Plan(tuple(axes), tuple(make_procedure(name) for name in procedures), **effort)


EXACT = (
    Fan(along="hours", severity=(2.0, 4.0)),
    Clusters(severity=(0.1, 0.3)),
    Serial(severity=(0.2, 0.5)),
    Curvature(along="hours", severity=(0.5, 2.0)),
)


@pytest.fixture(scope="session")
def study():
    return build_study()


@pytest.fixture(scope="session")
def planned():
    return build_study(with_response=False)


@pytest.fixture(scope="session")
def make_study():
    return build_study


@pytest.fixture(scope="session")
def make_plan():
    return build_plan


@pytest.fixture(scope="session")
def exact_axes():
    return EXACT
