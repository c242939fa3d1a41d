"""Exact answers against eigenvalues of n x n matrices written out from the formulas, and structures against one another."""

import numpy as np
import pytest
from scipy import linalg, stats

from withstand.exact import coverage, moments, power, structure
from withstand.exact.band import BandSweep
from withstand.exact.chain import TridiagonalSolves
from withstand.exact.compressed import CompressedRows
from withstand.exact.contour import Inverter
from withstand.exact.grouped import RowSums
from withstand.exact.modes import dense_modes
from withstand.exact.problem import pose
from withstand.procedures import make_procedure
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind

from .cases import DEPENDENCES, PROCEDURES, any_case, dense_size, disturb, imhof, ingredients, random_case

TOLERANCE = 1e-7
EFFECTS = (0.0, 1.0, 3.0)


def check(case):
    found = coverage(*case.ask)
    reference = dense_size(case)
    assert found.size == pytest.approx(reference, abs=TOLERANCE)
    assert found.coverage == pytest.approx(1 - reference, abs=TOLERANCE)
    assert found.miss_below + found.miss_above == pytest.approx(found.size, abs=1e-12)
    if case.focus.kind is not FocusKind.NEW:
        powers = power(*case.ask, np.array(EFFECTS) * case.unit)
        assert powers == pytest.approx([dense_size(case, effect * case.unit) for effect in EFFECTS], abs=TOLERANCE)


@pytest.mark.parametrize("kind", DEPENDENCES)
@pytest.mark.parametrize("procedure", PROCEDURES)
def test_every_procedure_under_every_dependence(procedure, kind):
    rng = np.random.default_rng([len(procedure), len(kind)])
    check(random_case(rng, 30, 3, procedure, kind))
    check(random_case(rng, 30, 3, procedure, kind, mean=True, leverage=0.9, level=0.99))


@pytest.mark.parametrize("procedure", [name for name in PROCEDURES if name != "known-weights"])
def test_new_response(procedure):
    rng = np.random.default_rng(7)
    check(random_case(rng, 30, 3, procedure, "serial", new=True))
    check(random_case(rng, 30, 3, procedure, "clusters", new=True, mean=True, leverage=0.9))


@pytest.mark.parametrize("seed", range(6))
def test_the_whole_range(seed):
    rng = np.random.default_rng(seed)
    for _ in range(8):
        check(any_case(rng, 300))


SWEEPS = (
    ("ols", "none", RowSums),
    ("ols", "serial", TridiagonalSolves),
    ("hc3", "serial within groups", TridiagonalSolves),
    ("known-weights", "serial", TridiagonalSolves),
    ("hc3", "clusters", RowSums),
    ("hac", "none", BandSweep),
    ("hac", "serial", BandSweep),
)


@pytest.mark.parametrize(("procedure", "kind", "sweep"), SWEEPS)
def test_the_sweeps_where_eigenvalues_would_be_quicker(procedure, kind, sweep, monkeypatch):
    monkeypatch.setattr(structure, "_QUICKER_DENSE", dict.fromkeys(structure._QUICKER_DENSE, 0))
    rng = np.random.default_rng(len(procedure + kind))
    for mean in (False, True):
        case = random_case(rng, 60, 4, procedure, kind, mean=mean, leverage=0.95)
        assert isinstance(structure.structure_of(pose(*case.ask)), sweep)
        check(case)


@pytest.mark.parametrize("procedure", ["ols", "hc0", "hc3"])
def test_compressed_rows(procedure):
    rng = np.random.default_rng(3)
    for mean in (False, True):
        case = random_case(rng, 4000, 4, procedure, "none", mean=mean)
        problem = pose(*case.ask)
        compressed = CompressedRows(problem.columns, problem.p, problem.middle.d, problem.spread)
        rows = RowSums(problem.columns, problem.p, problem.middle.d, problem.spread)
        effects = problem.to_unit(np.array([[0.0], [1.0], [3.0]]) * case.unit)
        one, other = (Inverter(problem, each).probabilities(effects, sides=True) for each in (compressed, rows))
        for name in ("beyond", "within", "below", "above"):
            assert getattr(one, name) == pytest.approx(getattr(other, name), abs=1e-12)


