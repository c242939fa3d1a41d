import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from withstand.departures.dependence import Clusters
from withstand.departures.mean import Curvature
from withstand.departures.outliers import Outliers
from withstand.departures.shape import HeavyTails, Skew
from withstand.departures.spread import Fan
from withstand.departures.world import World
from withstand.judgement.aspects import aspects_of
from withstand.judgement.limit import Cure, Stage, doublings, limit_from, limit_of
from withstand.judgement.tolerance import Tolerance
from withstand.procedures.base import make_procedure
from withstand.study.focus import Focus, FocusKind, Point
from withstand.study.growth import Stack

ACCEPTED = aspects_of(Tolerance(), 0.05)["coverage"]


@pytest.fixture(scope="module")
def grown(study):
    design = replace(study.design, order=None)
    return doublings(Stack(replace(study, design=design)))


def limit(grown, procedure, *stack, focus=None):
    return limit_of(grown, make_procedure(procedure), focus or grown[0].focus[0], World(tuple(stack)), ACCEPTED)


def test_normal_errors_are_covered_at_the_level_in_the_limit(grown):
    for procedure in ("ols", "hc3", "cr2"):
        found = limit(grown, procedure)
        assert found.cure is Cure.FADES
        assert found.coverage == pytest.approx(0.95, abs=2e-4)


def test_a_fan_is_not_cured_by_rows_for_ols_and_is_for_a_sandwich(grown):
    """Against the population formula: with copied rows the ratio of claimed to true variance is that of the rows themselves."""
    study, fan = grown[0], (Fan(along="x"), 4.0)
    found = limit(grown, "ols", fan)
    X, L = study.design.X, study.focus[0].L
    s2 = World((fan,)).on(study.design).spread ** 2
    bread = np.linalg.inv(X.T @ X)
    true = L @ bread @ (X.T * s2) @ X @ bread @ L.T
    claimed = L @ bread @ L.T * s2.mean()
    ratio = math.sqrt(float(claimed[0, 0] / true[0, 0]))
    assert found.ratio == pytest.approx(ratio, abs=1e-4)
    assert found.coverage == pytest.approx(2 * stats.norm.cdf(1.959964 * ratio) - 1, abs=1e-4)
    assert found.cure is Cure.NEVER
    assert limit(grown, "hc3", fan).cure is Cure.FADES


def test_groups_are_cured_by_a_cluster_robust_variance_alone(grown, study):
    intercept = Focus.coefficient("Intercept", study.design.names)
    assert limit(grown, "ols", (Clusters(), 0.4), focus=intercept).cure is Cure.NEVER
    assert limit(grown, "cr2", (Clusters(), 0.4), focus=intercept).cure is Cure.FADES


def test_the_law_of_the_errors_fades(grown):
    for departure, severity in ((Skew(), 2.0), (HeavyTails(), 0.3)):
        assert limit(grown, "ols", (departure, severity)).cure is Cure.FADES


def test_one_outlier_among_more_and_more_rows_fades_and_a_share_of_them_does_not(grown, study):
    assert limit(grown, "ols", (Outliers(count=1), 8.0)).cure is Cure.FADES
    intercept = Focus.coefficient("Intercept", study.design.names)
    shifted = limit(grown, "ols", (Outliers(share=0.1), 8.0), focus=intercept)
    assert (shifted.cure, shifted.coverage, shifted.bias_stays) == (Cure.NEVER, 0.0, True)
    assert limit(grown, "ols", (Outliers(share=0.1, placement="leverage"), 8.0)) is None


def test_a_bias_from_curvature_stays(grown, study):
    """At a point away from the line the fitted mean is off by a fixed amount while its standard error vanishes."""
    x = float(study.design.columns["x"].max())
    at = np.array([[1.0, x, 0.0]])
    focus = Focus("at the end", FocusKind.MEAN, at, np.zeros(1), point=Point({"x": x}, {"site": "south"}, 10.0))
    found = limit(grown, "ols", (Curvature(along="x"), 1.0), focus=focus)
    assert (found.cure, found.coverage, found.bias_stays) == (Cure.NEVER, 0.0, True)


def test_a_new_response_keeps_the_law_of_its_own_error(grown, study):
    x = float(np.median(study.design.columns["x"]))
    at = np.array([[1.0, x, 0.0]])
    focus = Focus("new", FocusKind.NEW, at, np.zeros(1), point=Point({"x": x}, {"site": "south"}, 10.0))
    found = limit(grown, "ols", (HeavyTails(), 1 / 3), focus=focus)
    # t with 3 df scaled to variance 1 has SD sqrt(3): P(|t| <= 1.96 sqrt(3)).
    wanted = 1 - 2 * stats.t.sf(1.959964 * math.sqrt(3.0), 3)
    assert found.coverage == pytest.approx(wanted, abs=1e-3)


def stages(*ratios, bias=(0.0, 0.0, 0.0)):
    return [Stage(100 * 2**i, ratio, b) for i, (ratio, b) in enumerate(zip(ratios, bias, strict=True))]


def test_the_last_stages_extrapolate_an_error_that_falls_as_one_over_n():
    # r = 0.9 + 4/n at n = 100, 200, 400.
    found = limit_from(stages(0.94, 0.92, 0.91), ACCEPTED, 0.95)
    assert found.ratio == pytest.approx(0.9)
    assert found.cure is Cure.NEVER


def test_a_ratio_still_on_its_way_up_is_called_slow_not_hopeless():
    found = limit_from(stages(0.60, 0.65, 0.69), ACCEPTED, 0.95)
    assert found.cure is Cure.SLOWLY
    assert math.isnan(found.coverage)
    assert limit_from(stages(0.97, 0.975, 0.98), ACCEPTED, 0.95).cure is Cure.FADES


def test_a_bias_that_doubles_with_four_times_the_rows_stays():
    assert limit_from(stages(1.0, 1.0, 1.0, bias=(0.1, 0.141, 0.2)), ACCEPTED, 0.95).bias_stays
    assert not limit_from(stages(1.0, 1.0, 1.0, bias=(0.1, 0.1, 0.1)), ACCEPTED, 0.95).bias_stays


def test_what_is_not_known_is_not_guessed(grown, study):
    joint = Focus("both", FocusKind.JOINT, np.eye(3)[1:], np.zeros(2))
    assert limit(grown, "ols", focus=joint) is None
    assert limit_of(grown[:2], make_procedure("ols"), study.focus[0], World(), ACCEPTED) is None
    assert [s.n for s in grown[:4]] == [30, 60, 120, 240]
