"""The demo scenarios: copied, never over a file that is there; made anew by their script to the last byte."""

import runpy
import subprocess
import sys
from pathlib import Path

import pytest

from withstand.cli.commands import DEMOS
from withstand.cli.demos import copy_demo, demos_home
from withstand.errors import InputError
from withstand.scenario.load import load_scenario

HOME = Path(__file__).parents[2] / "scenarios"


def test_every_scenario_is_a_demo():
    assert sorted(DEMOS) == sorted(path.stem for path in HOME.glob("*.toml"))
    assert demos_home().joinpath("kiln_boards.csv").is_file()


def test_tables_are_what_the_script_makes(tmp_path):
    script = tmp_path / "make_data.py"
    script.write_bytes((HOME / "make_data.py").read_bytes())
    subprocess.run([sys.executable, str(script)], check=True)
    made = sorted(tmp_path.glob("*.csv"))
    assert [path.name for path in made] == ["kiln_boards.csv", "reservoir.csv"]
    for path in made:
        assert path.read_bytes() == (HOME / path.name).read_bytes()
    assert "main" in runpy.run_path(str(script))


@pytest.mark.parametrize(("name", "n"), [("kiln_boards", 36), ("reservoir", 130), ("lamp_trial", 32)])
def test_demos_load(name, n):
    loaded = load_scenario(HOME / f"{name}.toml")
    assert loaded.study.n == n
    assert len(loaded.plan.axes) > 3


def test_demos_are_what_they_say():
    """Kiln boards: skewed and shared within charges. Reservoir: weeks missing, errors carried over, a season."""
    import numpy as np
    from scipy import stats

    kiln = load_scenario(HOME / "kiln_boards.toml").study
    residuals = kiln.residuals
    assert stats.skew(residuals) > 0.5
    groups = [residuals[kiln.design.groups == g] for g in range(6)]
    assert [len(group) for group in groups] == [6] * 6
    assert stats.f_oneway(*groups).pvalue < 0.05
    reservoir = load_scenario(HOME / "reservoir.toml").study
    steps = np.diff(reservoir.design.order)
    assert steps.min() == 1
    assert steps.max() > 1
    residuals = reservoir.residuals
    beside = steps == 1
    assert np.corrcoef(residuals[1:][beside], residuals[:-1][beside])[0, 1] > 0.3


def test_copies_what_is_missing_and_keeps_what_is_there(tmp_path):
    assert copy_demo("kiln_boards", tmp_path) == ["kiln_boards.csv", "kiln_boards.toml"]
    assert copy_demo("kiln_boards", tmp_path) == []
    (tmp_path / "kiln_boards.csv").unlink()
    assert copy_demo("kiln_boards", tmp_path) == ["kiln_boards.csv"]
    (tmp_path / "kiln_boards.toml").write_text("mine", encoding="utf-8")
    with pytest.raises(InputError, match=r"'kiln_boards\.toml' is there already"):
        copy_demo("kiln_boards", tmp_path)
    assert (tmp_path / "kiln_boards.toml").read_text(encoding="utf-8") == "mine"


def test_demo_runs_in_the_current_folder(folder, call):
    code, out, err = call("demo", "lamp_trial", "--workers", 1, "--repetitions", 2000, "--most", 2000)
    assert (code, err) == (0, "")
    assert out.startswith("Copied lamp_trial.toml to this folder.")
    assert (folder / "outputs" / "lamp_trial" / "report.html").is_file()
