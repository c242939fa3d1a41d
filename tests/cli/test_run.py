"""Running a scenario or a table, resuming, reporting again, inspecting."""

import json
import tomllib

import pandas as pd
import pytest

from withstand.cli.inputs import loaded_from
from withstand.lab.outcome import MEASURE_COLUMNS, TIPPING_COLUMNS, VERDICT_COLUMNS
from withstand.scenario.load import load_scenario

FILES = [
    "figures", "ledger.sqlite", "measures.csv", "ranking.csv", "report.html", "run.json", "scenario.toml", "statement.md",
    "summary.md", "tipping.csv", "verdicts.csv",
]  # fmt: skip


@pytest.fixture
def done(folder, call):
    code, out, err = call("run", "small.toml", "--workers", 1)
    assert (code, err) == (0, "")
    return folder / "outputs" / "small", out


def test_run_leaves_every_file_and_says_what_it_found(done):
    place, out = done
    assert sorted(path.name for path in place.iterdir()) == FILES
    assert out.startswith("A small one: 12 rows, none dropped.\n")
    assert "ols" in out
    assert "Full page: outputs/small/report.html" in out
    measures = pd.read_csv(place / "measures.csv", keep_default_na=False)
    assert tuple(measures.columns) == MEASURE_COLUMNS
    assert set(measures["departure"]) == {"none", "fan", "skew"}
    assert set(measures["procedure"]) == {"ols", "hc3"}
    assert set(measures["method"]) == {"exact", "simulated"}
    assert {"coverage", "size", "power", "bias", "width"} <= set(measures["measure"])
    assert tuple(pd.read_csv(place / "verdicts.csv").columns) == VERDICT_COLUMNS
    assert set(TIPPING_COLUMNS) <= set(pd.read_csv(place / "tipping.csv").columns)


def test_run_json_has_what_repeats_the_run(done, folder):
    import hashlib

    place, _ = done
    run = json.loads((place / "run.json").read_text(encoding="utf-8"))["provenance"]
    assert run["seed"] == 3
    assert run["finished"] is True
    assert run["data_sha256"] == hashlib.sha256((folder / "small.csv").read_bytes()).hexdigest()
    assert run["scenario_sha256"] == hashlib.sha256((place / "scenario.toml").read_bytes()).hexdigest()
    assert {"withstand", "numpy", "python"} <= set(run["versions"])


def test_kept_scenario_is_the_same_study_and_plan_from_anywhere(done, folder, monkeypatch):
    place, _ = done
    first = load_scenario(folder / "small.toml")
    monkeypatch.chdir(place)
    again = load_scenario(place / "scenario.toml")
    assert (again.plan.digest, again.study.digest) == (first.plan.digest, first.study.digest)
    assert again.study.name == first.study.name == "A small one"


def test_second_run_goes_on_from_the_ledger(done, call, monkeypatch):
    """Everything is there already, so no task may run."""
    place, _ = done
    before = (place / "measures.csv").read_bytes()
    import withstand.engine.runner as runner

    def refuse(*_):
        raise AssertionError("a task was run again")

    monkeypatch.setattr(runner, "run_task", refuse)
    code, _, err = call("run", "small.toml", "--workers", 1, "--quiet")
    assert (code, err) == (0, "")
    assert (place / "measures.csv").read_bytes() == before


def test_report_writes_the_same_page_again(done, call):
    place, _ = done
    kept = {
        name: (place / name).read_bytes() for name in ("report.html", "summary.md", "statement.md", "measures.csv", "run.json")
    }
    (place / "report.html").unlink()
    (place / "summary.md").write_text("spoilt", encoding="utf-8")
    code, out, err = call("report", place)
    assert (code, err) == (0, "")
    assert "Full page:" in out
    assert {name: (place / name).read_bytes() for name in kept} == kept


def test_table_with_options_is_the_scenario_that_says_the_same(folder):
    options = {
        "model": "y ~ x", "focus": ("x",), "effect": ("x=0.5",), "order": "t", "groups": "g", "level": 0.9, "seed": 3,
        "repetitions": 2000, "most": 5000, "method": "simulated",
    }  # fmt: skip
    (folder / "same.toml").write_text(
        '[study]\ndata = "small.csv"\nmodel = "y ~ x"\nfocus = ["x"]\neffect = { x = 0.5 }\norder = "t"\ngroups = "g"\n'
        'level = 0.9\n[simulation]\nseed = 3\nrepetitions = 2000\nmost = 5000\nmethod = "simulated"\n',
        encoding="utf-8",
    )
    said, meant = load_scenario(folder / "same.toml"), loaded_from(folder / "small.csv", options)
    assert (said.study.digest, said.plan.digest) == (meant.study.digest, meant.plan.digest)
    assert (meant.name, said.study.notices) == ("small", meant.study.notices)
    assert {"serial", "clusters", "skew", "fan"} <= {axis.departure.kind for axis in meant.plan.axes}
    assert meant.plan.procedures[0].name == "ols"


