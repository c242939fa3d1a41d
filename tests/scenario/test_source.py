"""Places in a scenario file."""

from pathlib import Path

from withstand.errors import DesignError, ScenarioError
from withstand.scenario.source import Source, in_words

TEXT = """title = "t"

[study]
model = "y ~ x"
effect = { x = 1 }

[[departure]]
kind = "skew"

[[departure]]
kind = "fan"
along = "x"
with = [{ kind = "skew", severity = 1 }]

[study.plan.columns]
"dry hours" = { levels = [1, 2] }
"""
SOURCE = Source("s.toml", TEXT, Path())


def test_lines_of_keys_tables_and_entries():
    for path, line in {
        ("title",): 1, ("study",): 3, ("study", "model"): 4, ("study", "effect", "x"): 5, ("departure", 0): 7,
        ("departure", 1): 10, ("departure", 1, "along"): 12, ("departure", 1, "with", 0, "severity"): 13,
        ("study", "plan", "columns", "dry hours"): 16,
    }.items():  # fmt: skip
        assert SOURCE.where(path).startswith(f"s.toml, line {line}, "), path


def test_paths_in_words():
    assert in_words(("departure", 1, "along")) == "departure 2, along"
    assert in_words(("study", "plan", "rows")) == "study.plan.rows"
    assert in_words(("departure", 1, "with", 0)) == "departure 2, with 1"


def test_relocation_adds_the_place_and_keeps_kind_and_places_elsewhere():
    moved = SOURCE.relocate(ScenarioError("severity 9", where="departure.severity", remedy="Give 1."), ("departure", 1))
    assert (moved.where, moved.what, moved.remedy) == ("s.toml, line 10, departure 2, severity", "severity 9", "Give 1.")
    assert SOURCE.relocate(DesignError("no model", where="study.model")).where == "s.toml, line 4, study.model"
    elsewhere = DesignError("row 3 is odd", where="table.csv, row 3")
    assert SOURCE.relocate(elsewhere) is elsewhere
    assert isinstance(SOURCE.relocate(DesignError("x", where="study.model")), DesignError)