def test_rows_that_do_not_enter_the_variance_estimate():
    """A contrast of two groups leaves rows of a third with weight 0."""
    codes = np.repeat([0, 1, 2], [1500, 1500, 1500])
    X = (codes[:, None] == np.arange(3)).astype(float)
    design = Design(X, ("a", "b", "c"))
    focus = Focus("b - a", FocusKind.CONTRAST, np.array([[-1.0, 1.0, 0.0]]), np.zeros(1))
    disturbance = disturb(design, spread=np.linspace(1.0, 3.0, 4500))
    problem = pose(make_procedure("hc3"), design, focus, disturbance, 0.95)
    assert isinstance(structure.structure_of(problem), CompressedRows)
    rows = RowSums(problem.columns, problem.p, problem.middle.d, problem.spread)
    ours = Inverter(problem).probabilities(np.zeros((1, 1))).beyond
    assert ours == pytest.approx(Inverter(problem, rows).probabilities(np.zeros((1, 1))).beyond, abs=1e-12)


@pytest.mark.parametrize("kind", DEPENDENCES)
def test_joint_test(kind):
    """|w|^2 > c^2 e'e/(n - p) by eigenvalues; the region holds the true value at effect 0."""
    rng = np.random.default_rng(17)
    case = random_case(rng, 40, 5, "ols", kind, mean=True)
    L = rng.standard_normal((3, 5))
    focus = Focus("three", FocusKind.JOINT, L, np.zeros(3))
    X = case.design.X
    A = L @ np.linalg.solve(X.T @ X, X.T)
    M = np.eye(40) - X @ np.linalg.solve(X.T @ X, X.T)
    mean, covariance, *_ = ingredients(case)
    B = A.T @ np.linalg.solve(A @ A.T, A) - 3 * stats.f.isf(0.05, 3, 35) * M / 35
    G = linalg.cholesky(covariance, lower=True)
    weights, U = np.linalg.eigh(G.T @ B @ G)

    def reference(effect):
        moved = mean + A.T @ np.linalg.solve(A @ A.T, effect)
        return imhof(weights, U.T @ linalg.solve_triangular(G, moved, lower=True))

    found = coverage(case.procedure, case.design, focus, case.disturbance, 0.95)
    assert found.size == pytest.approx(reference(np.zeros(3)), abs=TOLERANCE)
    assert found.miss_below is None
    assert found.width is None
    effects = rng.standard_normal((4, 3)) * np.sqrt(np.diag(A @ A.T))
    assert power(case.procedure, case.design, focus, case.disturbance, 0.95, effects) == pytest.approx(
        [reference(effect) for effect in effects], abs=TOLERANCE
    )


@pytest.mark.parametrize("kind", DEPENDENCES)
@pytest.mark.parametrize("procedure", PROCEDURES)
def test_moments(procedure, kind):
    rng = np.random.default_rng(23)
    for new in (False, True):
        if new and procedure == "known-weights":
            continue
        case = random_case(rng, 25, 3, procedure, kind, mean=True, new=new)
        mean, covariance, a, K, _ = ingredients(case)
        found = moments(*case.ask[:-1])
        assert found.bias == pytest.approx(a @ mean, rel=1e-9)
        assert found.variance == pytest.approx(a @ covariance @ a, rel=1e-9)
        assert found.claimed_variance == pytest.approx(np.trace(K @ covariance) + mean @ K @ mean, rel=1e-9)


def test_eigenvalue_and_structured_route_of_the_same_problem():
    rng = np.random.default_rng(29)
    case = random_case(rng, 200, 4, "hc3", "serial", mean=True)
    problem = pose(*case.ask)
    swept = Inverter(problem).probabilities(np.zeros((1, 1)), sides=True)
    dense = Inverter(problem, dense_modes(problem)).probabilities(np.zeros((1, 1)), sides=True)
    for name in ("beyond", "within", "below", "above"):
        assert getattr(swept, name) == pytest.approx(getattr(dense, name), abs=1e-9)
