import pytest

from withstand.errors import ScenarioError
from withstand.judgement.aspects import aspects_of
from withstand.judgement.tolerance import CRITERIA, Tolerance


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [
        # Bradley (1978, British Journal of Mathematical and Statistical Psychology 31:144): liberal 0.5 to 1.5 alpha, stringent
        # 0.9 to 1.1 alpha.
        ("bradley-liberal", 0.025, 0.075),
        ("bradley-strict", 0.045, 0.055),
        # Cochran (1954, Biometrics 10:417), from memory: 5 % may lie between 4 and 6 %.
        ("cochran", 0.04, 0.06),
    ],
)
def test_published_criteria_at_five_percent(name, low, high):
    tolerance = Tolerance(size=name)
    assert tolerance.size_range(0.05) == pytest.approx((low, high))
    assert tolerance.coverage_range(0.05) == pytest.approx((1 - high, 1 - low))
    assert tolerance.source == CRITERIA[name].source


def test_own_range_is_taken_as_it_is_and_said_to_be_the_users():
    tolerance = Tolerance(size=(0.01, 0.08))
    assert tolerance.size_range(0.05) == (0.01, 0.08)
    assert tolerance.size_range(0.10) == (0.01, 0.08)
    assert tolerance.source == "the user"


@pytest.mark.parametrize(
    ("options", "where"),
    [
        ({"size": "cochrane"}, "tolerance.size"),
        ({"size": (0.06, 0.04)}, "tolerance.size"),
        ({"size": (-0.1, 0.1)}, "tolerance.size"),
        ({"bias": 0.0}, "tolerance.bias"),
        ({"bias_absolute": -1.0}, "tolerance.bias_absolute"),
    ],
)
def test_impossible_bounds_are_refused_by_name(options, where):
    with pytest.raises(ScenarioError) as caught:
        Tolerance(**options)
    assert caught.value.where == where
    assert caught.value.remedy


def test_a_slip_of_the_pen_is_met_with_the_nearest_name():
    with pytest.raises(ScenarioError) as caught:
        Tolerance(size="cochrane")
    assert "cochran" in caught.value.remedy


def test_coverage_is_judged_on_its_harmful_side_and_wasteful_on_the_other():
    aspect = aspects_of(Tolerance(), 0.05)["coverage"]
    assert str(aspect.stand(0.93, 0.935)) == "outside"
    assert str(aspect.stand(0.93, 0.945)) == "open"
    assert str(aspect.stand(0.945, 0.955)) == "within"
    assert str(aspect.stand(0.97, 0.99)) == "wasteful"
    # The costly side is no fault however far it goes, and an interval across its edge is not yet wasteful.
    assert str(aspect.stand(0.95, 0.99)) == "within"
    assert aspect.margin(0.99) > 1.0


def test_margins_are_shares_of_what_is_allowed():
    aspects = aspects_of(Tolerance(), 0.05)
    assert aspects["coverage"].margin(0.95) == pytest.approx(1.0)
    assert aspects["coverage"].margin(0.94) == pytest.approx(0.0, abs=1e-12)
    assert aspects["coverage"].margin(0.93) == pytest.approx(-1.0)
    assert aspects["size"].margin(0.07) == pytest.approx(-1.0)
    assert aspects["bias_in_sd"].margin(-0.2) == pytest.approx(0.5)
    assert aspects["bias_in_sd"].margin(0.6) == pytest.approx(-0.5)


def test_tails_are_judged_at_half_the_accepted_size_only_where_asked_for():
    assert "miss_below" not in aspects_of(Tolerance(), 0.05)
    aspects = aspects_of(Tolerance(tails=True), 0.05)
    assert aspects["miss_below"].high == aspects["miss_above"].high == pytest.approx(0.03)


def test_an_absolute_bias_replaces_the_published_one():
    aspects = aspects_of(Tolerance(bias_absolute=2.5), 0.05)
    assert "bias_in_sd" not in aspects
    assert (aspects["bias"].low, aspects["bias"].high, aspects["bias"].set_by) == (-2.5, 2.5, "the user")
    # Schafer & Graham (2002, Psychological Methods 7:147), from memory: biases up to 0.4 SD are of little practical matter.
    assert aspects_of(Tolerance(), 0.05)["bias_in_sd"].set_by == "Schafer & Graham (2002)"
    assert aspects_of(Tolerance(bias=0.1), 0.05)["bias_in_sd"].set_by == "the user"
    assert not {"bias", "bias_in_sd"} & set(aspects_of(Tolerance(bias=None), 0.05))
