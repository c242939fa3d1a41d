import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.signal import lfilter

from withstand.departures import Clusters, NoiseStream, Serial, Skew, World
from withstand.departures.chain import AR1, Series
from withstand.engine.noise import BlockNoise
from withstand.errors import ScenarioError
from withstand.study.design import Design


def series_design(order, groups=None):
    n = len(order)
    X = np.column_stack([np.ones(n), np.cos(np.arange(n))])
    codes = None if groups is None else np.asarray(groups, dtype=np.int64)
    return Design(X=X, names=("Intercept", "c"), order=np.asarray(order, dtype=float), groups=codes)


def matrix(dependence, n):
    return dependence.correlate(np.eye(n))


def test_even_steps_give_the_toeplitz_matrix():
    R = matrix(Serial().dependence(series_design(range(12)), 0.6), 12)
    assert pytest.approx(toeplitz(0.6 ** np.arange(12)), abs=1e-14) == R


def test_gaps_count_in_steps():
    """Positions 0 1 3 4 8: correlations rho^|difference|."""
    at = np.array([0.0, 1.0, 3.0, 4.0, 8.0])
    departure = Serial()
    design = series_design(10 * at)
    assert departure.step_length(design) == 10.0
    expected = 0.7 ** np.abs(at[:, None] - at)
    assert pytest.approx(expected) == matrix(departure.dependence(design, 0.7), 5)
    assert departure.note(design).startswith("the gaps of the order column are 1 to 4 steps of 10 (whole numbers)")
    signed = (-0.7) ** np.abs(at[:, None] - at).astype(int)
    assert pytest.approx(signed) == matrix(departure.dependence(design, -0.7), 5)


def test_unequal_gaps_use_the_median_and_say_so():
    at = np.array([0.0, 0.3, 1.3, 2.3, 4.0])
    design = series_design(at)
    assert Serial().step_length(design) == pytest.approx(1.0)
    assert "(unequal numbers)" in Serial().note(design)
    assert pytest.approx(0.5 ** np.abs(at[:, None] - at)) == matrix(Serial().dependence(design, 0.5), 5)
    twice = Serial(step=2.0)
    assert pytest.approx(0.5 ** (np.abs(at[:, None] - at) / 2)) == matrix(twice.dependence(design, 0.5), 5)


def test_series_within_interleaved_groups():
    groups = np.array([0, 1, 0, 2, 1, 0, 1])
    at = np.arange(7.0)
    dependence = Serial(within="groups", step=1.0).dependence(series_design(at, groups), 0.8)
    assert dependence.previous.tolist() == [-1, -1, 0, -1, 1, 2, 4]
    assert dependence.links == pytest.approx([0, 0, 0.8**2, 0, 0.8**3, 0.8**3, 0.8**2])
    same = groups[:, None] == groups
    assert pytest.approx(np.where(same, 0.8 ** np.abs(at[:, None] - at), 0.0)) == matrix(dependence, 7)


@pytest.mark.parametrize("width", [7, 400])
def test_the_recursion_is_that_of_a_filter(width):
    """SciPy's linear filter of the same innovations; the narrow and the wide path."""
    n, rho = 60, -0.4
    design = series_design(range(n))
    noise = BlockNoise(1, 0, width)
    scores = noise.normal(NoiseStream.ERRORS, n)
    errors = Serial().dependence(design, rho).apply(scores, None, noise, np.empty((n, width)))
    innovations = np.sqrt(1 - rho**2) * scores
    innovations[0] = scores[0]
    assert np.allclose(errors, lfilter([1.0], [1.0, -rho], innovations, axis=0), rtol=0, atol=1e-13)


def test_both_paths_agree_on_uneven_interleaved_series():
    rng = np.random.default_rng(4)
    n = 90
    groups = rng.integers(0, 5, n)
    previous = Series.of(np.arange(float(n)), groups).previous
    links = np.where(previous >= 0, rng.uniform(-0.9, 0.9, n), 0.0)
    chain = AR1(links, previous)
    noise = BlockNoise(1, 0, 300)
    scores = noise.normal(NoiseStream.ERRORS, n)
    wide = chain.apply(scores, None, noise, np.empty((n, 300)))
    narrow = chain.apply(np.ascontiguousarray(scores[:, :11]), None, noise, np.empty((n, 11)))
    assert np.allclose(wide[:, :11], narrow, rtol=0, atol=1e-13)


