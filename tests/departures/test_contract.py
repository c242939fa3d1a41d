"""What every departure promises, whatever it is."""

from dataclasses import replace

import numpy as np
import pytest

from withstand.departures import (
    REGISTRY,
    Bowtie,
    Clusters,
    Contaminated,
    Curvature,
    Fan,
    HeavyTails,
    Layer,
    LevelSpread,
    NoiseStream,
    Outliers,
    PowerSpread,
    Serial,
    Skew,
    World,
    WorstFan,
    departure_class,
)
from withstand.engine.noise import BlockNoise
from withstand.errors import ScenarioError

ROW = (0.0, 1.0, 0.0, 0.0)

VARIANTS = [
    Curvature(along="x"),
    Curvature(along="x", target="average-slope"),
    Fan(along="x"),
    Fan(along="fitted"),
    Fan(along="x", direction="down"),
    Bowtie(along="x"),
    Bowtie(along="x", spindle=True),
    PowerSpread(along="x"),
    PowerSpread(),
    LevelSpread(along="species", noisy=("oak",)),
    LevelSpread(along="species", noisy=("oak", "elm")),
    WorstFan(against="x", row=ROW),
    Serial(),
    Serial([-0.5, -0.2]),
    Serial(within="groups", step=1.0),
    Clusters(),
    HeavyTails(),
    Contaminated(),
    Contaminated(share=0.1),
    Skew(),
    Skew(family="lognormal"),
    Outliers(),
    Outliers(count=3),
    Outliers(share=0.1, sign="alternating"),
    Outliers(share=0.1, sign="random"),
    Outliers(count=2, placement="leverage"),
]

OUT_OF_RANGE = {
    "curvature": (-1.0, 2000.0),
    "fan": (0.5, -3.0, 5000.0),
    "bowtie": (0.5,),
    "power-spread": (-0.5, 11.0),
    "level-spread": (0.9,),
    "worst-fan": (0.0,),
    "serial": (1.0, -1.0, 1.5),
    "clusters": (-0.1, 1.0),
    "heavy-tails": (-0.1, 0.5),
    "contaminated": (0.5, 51.0),
    "skew": (-1.0, 9.0),
    "outliers": (-3.0,),
}

each = pytest.mark.parametrize("departure", VARIANTS, ids=lambda departure: departure.identity)


def draw(departure, severity, design, width=64, seed=3, block=2):
    noise = BlockNoise(seed=seed, block=block, width=width)
    return World(((departure, severity),)).on(design).draw(noise, np.empty((design.n, width)))


def test_every_registered_departure_is_tried():
    assert {type(departure) for departure in VARIANTS} == set(REGISTRY.values())
    assert set(OUT_OF_RANGE) == set(REGISTRY)


@pytest.mark.parametrize("kind", sorted(REGISTRY))
def test_a_departure_describes_itself(kind):
    cls = departure_class(kind)
    assert cls.kind == kind
    assert isinstance(cls.layer, Layer)
    for text in (cls.title, cls.unit, cls.construction, cls.source):
        assert len(text) > 3
    distances = np.abs(np.array(cls.default_ladder) - cls.neutral)
    assert np.all(np.diff(distances) > 0)
    assert distances[0] > 0


def test_an_unknown_kind_offers_the_nearest():
    with pytest.raises(ScenarioError, match=r"unknown departure 'bowtei'.*Did you mean 'bowtie'"):
        departure_class("bowtei")


@each
def test_the_neutral_severity_is_the_clean_model(departure, design):
    scores = BlockNoise(seed=3, block=2, width=64).normal(NoiseStream.ERRORS, design.n)
    assert np.array_equal(draw(departure, departure.neutral, design), scores)


@each
def test_every_severity_changes_the_errors(departure, design):
    clean = draw(departure, departure.neutral, design)
    seen = [clean]
    for severity in departure.ladder:
        errors = draw(departure, severity, design)
        assert np.isfinite(errors).all()
        assert all(np.abs(errors - other).max() > 1e-3 for other in seen)
        seen.append(errors)


@each
def test_the_mean_square_spread_is_one(departure, design):
    for severity in departure.ladder:
        spread = World(((departure, severity),)).on(design).spread
        if departure.layer is Layer.SPREAD:
            assert np.mean(spread**2) == pytest.approx(1.0, rel=1e-12)
            assert spread.max() / spread.min() >= 1.0 + 1e-9
        else:
            assert spread is None


