import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from withstand.departures import REGISTRY
from withstand.report.view import Reading
from withstand.report.words import SeverityWords, listing, number, percent, points, share, short_share, times


def reading(value, low=None, high=None, method="simulated"):
    low, high = value if low is None else low, value if high is None else high
    return Reading(value, 0.0, low, high, 0.0, 0.0, method, 10_000, 0)


def test_shares_carry_their_error():
    assert share(reading(0.812, method="exact")) == "81.2 % (exact)"
    assert share(reading(0.951, 0.9499, 0.9521)) == "95.1 ± 0.1 %"
    assert short_share(reading(0.9512, 0.9510, 0.9514)) == "95.12 ± 0.02"


def test_rounding_never_moves_a_share_over_a_bound():
    assert percent(0.9399, (0.94, 0.96)) == "93.99"
    assert percent(0.94, (0.94, 0.96)) == "94.0"
    assert percent(0.9601, (0.94, 0.96)) == "96.01"


@given(st.floats(0.0, 1.0), st.floats(0.5, 1.0))
def test_a_share_is_on_its_side_as_far_as_five_decimals_tell(value, bound):
    told = float(percent(value, (bound,)))
    if abs(value - bound) > 2e-7:
        assert (told < 100.0 * bound) == (value < bound)


@pytest.mark.parametrize(
    ("value", "told"),
    [
        (0.0, "0"),
        (0.043, "0.043"),
        (1234.5, "1,234"),
        (1.5, "1.5"),
        (2e-7, "2.00e-07"),
        (math.nan, "not known"),
        (-0.25, "-0.25"),
    ],
)
def test_numbers(value, told):
    assert number(value) == told


def test_small_words():
    assert listing(["a", "b", "c"]) == "a, b and c"
    assert listing([]) == ""
    assert points(-0.0312) == "−3.1"
    assert points(0.0001) == "0.0"
    assert (times(1.08), times(0.95), times(1.001)) == ("8 % wider", "5 % narrower", "as wide")


@pytest.mark.parametrize("kind", sorted(REGISTRY))
def test_any_severity_is_said_in_the_manner_of_the_ladder(kind):
    departure = REGISTRY[kind]()
    ladder = [(severity, departure.label(severity)) for severity in departure.ladder]
    words = SeverityWords.of(ladder)
    assert [words.label(severity, rounded=False) for severity in departure.ladder] == [label for _, label in ladder]
    between = sum(departure.ladder[:2]) / 2.0
    before, after = (part for part in (words.before, words.after))
    assert words.label(between).startswith(before)
    assert words.label(between).endswith(after)
    assert words != SeverityWords("severity ", "")


def test_a_ladder_without_a_manner_is_said_plainly():
    assert SeverityWords.of([(1.0, "mild"), (2.0, "grave")]).label(1.5) == "severity 1.5"
    assert SeverityWords.of([(0.2, "t with 5 df"), (1 / 3, "t with 3 df")]).span(0.0, 0.25) == "normal to t with 4 df"
