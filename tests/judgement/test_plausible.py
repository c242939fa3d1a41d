import math

import numpy as np
import pytest

from withstand.departures.dependence import Clusters, Serial
from withstand.departures.mean import Curvature
from withstand.departures.shape import HeavyTails, Skew
from withstand.departures.spread import Fan
from withstand.judgement.detectability import Detector, detectability
from withstand.judgement.plausible import plausible_severities, severity_laws
from withstand.judgement.residual_laws import Request, default_replicates, simulate

CASES = [
    (Fan(along="x"), 2.0),
    (Serial(), 0.3),
    (Clusters(), 0.3),
    (HeavyTails(), 0.2),
    (Skew(), 1.0),
    (Curvature(along="x"), 0.5),
]
REPLICATES = 2000


@pytest.fixture(scope="module")
def laws(design):
    found = severity_laws(design, [departure for departure, _ in CASES], seed=3, replicates=REPLICATES)
    return dict(zip([departure.kind for departure, _ in CASES], found, strict=True))


@pytest.mark.parametrize(("departure", "severity"), CASES, ids=lambda v: getattr(v, "kind", v))
def test_the_interval_holds_the_truth_as_often_as_it_says(design, laws, departure, severity):
    law = laws[departure.kind]
    values = simulate(design, [Request(departure, law.chosen, np.array([severity]))], seed=77, replicates=2000)[0][0]
    inversion = law.inversion(0.9)
    holds = np.mean([inversion.plausible(float(value)).holds(severity) for value in values])
    # Chance of the data sets, and of the two simulated ends, each a 5 % quantile of 2000 values.
    error = math.sqrt(0.9 * 0.1 / len(values) + 2 * 0.05 * 0.95 / REPLICATES)
    assert abs(holds - 0.9) < 4.5 * error


def test_the_point_is_above_the_truth_as_often_as_below(design, laws):
    law = laws["fan"]
    values = simulate(design, [Request(law.departure, law.chosen, np.array([2.0]))], seed=78, replicates=2000)[0][0]
    inversion = law.inversion()
    above = np.mean([inversion.plausible(float(value)).point > 2.0 for value in values])
    assert abs(above - 0.5) < 4.5 * math.sqrt(0.25 / 2000 + 0.25 / REPLICATES)


def test_quantiles_without_a_mesh_give_the_same_interval(laws):
    """Interpolating straight lines between the simulated severities, by hand."""
    law = laws["serial"]
    found = law.plausible(0.35)
    severities = law.span.severities
    upper, lower = np.quantile(law.values, [0.95, 0.05], axis=1)
    assert found.low == pytest.approx(np.interp(0.35, upper, severities), abs=0.02)
    assert found.high == pytest.approx(np.interp(0.35, lower, severities), abs=0.02)
    assert found.point == pytest.approx(np.interp(0.35, np.quantile(law.values, 0.5, axis=1), severities), abs=0.02)


def test_units_and_coefficients_do_not_matter(design):
    rng = np.random.default_rng(5)
    response = rng.standard_normal(design.n)
    departures = [departure for departure, _ in CASES]
    plain = plausible_severities(design, response, departures, seed=3, replicates=500)
    moved = plausible_severities(
        design, 250.0 * response + design.X @ np.array([9.0, -4.0, 2.0]), departures, seed=3, replicates=500
    )
    for a, b in zip(plain, moved, strict=True):
        assert (a.low, a.high, a.point) == pytest.approx((b.low, b.high, b.point), rel=1e-6, nan_ok=True)


def test_mirrored_departures_know_which_way_round_they_were_found(design, laws):
    rng = np.random.default_rng(6)
    response = rng.standard_exponential(design.n)
    right, left = (plausible_severities(design, sign * response, [Skew()], seed=3, replicates=500)[0] for sign in (1.0, -1.0))
    assert (right.turned, left.turned) == (False, True)
    assert (right.low, right.high) == pytest.approx((left.low, left.high), rel=1e-9)


