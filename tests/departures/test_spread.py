import numpy as np
import pytest

from withstand.departures import Bowtie, Fan, LevelSpread, PowerSpread, World
from withstand.errors import ScenarioError
from withstand.study.design import Design, Factor
from withstand.study.focus import Point


def design_along(z, **more):
    n = z.size
    return Design(X=np.column_stack([np.ones(n), np.arange(n)]), names=("Intercept", "i"), columns={"z": z}, **more)


def spread(departure, severity, design):
    return World(((departure, severity),)).on(design).spread


def test_fan_by_hand():
    """z = 10, 11, 14: t = 0, 1/4, 1; ratio 16: 1, 2, 16; mean square (1 + 4 + 256)/3 = 87."""
    design = design_along(np.array([10.0, 11.0, 14.0]))
    assert spread(Fan(along="z"), 16.0, design) == pytest.approx(np.array([1.0, 2.0, 16.0]) / np.sqrt(87.0))
    # Downwards: 16, 8, 1 with mean square 321/3 = 107.
    assert spread(Fan(along="z", direction="down"), 16.0, design) == pytest.approx(np.array([16.0, 8.0, 1.0]) / np.sqrt(107.0))


def test_bowtie_by_hand():
    """z = 0, 1, 2, 4: |2t - 1| = 1, 1/2, 0, 1; ratio 4: 4, 2, 1, 4; mean square 37/4. Spindle: 1, 2, 4, 1; 22/4."""
    design = design_along(np.array([0.0, 1.0, 2.0, 4.0]))
    assert spread(Bowtie(along="z"), 4.0, design) == pytest.approx(np.array([4, 2, 1, 4]) / np.sqrt(37 / 4))
    assert spread(Bowtie(along="z", spindle=True), 4.0, design) == pytest.approx(np.array([1, 2, 4, 1]) / np.sqrt(22 / 4))


def test_power_by_hand():
    """z = 1, 2, 3 to the power 1: mean square 14/3."""
    design = design_along(np.array([1.0, 2.0, 3.0]))
    assert spread(PowerSpread(along="z"), 1.0, design) == pytest.approx(np.array([1, 2, 3]) / np.sqrt(14 / 3))


def test_levels_by_hand():
    """Two rows of four noisy at ratio 3: mean square (9 + 9 + 1 + 1)/4 = 5."""
    factor = Factor(np.array([0, 1, 0, 1]), ("ash", "oak"))
    design = design_along(np.arange(4.0), factors={"species": factor})
    departure = LevelSpread(along="species", noisy=("oak",))
    assert spread(departure, 3.0, design) == pytest.approx(np.array([1, 3, 1, 3]) / np.sqrt(5))
    world = World(((departure, 3.0),)).on(design)
    assert world.spread_at(Point(levels={"species": "oak"})) == pytest.approx(3 / np.sqrt(5))
    assert world.spread_at(Point(levels={"species": "ash"})) == pytest.approx(1 / np.sqrt(5))


@pytest.mark.parametrize(
    "departure",
    [Fan(along="z"), Fan(along="z", direction="down"), Bowtie(along="z"), PowerSpread(along="z")],
    ids=lambda d: d.identity,
)
def test_a_point_on_a_row_has_the_spread_of_the_row(departure):
    z = np.array([1.0, 2.5, 3.0, 7.0, 8.0])
    world = World(((departure, 2.0),)).on(design_along(z))
    assert [world.spread_at(Point({"z": value})) for value in z] == pytest.approx(world.spread)


def test_beyond_the_rows_a_fan_stays_and_a_power_goes_on():
    design = design_along(np.array([1.0, 2.0, 5.0]))
    fan = World(((Fan(along="z"), 4.0),)).on(design)
    assert fan.spread_at(Point({"z": 100.0})) == pytest.approx(fan.spread[2])
    assert fan.spread_at(Point({"z": -100.0})) == pytest.approx(fan.spread[0])
    power = World(((PowerSpread(along="z"), 2.0),)).on(design)
    assert power.spread_at(Point({"z": 10.0})) == pytest.approx(4 * power.spread[2])


def test_along_the_fitted_mean_the_point_gives_it():
    design = design_along(np.arange(3.0), fitted=np.array([2.0, 4.0, 6.0]))
    world = World(((Fan(), 9.0),)).on(design)
    assert world.spread_at(Point(fitted=4.0)) == pytest.approx(world.spread[1])
    assert world.spread[2] / world.spread[0] == pytest.approx(9.0)


def test_profiles_multiply(design):
    both = World(((Fan(along="x"), 2.0), (PowerSpread(along="x"), 1.0))).on(design).spread
    x = design.columns["x"]
    product = 2.0 ** ((x - x.min()) / np.ptp(x)) * x
    assert both == pytest.approx(product / np.sqrt(np.mean(product**2)))


def test_reasons_not_to_apply(design):
    assert "'flat' is the same in every row" in Fan(along="flat").not_applicable(design)
    assert "'flat' is the same in every row" in Bowtie(along="flat").not_applicable(design)
    assert "'flat' is the same in every row" in PowerSpread(along="flat").not_applicable(design)
    assert "use fan" in PowerSpread(along="signed").not_applicable(design)
    assert "every row is in the noisy levels" in LevelSpread(along="species", noisy=("ash", "elm", "oak")).not_applicable(
        design
    )
    rows = np.flatnonzero(design.factors["species"].codes < 2)
    fewer = design_along(np.arange(float(rows.size)), factors={"species": design.factors["species"].rows(rows)})
    assert "no row is in the noisy levels" in LevelSpread(along="species", noisy=("oak",)).not_applicable(fewer)


def test_wrong_options_are_refused(design):
    with pytest.raises(ScenarioError, match=r"no numeric column 'flatt'.*Did you mean 'flat'"):
        Fan(along="flatt").not_applicable(design)
    with pytest.raises(ScenarioError, match="unknown direction 'left'"):
        Fan(along="x", direction="left")
    with pytest.raises(ScenarioError, match=r"no level 'oka'.*Did you mean 'oak'"):
        LevelSpread(along="species", noisy=("oka",)).not_applicable(design)
    with pytest.raises(ScenarioError, match=r"does not say which levels.*ash, elm, oak"):
        LevelSpread(along="species").not_applicable(design)
    with pytest.raises(ScenarioError, match=r"categorical column, and 'x' is numeric.*species"):
        LevelSpread(along="x", noisy=("a",)).not_applicable(design)
    with pytest.raises(ScenarioError, match="no categorical column 'spices'"):
        LevelSpread(along="spices", noisy=("a",)).not_applicable(design)
    with pytest.raises(ScenarioError, match="does not say which column"):
        LevelSpread(noisy=("a",)).not_applicable(design)
    with pytest.raises(ScenarioError, match="needs a reference fitted mean"):
        Fan().not_applicable(design_along(np.arange(4.0)))
    with pytest.raises(ScenarioError, match="gives no level"):
        LevelSpread(along="species", noisy=("oak",)).profile_at(design, Point(), 2.0)
    with pytest.raises(ScenarioError, match=r"meets the value -1,"):
        PowerSpread(along="x").profile_at(design, Point({"x": -1.0}), 2.0)


def test_one_level_may_be_given_bare():
    assert LevelSpread(along="species", noisy="oak").noisy == ("oak",)
