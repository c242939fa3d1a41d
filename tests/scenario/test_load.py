"""From a scenario file to a study and a plan."""

from pathlib import Path

import numpy as np
import pytest

from withstand.errors import InputError, ScenarioError
from withstand.judgement.tolerance import Tolerance
from withstand.scenario.load import load_scenario

HOME = Path(__file__).parents[2] / "scenarios"
FULL = """title = "All of it"

[study]
data = "small.csv"
model = "y ~ x + C(g)"
focus = ["x", "g", "g[c] - g[b]", { at = { x = 3, g = "b" }, of = "new" }]
order = "t"
groups = "g"
level = 0.9
rows = "fixed"
effect = { x = 0.5 }

[[departure]]
kind = "serial"
severity = [0.1, 0.4]

[[departure]]
kind = "fan"
along = "x"
direction = "down"

[[departure]]
kind = "heavy-tails"
df = [30, 5]

[[departure]]
kind = "fan"
severity = [2, 4]
with = [{ kind = "skew", severity = 1 }]

[procedures]
use = ["ols", { name = "hac", lag = 2 }]

[tolerance]
size = [0.08, 0.12]
bias_absolute = 0.2
tails = true

[simulation]
seed = 7
repetitions = 4000
most = 8000
wrong_verdict = 0.02
method = "simulated"
"""


@pytest.fixture
def full(folder):
    (folder / "full.toml").write_text(FULL, encoding="utf-8")
    return load_scenario(folder / "full.toml")


def test_every_part_arrives(full):
    study, plan = full.study, full.plan
    assert (study.name, study.level, study.n) == ("All of it", 0.9, 12)
    assert [focus.name for focus in study.focus][:3] == ["x", "g", "g[c] - g[b]"]
    assert [str(focus.kind) for focus in study.focus] == ["coefficient", "joint", "contrast", "new"]
    assert study.focus[0].effect.tolist() == [0.5]
    assert study.design.order is not None
    assert study.design.groups is not None
    assert [axis.departure.kind for axis in plan.axes] == ["serial", "fan", "heavy-tails", "fan"]
    assert plan.axes[0].departure.ladder == (0.1, 0.4)
    assert plan.axes[1].departure.direction == "down"
    assert plan.axes[2].departure.ladder == pytest.approx((1 / 30, 1 / 5))
    assert plan.axes[3].departure.along == "fitted"
    assert [(companion.kind, severity) for companion, severity in plan.axes[3].companions] == [("skew", 1.0)]
    assert [procedure.identity for procedure in plan.procedures] == ["ols", "hac(lag=2)"]
    assert plan.tolerance == Tolerance((0.08, 0.12), None, 0.2, True)
    assert (plan.seed, plan.repetitions, plan.most, plan.wrong_verdict, plan.method) == (7, 4000, 8000, 0.02, "simulated")


def test_overrides_replace_single_keys(full, folder):
    again = load_scenario(folder / "full.toml", {"simulation": {"seed": 8}})
    assert (again.plan.seed, again.plan.repetitions) == (8, 4000)
    assert again.record["simulation"]["seed"] == 8
    assert full.record["simulation"]["seed"] == 7


def test_paths_are_relative_to_the_scenario(folder, monkeypatch, tmp_path_factory):
    monkeypatch.chdir(tmp_path_factory.mktemp("elsewhere"))
    assert load_scenario(folder / "small.toml").study.n == 12
    assert Path(load_scenario(folder / "small.toml").record["study"]["data"]).is_absolute()


def test_same_text_same_digests_other_data_other_study(folder):
    first = load_scenario(folder / "small.toml")
    assert load_scenario(folder / "small.toml").study.digest == first.study.digest
    (folder / "small.toml").write_text(
        (folder / "small.toml").read_text(encoding="utf-8").replace("seed = 3", "seed = 4"), encoding="utf-8"
    )
    changed = load_scenario(folder / "small.toml")
    assert changed.plan.digest != first.plan.digest
    table = folder / "small.csv"
    table.write_text(table.read_text(encoding="utf-8").replace("12.9", "13.9"), encoding="utf-8")
    assert load_scenario(folder / "small.toml").study.digest != first.study.digest


def test_bias_false_is_not_judged_and_absolute_bias_stands_alone(folder):
    def tolerance(text):
        base = '[study]\ndata = "small.csv"\nmodel = "y ~ x"\n[tolerance]\n'
        (folder / "t.toml").write_text(base + text, encoding="utf-8")
        return load_scenario(folder / "t.toml").plan.tolerance

    assert tolerance("bias = false\n") == Tolerance(bias=None)
    assert tolerance("bias_absolute = 2\n") == Tolerance(bias=None, bias_absolute=2.0)
    assert tolerance("bias = 0.3\nbias_absolute = 2\n") == Tolerance(bias=0.3, bias_absolute=2.0)
    assert tolerance("") == Tolerance()


def test_cap_follows_the_repetitions_where_it_is_left_out(folder):
    assert load_scenario(folder / "small.toml", {"simulation": {"most": 4000}}).plan.most == 4000
    (folder / "m.toml").write_text('[study]\ndata = "small.csv"\nmodel = "y ~ x"\n', encoding="utf-8")
    assert load_scenario(folder / "m.toml").plan.most == 160_000
    assert load_scenario(folder / "m.toml", {"simulation": {"repetitions": 200_000}}).plan.most == 200_000


def test_rows_of_the_table_are_named_with_their_file(folder):
    (folder / "small.csv").write_text("y,x\n1,2\n3,<4\n5,6\n8,1\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"small\.csv, row 3"):
        load_scenario(folder / "small.toml")


def test_plan_is_loaded_without_data():
    loaded = load_scenario(HOME / "lamp_trial.toml")
    assert loaded.study.response is None
    assert loaded.study.n == 32
    assert loaded.study.error_sd == 3.0
    assert loaded.study.coefficients.tolist() == pytest.approx([14.0, 0.4, 1.2])
    # four lamp levels by two benches, every cell as often
    X = loaded.study.design.X
    cells, counts = np.unique(X, axis=0, return_counts=True)
    assert (len(cells), set(counts.tolist())) == (8, {4})


def test_errors_keep_their_kind_and_name_the_line(folder):
    (folder / "bad.toml").write_text(FULL.replace('groups = "g"', 'groups = "h"'), encoding="utf-8")
    with pytest.raises(InputError, match=r"bad\.toml, line 8, study\.groups: there is no column 'h'"):
        load_scenario(folder / "bad.toml")
    (folder / "bad.toml").write_text(
        FULL.replace("severity = 1 }]", 'severity = 1 }, { kind = "contaminated", severity = 3 }]'), encoding="utf-8"
    )
    with pytest.raises(ScenarioError, match=r"bad\.toml, line 29, departure 4, with"):
        load_scenario(folder / "bad.toml")