@pytest.mark.parametrize("law", [None, Skew().law(2.0)], ids=["normal", "skew"])
def test_stated_autocorrelation(law, noise):
    """Unit variance everywhere and correlation rho at lag 1, rho^3 at lag 3, within 5 Monte Carlo standard errors."""
    n, rho = 30, 0.6
    scores = noise.normal(NoiseStream.ERRORS, n)
    errors = Serial().dependence(series_design(range(n)), rho).apply(scores, law, noise, np.empty((n, noise.width)))
    for lag in (0, 1, 3):
        products = np.mean(errors[lag:] * errors[: n - lag], axis=0)
        assert abs(products.mean() - rho**lag) < 5 * products.std() / np.sqrt(noise.width)


def test_the_narrow_path_of_a_world_is_the_wide_one(design):
    """A law, a dependence and a spread at once, in blocks of 20 and of 400 replicates of the same scores."""
    world = World(((Serial(), 0.5), (Skew(), 1.0))).on(design)
    wide = BlockNoise(2, 0, 400)
    errors = world.draw(wide, np.empty((design.n, 400)))
    scores = wide.normal(NoiseStream.ERRORS, design.n)[:, :20].copy()
    narrow = world.dependence.apply(scores, world.law, wide, np.empty((design.n, 20)))
    assert np.allclose(errors[:, :20], narrow, rtol=0, atol=1e-12)


def test_clusters_give_the_block_matrix(design):
    same = design.groups[:, None] == design.groups
    R = matrix(Clusters().dependence(design, 0.3), design.n)
    assert pytest.approx(np.where(same, 0.3, 0.0) + 0.7 * np.eye(design.n)) == R


@pytest.mark.parametrize("law", [None, Skew().law(2.0)], ids=["normal", "skew"])
def test_stated_intraclass_correlation(law, design, noise):
    scores = noise.normal(NoiseStream.ERRORS, design.n)
    errors = Clusters().dependence(design, 0.3).apply(scores, law, noise, np.empty((design.n, noise.width)))
    same = (design.groups[:, None] == design.groups) & ~np.eye(design.n, dtype=bool)
    inside = np.einsum("ib,ib->b", errors, same @ errors) / same.sum()
    assert abs(inside.mean() - 0.3) < 5 * inside.std() / np.sqrt(noise.width)
    apart = design.groups[:, None] != design.groups
    across = np.einsum("ib,ib->b", errors, apart @ errors) / apart.sum()
    assert abs(across.mean()) < 5 * across.std() / np.sqrt(noise.width)


def test_group_effects_are_shared_by_the_rows_of_a_group(design):
    noise = BlockNoise(1, 0, 50)
    scores = noise.normal(NoiseStream.ERRORS, design.n)
    errors = Clusters().dependence(design, 0.36).apply(scores, None, noise, np.empty((design.n, 50)))
    effects = noise.normal(NoiseStream.GROUPS, design.group_count)
    assert np.allclose(errors, 0.6 * effects[design.groups] + 0.8 * scores)


def test_reasons_not_to_apply(design, line):
    bare = Design(X=line.X, names=line.names)
    assert 'order = "..."' in Serial().not_applicable(bare)
    assert 'groups = "..."' in Clusters().not_applicable(bare)
    assert 'groups = "..."' in Serial(within="groups").not_applicable(line)
    tied = series_design([0, 1, 1, 2])
    assert "two rows share the position 1 " in Serial().not_applicable(tied)
    apart = series_design([0, 1, 1, 2], [0, 0, 1, 1])
    assert Serial(within="groups").not_applicable(apart) is None
    assert "every group has one row" in Serial(within="groups").not_applicable(series_design(range(4), range(4)))
    assert "negative correlation -0.2" in Serial([0.1, -0.2]).not_applicable(series_design([0, 1, 2.5, 3.2]))
    assert Serial([0.1, 0.2]).not_applicable(series_design([0, 1, 2.5, 3.2])) is None
    assert "all rows are in one group" in Clusters().not_applicable(series_design(range(4), [0] * 4))
    assert "every group has one row" in Clusters().not_applicable(series_design(range(4), range(4)))


def test_what_cannot_be_built_is_refused(line):
    bare = Design(X=line.X, names=line.names)
    with pytest.raises(ScenarioError, match="names no order column"):
        Serial().dependence(bare, 0.3)
    with pytest.raises(ScenarioError, match="needs an order column"):
        Serial().note(bare)
    with pytest.raises(ScenarioError, match="share the position 1 "):
        Serial().dependence(series_design([0, 1, 1, 2]), 0.3)
    with pytest.raises(ScenarioError, match="needs groups"):
        Clusters().dependence(bare, 0.3)
    with pytest.raises(ScenarioError, match="within 'rows'"):
        Serial(within="rows")
    with pytest.raises(ScenarioError, match="step -1 "):
        Serial(step=-1.0)


def test_two_dependences_do_not_stack():
    with pytest.raises(ScenarioError, match="'serial' and 'clusters' both set the dependence"):
        World(((Serial(), 0.1), (Clusters(), 0.1)))
