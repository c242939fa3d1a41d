"""The sample size question from the command line, in its three forms."""

import json

import pandas as pd
import pytest

from withstand.lab.size_feared import feared_worlds
from withstand.lab.size_plan import Condition
from withstand.scenario.load import load_scenario

PLAN = """title = "Two groups"

[study]
model = "y ~ C(arm)"
focus = ["arm[b]"]
effect = { "arm[b]" = 0.5 }

[study.plan]
rows = 20
error_sd = 1.0
coefficients = { "arm[b]" = 0.5 }

[study.plan.columns]
arm = { levels = ["a", "b"] }
"""


@pytest.fixture
def plan(folder):
    (folder / "two.toml").write_text(PLAN, encoding="utf-8")
    return folder


def test_cohens_64_a_group(plan, call):
    """Two groups, standardised difference 0.5, two-sided 5 %, power 0.8: 64 a group (Cohen 1988, table 2.4.1)."""
    code, out, err = call("size", "two.toml", "--power", 0.8, "--workers", 1)
    assert (code, err) == (0, "")
    assert "128 rows" in out
    assert "power at least 0.8" in out
    assert max(map(len, out.splitlines())) <= 100
    place = plan / "outputs" / "two"
    assert {"size.md", "size.csv", "figures"} == {path.name for path in place.iterdir()}
    told = json.loads(call("size", "two.toml", "--power", 0.8, "--workers", 1, "--json")[1])
    assert (told["n"], told["best"]) == (128, "ols")
    assert told["sizes"][0]["method"] == "exact"


def test_effect_may_be_replaced(plan, call):
    """Difference 0.8: 26 a group (Cohen 1988, table 2.4.1)."""
    out = call("size", "two.toml", "--power", 0.8, "--effect", "arm[b]=0.8", "--workers", 1, "--json")[1]
    assert json.loads(out)["n"] == 52


def test_no_cure_is_said_and_what_would_do_is_named(folder, call):
    code, out, _ = call(
        "size", "small.csv", "--model", "y ~ x", "--departure", "fan", "--severity", 8, "--along", "x", "--workers", 1
    )
    assert code == 0
    assert "no number of rows cures this" in " ".join(out.split())
    assert "hc3" in out
    assert "World: fan along x, SD ratio 8." in out


def test_worlds_each_alone_or_together(plan, call):
    options = ["--procedure", "ols", "--departure", "skew", "--severity", 1, "--departure", "level-spread", "--severity", 1.1]
    code, _, err = call("size", "two.toml", *options, "--workers", 1)
    assert code == 2
    assert "level-spread" in err
    options = [
        "--departure",
        "skew",
        "--severity",
        1,
        "--departure",
        "outliers",
        "--severity",
        3,
        "--repetitions",
        2000,
        "--most",
        4000,
    ]
    told = json.loads(call("size", "two.toml", *options, "--workers", 1, "--json")[1])
    assert {row["world"] for row in told["curve"]} == {"skew, skewness 1", "outliers (1 row), 1 row by 3 SD"}
    told = json.loads(call("size", "two.toml", *options, "--together", "--workers", 1, "--json")[1])
    assert len({row["world"] for row in told["curve"]}) == 1


def test_ranges_give_every_corner(plan, call):
    """Rows go as the square of the error SD: 128 at 1, four times as many at 2, less a few that the t quantile asks for."""
    code, out, err = call("size", "two.toml", "--power", 0.8, "--range", "error_sd=1,2", "--workers", 1)
    assert (code, err) == (0, "")
    assert "128 rows (error_sd 1)" in out
    told = json.loads(call("size", "two.toml", "--power", 0.8, "--range", "error_sd=1,2", "--workers", 1, "--json")[1])
    first, second = (corner["n"] for corner in told["corners"])
    assert first == 128
    assert 4 * 125 <= second <= 4 * 128