def test_residuals_more_regular_than_chance_leave_nothing_and_say_so(laws):
    low = float(laws["heavy-tails"].values[0, 5])  # far out in the lower tail even of normal errors
    found = laws["heavy-tails"].plausible(low)
    assert found.empty
    assert math.isnan(found.low)
    assert found.point == 0.0
    assert not found.holds(0.1)
    assert found.worst_case((0.1, 0.2), 0.0) == (0.0,)


def test_residuals_worse_than_the_worst_leave_the_end_open(laws):
    found = laws["clusters"].plausible(float(np.median(laws["clusters"].values[-1])))
    assert found.open_above
    assert found.holds(0.9999)
    assert found.worst_case((0.1, 0.999), 0.0)[-1] == 0.999


def test_a_fan_that_falls_is_a_ratio_below_one(design):
    rng = np.random.default_rng(8)
    x = design.columns["x"]
    falling = np.exp(-1.5 * (x - x.min()) / np.ptp(x))
    found = plausible_severities(design, 3.0 * falling * rng.standard_normal(design.n), [Fan(along="x")], seed=3)[0]
    assert found.low <= found.point < found.high < 1.0


def test_companions_act_while_the_severity_is_looked_for(design, laws):
    """Ratios of SDs along one column multiply: 2 on top of 3 is 6 alone."""
    fan, chosen = Fan(along="x"), laws["fan"].chosen
    # A fan down at 1/3 is a fan up at 3, as another departure: none acts twice in a world.
    turned = Fan(along="x", direction="down")
    stacked, alone = simulate(
        design,
        [Request(fan, chosen, np.array([2.0]), ((turned, 1 / 3),)), Request(fan, chosen, np.array([6.0]))],
        seed=3,
        replicates=200,
    )
    np.testing.assert_allclose(stacked, alone, rtol=1e-9)
    law = severity_laws(design, [fan], seed=3, companions=[((turned, 1 / 3),)], replicates=REPLICATES)[0]
    # What the companion explains is no longer asked of the departure.
    value = float(np.median(stacked))
    assert law.plausible(value).point == pytest.approx(laws["fan"].plausible(value).point / 3.0, rel=0.05)


@pytest.mark.parametrize("kind", ["fan", "serial", "skew", "clusters"])
def test_detectability_read_off_the_law_agrees_with_simulating_the_severity(design, laws, kind):
    departure, severity = next((d, s) for d, s in CASES if d.kind == kind)
    read = Detector.of(design, laws[kind]).at(severity)
    direct = detectability(design, departure, [severity], seed=991, replicates=4000)[0]
    # Independent noise: errors of both powers, and of both critical values, 5 % tails that the power follows at most threefold.
    tail = 3.0 * math.sqrt(0.05 * 0.95) * math.sqrt(1 / 4000 + 1 / REPLICATES)
    assert abs(read.power - direct.power) < 4.5 * math.hypot(direct.mc_se, read.mc_se, tail)
    assert read.statistic == direct.statistic


def test_a_check_with_nothing_to_find_rejects_at_its_size(design, laws):
    for law in laws.values():
        found = Detector.of(design, law).at(law.span.neutral)
        assert abs(found.power - 0.05) < 0.005
        assert found.hard_to_see
    assert Detector.of(design, laws["fan"]).at(1000.0) is None


def test_many_rows_are_given_fewer_replicates_but_never_too_few():
    assert [default_replicates(n) for n in (10, 500, 1000, 2000, 5000, 100_000)] == [4000, 4000, 2000, 1000, 400, 300]


@pytest.mark.parametrize(("kind", "end"), [("fan", 30.0), ("serial", 0.98), ("clusters", 0.99), ("skew", 8.0)])
def test_an_open_end_is_the_last_severity_tried_to_its_last_digit(laws, kind, end):
    law = laws[kind]
    found = law.plausible(float(np.median(law.values[-1])))
    assert found.open_above
    assert found.high == end