def test_json_for_machines(folder, call):
    code, out, err = call("run", "small.toml", "--workers", 1, "--json")
    assert (code, err) == (0, "")
    told = json.loads(out)
    assert told["page"] == "outputs/small/report.html"
    assert {row["departure"] for row in told["verdicts"]} >= {"fan", "skew"}
    assert len(told["measures"]) == len(pd.read_csv(folder / "outputs" / "small" / "measures.csv"))
    assert all(value == value for row in told["measures"] for value in row.values())  # no NaN


def test_quiet_says_nothing_and_progress_needs_a_terminal(folder, call):
    assert call("run", "small.toml", "--workers", 1, "--quiet") == (0, "", "")
    assert call("run", "small.toml", "--workers", 1)[2] == ""


def test_method_simulated_and_verify(folder, call):
    assert call("run", "small.toml", "--workers", 1, "--method", "simulated", "--out", "s", "--quiet")[0] == 0
    simulated = pd.read_csv(folder / "s" / "measures.csv")
    assert set(simulated["method"]) == {"simulated"}
    assert call("run", "small.toml", "--workers", 1, "--verify", "--out", "v", "--quiet")[0] == 0
    exact = pd.read_csv(folder / "v" / "measures.csv")
    keys = ["departure", "along", "severity", "procedure", "focus", "measure"]
    both = exact[(exact["method"] == "exact") & (exact["measure"] == "coverage")].merge(simulated, on=keys)
    assert len(both) >= 6
    # two derivations of the same numbers: within five of their standard errors
    assert ((both["value_x"] - both["value_y"]).abs() <= 5.0 * both["mc_se_y"]).all()
    assert "verification" in json.loads((folder / "v" / "run.json").read_text(encoding="utf-8"))["provenance"]


def test_inspect_shows_design_and_exact_answers_and_writes_nothing(folder, call):
    before = sorted(folder.rglob("*"))
    code, out, err = call("inspect", "small.csv", "--model", "y ~ x + C(g)", "--focus", "x")
    assert (code, err) == (0, "")
    for words in ("Largest leverage", "Variance inflation factors", "times as wide", "standard error", "Error SD", "(exact)"):
        assert words in out
    told = json.loads(call("inspect", "small.toml", "--json")[1])
    assert {row["method"] for row in told["measures"]} == {"exact"}
    assert sorted(folder.rglob("*")) == before


def test_inspect_says_what_collinearity_costs(folder, call):
    """With two predictors the factor is 1 / sqrt(1 - r^2), whatever the response."""
    import numpy as np

    table = pd.read_csv(folder / "small.csv")
    table["z"] = table["x"] + np.tile([0.0, 3.0, -2.0], 4)
    table.to_csv(folder / "two.csv", index=False)
    r = np.corrcoef(table["x"], table["z"])[0, 1]
    told = json.loads(call("inspect", "two.csv", "--model", "y ~ x + z", "--focus", "x", "--json")[1])
    assert told["facts"]["widening"]["x"] == pytest.approx(1.0 / np.sqrt(1.0 - r**2), rel=1e-9)
    assert (
        f"{1.0 / np.sqrt(1.0 - r**2):.3g} times as wide"
        in call("inspect", "two.csv", "--model", "y ~ x + z", "--focus", "x")[1]
    )


def test_start_prints_a_scenario_that_run_accepts(folder, call):
    options = ["--model", "y ~ x + C(g)", "--focus", "x", "--order", "t", "--effect", "x=0.5"]
    code, out, err = call("start", "small.csv", *options)
    assert (code, err) == (0, "")
    assert tomllib.loads(out)["study"]["order"] == "t"
    assert out.count("#") > 10
    (folder / "started.toml").write_text(out, encoding="utf-8")
    said = load_scenario(folder / "started.toml")
    meant = loaded_from(folder / "small.csv", {"model": "y ~ x + C(g)", "focus": ("x",), "order": "t", "effect": ("x=0.5",)})
    assert (said.study.digest, said.plan.digest) == (meant.study.digest, meant.plan.digest)
    assert call("inspect", "started.toml", "--quiet") == (0, "", "")


def test_fault_is_said_apart_from_refusals(folder, call, monkeypatch):
    def broken(*_, **__):
        raise ZeroDivisionError("by chance")

    monkeypatch.setattr("withstand.cli.running.perform", broken)
    code, out, err = call("run", "small.toml")
    assert (code, out) == (1, "")
    assert "internal fault (ZeroDivisionError: by chance)" in err
    assert err.count("\n") == 1
    assert "by chance" in (folder / "fault.txt").read_text(encoding="utf-8")