@each
def test_errors_have_mean_zero_and_variance_one(departure, design):
    """Outside the mean and outlier layers the average error variance is 1; within 5 Monte Carlo standard errors."""
    severity = departure.ladder[0]
    world = World(((departure, severity),)).on(design)
    errors = draw(departure, severity, design, width=6000)
    expected = 0.0 if world.mean is None else float(np.mean(world.mean))
    if departure.layer is Layer.OUTLIERS:
        up = {"one-sided": 1.0, "alternating": 0.0, "random": 0.0}[departure.sign]
        expected = up * severity * departure.struck(design) / design.n
    centre = errors.mean(axis=0)
    assert abs(centre.mean() - expected) < 5 * centre.std() / np.sqrt(centre.size)
    if departure.layer is not Layer.OUTLIERS:
        around = errors if world.mean is None else errors - world.mean[:, None]
        square = np.mean(around**2, axis=0)
        assert abs(square.mean() - 1.0) < 5 * square.std() / np.sqrt(square.size)


@each
def test_the_same_seed_gives_the_same_draw(departure, design):
    severity = departure.ladder[-1]
    first = draw(departure, severity, design)
    assert np.array_equal(first, draw(departure, severity, design))
    assert not np.array_equal(first, draw(departure, severity, design, block=3))


@each
def test_the_shared_noise_is_left_alone(departure, design):
    noise = BlockNoise(seed=3, block=2, width=64)
    scores = noise.normal(NoiseStream.ERRORS, 40).copy()
    groups = noise.normal(NoiseStream.GROUPS, design.group_count).copy()
    X, x = design.X.copy(), design.columns["x"].copy()
    World(((departure, departure.ladder[0]),)).on(design).draw(noise, np.empty((design.n, 64)))
    assert np.array_equal(noise.normal(NoiseStream.ERRORS, 40), scores)
    assert np.array_equal(noise.normal(NoiseStream.GROUPS, design.group_count), groups)
    assert np.array_equal(design.X, X)
    assert np.array_equal(design.columns["x"], x)


@each
def test_labels_and_names_are_told(departure):
    labels = [departure.label(severity) for severity in (departure.neutral, *departure.ladder)]
    assert all(label.strip() for label in labels)
    assert len(set(labels)) == len(labels)
    assert departure.name.startswith(departure.kind)


@each
def test_it_applies_to_a_design_that_has_everything(departure, design):
    assert departure.not_applicable(design) is None
    spaced = isinstance(departure, Serial) and departure.within  # rows of one group are not next to each other
    assert departure.note(design).startswith("the gaps of the order column are" if spaced else "")
    assert bool(departure.note(design)) == bool(spaced)


@each
def test_a_copy_with_another_severity_keeps_the_options(departure):
    copy = replace(departure, severity=departure.ladder[0])
    assert copy.identity == departure.identity
    assert copy.ladder == departure.ladder[:1]


def test_identities_tell_the_variants_apart():
    clear = [departure for departure in VARIANTS if departure.severity != (-0.5, -0.2)]
    assert len({departure.identity for departure in clear}) == len(clear)


@pytest.mark.parametrize(
    ("kind", "severity"), [(kind, severity) for kind, values in OUT_OF_RANGE.items() for severity in (*values, float("nan"))]
)
def test_a_severity_out_of_range_is_refused(kind, severity):
    with pytest.raises(ScenarioError, match=rf"severity {severity:g} is out of range for '{kind}'"):
        departure_class(kind)(severity)


@pytest.mark.parametrize("kind", sorted(REGISTRY))
def test_a_severity_that_is_no_number_is_refused(kind):
    with pytest.raises(ScenarioError, match="severity 'strong' is not a number"):
        departure_class(kind)("strong")


@pytest.mark.parametrize("kind", sorted(REGISTRY))
def test_numpy_numbers_are_taken(kind):
    value = REGISTRY[kind].default_ladder[0]
    assert departure_class(kind)(np.float64(value)).ladder == (value,)
    assert departure_class(kind)(np.array([value])).ladder == (value,)


def test_the_covariance_of_a_stack_is_that_of_its_errors(design, noise):
    world = World(((Fan(along="x"), 3.0), (Serial(), 0.5))).on(design)
    errors = world.draw(noise, np.empty((design.n, noise.width)))
    M = np.random.default_rng(1).standard_normal((design.n, 3))
    expected = np.sqrt(np.diag(M.T @ world.covariance(M)))
    observed = (M.T @ errors).std(axis=1)
    assert np.all(np.abs(observed / expected - 1) < 5 / np.sqrt(2 * noise.width))
