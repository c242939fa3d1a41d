"""A rule among the procedures of a scenario: { if = "koenker", then = "hc3", else = "ols" }."""

import pytest

from withstand.diagnostics import Pretest
from withstand.errors import ScenarioError
from withstand.scenario.jsonschema import json_schema
from withstand.scenario.load import load_scenario

FILE = """[study]
data = "t.csv"
model = "y ~ x"
focus = ["x"]
order = "t"

[procedures]
use = ["ols", {rule}]
"""


def loaded(tmp_path, rule):
    rows = "\n".join(f"{i % 5 + 0.3 * i},{i},{i}" for i in range(12))
    (tmp_path / "t.csv").write_text(f"y,x,t\n{rows}\n", encoding="utf-8")
    (tmp_path / "s.toml").write_text(FILE.replace("{rule}", rule), encoding="utf-8")
    return load_scenario(tmp_path / "s.toml").plan.procedures


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        ('{ if = "koenker", then = "hc3", else = "ols" }', Pretest("koenker", "hc3", "ols")),
        ('{ if = "durbin-watson", then = "hac", else = "ols", alpha = 0.1 }', Pretest("durbin-watson", "hac", "ols", 0.1)),
        ('{ if = "shapiro", then = "hc3", else = "ols", branch = "passed" }', Pretest("shapiro", "hc3", "ols", 0.05, "passed")),
    ],
)
def test_a_rule_is_read(tmp_path, rule, expected):
    assert loaded(tmp_path, rule)[1] == expected


@pytest.mark.parametrize(
    ("rule", "told"),
    [
        ('{ if = "konker", then = "hc3", else = "ols" }', "unknown diagnostic 'konker'. Did you mean 'koenker'"),
        ('{ if = "koenker", then = "hc33", else = "ols" }', "unknown procedure 'hc33'. Did you mean 'hc3'"),
        ('{ if = "koenker", then = "hc3" }', "'else' is missing"),
        ('{ if = "koenker", then = "hc3", els = "ols" }', "unknown key 'els'. Did you mean 'else'"),
        ('{ if = "koenker", then = "cr2", else = "ols" }', "the study names no groups"),
        ('{ name = "pretest" }', "unknown procedure 'pretest'"),
    ],
)
def test_a_rule_that_cannot_be_used_is_refused_in_words(tmp_path, rule, told):
    with pytest.raises(ScenarioError) as refusal:
        loaded(tmp_path, rule)
    assert told in str(refusal.value)


def test_editors_are_told_the_keys():
    keys = json_schema()["$defs"]["PretestPart"]["properties"]
    assert set(keys) == {"if", "then", "else", "alpha", "branch"}