def test_what_rows_buy(plan, call):
    code, out, err = call(
        "size", "two.toml", "--at", 128, "--at", 64, "--procedure", "ols", "--procedure", "hc3", "--workers", 1
    )
    assert (code, err) == (0, "")
    assert len(out.splitlines()) == 5
    table = pd.DataFrame(json.loads(call("size", "two.toml", "--at", 128, "--workers", 1, "--json")[1]))
    assert table.loc[0, "power"] == pytest.approx(0.801, abs=0.001)  # 64 a group: 0.8015, from memory
    assert table.loc[0, "detectable_effect"] == pytest.approx(0.5, abs=0.005)
    assert not (plan / "outputs").exists()


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--departure", "skew"], ["--severity 2", "0.5, 1, 2, 4"]),
        (["--severity", "2"], ["--departure"]),
        (["--departure", "skwe", "--severity", "2"], ["skwe", "'skew'"]),
        (["--departure", "skew", "--severity", "99"], ["--severity", "99"]),
        (["--departure", "fan", "--severity", "2", "--along", "q"], ["--along", "'q'"]),
        (["--departure", "clusters", "--severity", "0.1"], ["--departure", "groups"]),
        (["--procedure", "hc9"], ["hc9"]),
        (["--procedure", "cr1"], ["cr1", "groups"]),
        (["--power", "80"], ["--power", "80", "0.8"]),
        (["--power", "2"], ["--power", "2", "as in 0.9"]),
        (["--plausible"], ["--plausible", "no residuals", "--severity"]),
        (["--half-width", "-1"], ["--half-width", "-1"]),
        (["--only"], ["nothing is asked"]),
        (["--on", "arm"], ["--on", "arm[b]"]),
        (["--range", "error_sd"], ["--range", "error_sd"]),
        (["--range", "sd=1,2"], ["sd", "error_sd"]),
        (["--at", "0"], ["--at", "0"]),
        (["--at", "99999999999999999999"], ["--at", "99999999999999999999", "10,000,000"]),
        (["--largest", "99999999999999999999"], ["--largest", "10,000,000"]),
        (
            ["--departure", "level-spread", "--severity", "2", "--along", "arm"],
            ["--departure", "a, b", "`noisy`", "scenario file"],
        ),
        (["--growth", "copy"], ["--growth", "copy"]),
        (["--effect", "q=1"], ["'q'"]),
    ],
)
def test_refusals_say_how_to_mend_it(plan, call, options, words):
    code, out, err = call("size", "two.toml", "--workers", 1, *options)
    assert (code, out) == (2, "")
    assert err.count("\n") == 1
    for word in words:
        assert word in err, err
    assert not (plan / "outputs").exists()


def test_power_without_an_effect_is_explained(folder, call):
    code, _, err = call("size", "small.csv", "--model", "y ~ x", "--power", 0.9, "--workers", 1)
    assert code == 2
    assert "without an effect" in err
    assert "--effect" in err


def test_as_far_as_the_residuals_allow(folder, call):
    """The ladder goes to a ratio of 4; what the residuals allow is asked about instead, and said."""
    asked = ("size", "small.toml", "--only", "--power", 0.8, "--procedure", "ols", "--workers", 1, "--json")
    ladder = json.loads(call(*asked)[1])
    code, out, err = call(*asked, "--plausible")
    assert (code, err) == (0, "")
    worlds = json.loads(out)["worlds"]
    assert ladder["worlds"] == ["fan along x, SD ratio 2", "fan along x, SD ratio 4", "skew, skewness 2"]
    assert worlds != ladder["worlds"]
    study, plan = load_scenario(folder / "small.toml").study, load_scenario(folder / "small.toml").plan
    expected = feared_worlds(study, plan.axes, plan.procedures[:1], plan.seed)
    assert worlds == [Condition(world).name for world in expected]


def test_every_departure_there_is_as_far_as_the_residuals_allow(folder, call):
    asked = ("size", "small.csv", "--model", "y ~ x", "--effect", "x=0.5", "--only", "--power", 0.8, "--workers", 1, "--json")
    assert json.loads(call(*asked)[1])["worlds"] == ["nothing wrong"]
    worlds = json.loads(call(*asked, "--plausible")[1])["worlds"]
    for kind in ("fan along x", "skew", "worst-fan"):
        assert any(world.startswith(kind) for world in worlds), kind
    worlds = json.loads(call(*asked, "--plausible", "--departure", "fan", "--along", "x")[1])["worlds"]
    assert worlds
    assert all(world.startswith("fan along x, SD ratio") for world in worlds)
