"""The front door in Python: it finds what the command line finds, and writes nothing unless asked."""

import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure

import withstand as ws
from withstand.errors import InputError, LedgerError, ScenarioError
from withstand.lab.outcome import MEASURE_COLUMNS


@pytest.fixture(scope="module")
def frame():
    generator = np.random.default_rng(17)
    x = np.linspace(0.0, 3.0, 20)
    return pd.DataFrame({"y": 1.0 + 0.5 * x + generator.normal(size=20), "x": x, "week": np.arange(20)})


@pytest.fixture(scope="module")
def study(frame):
    return ws.Study.from_frame(frame, "y ~ x", focus=["x"], order="week", effect={"x": 0.5})


@pytest.fixture(scope="module")
def result(study):
    departures = [ws.Fan(along="x", severity=[2, 4]), ws.Serial([0.2, 0.4]), (ws.Fan(2), ws.Skew(2))]
    return ws.run(study, departures, ["ols", "hc3"], seed=7, repetitions=2000, most=2000)


def test_result_has_every_table(result):
    assert tuple(result.measures.columns) == MEASURE_COLUMNS
    assert set(result.measures["departure"]) == {"none", "fan", "serial"}
    assert set(result.measures["stack"]) == {"", "skew skewness 2"}
    assert len(result.ranking) >= 2
    assert len(result.tipping) >= 2
    assert set(result.verdicts["verdict"]) <= {"holds", "gives", "unsettled"}
    assert result.provenance["seed"] == 7
    assert isinstance(result.figure("coverage"), Figure)
    assert "<" in result._repr_html_()


def test_exact_coverage_of_serial_errors_is_that_of_brute_force(result, frame):
    """Two derivations: the exact value, and 40,000 data sets made and fitted by a plain loop-free computation of its own."""
    rows = result.measures
    mine = rows[(rows["departure"] == "serial") & (rows["severity"] == 0.4) & (rows["procedure"] == "ols")]
    told = mine[mine["measure"] == "coverage"].iloc[0]
    assert told["method"] == "exact"
    X = np.column_stack([np.ones(20), frame["x"]])
    R = 0.4 ** np.abs(np.subtract.outer(np.arange(20), np.arange(20)))
    Y = np.linalg.cholesky(R) @ np.random.default_rng(3).normal(size=(20, 40_000))
    B = np.linalg.lstsq(X, Y, rcond=None)[0]
    s2 = ((Y - X @ B) ** 2).sum(axis=0) / 18
    se = np.sqrt(s2 * np.linalg.inv(X.T @ X)[1, 1])
    covers = np.mean(np.abs(B[1]) <= 2.10092204024096 * se)  # t quantile 0.975 at 18 df, printed tables: 2.101
    assert abs(covers - told["value"]) < 5.0 * np.sqrt(covers * (1.0 - covers) / 40_000)


def test_same_seed_same_numbers_other_seed_others(study, result):
    def again(seed):
        departures = [ws.Fan(along="x", severity=[2, 4]), ws.Serial([0.2, 0.4]), (ws.Fan(2), ws.Skew(2))]
        return ws.run(study, departures, ["ols", "hc3"], seed=seed, repetitions=2000, most=2000).measures

    pd.testing.assert_frame_equal(again(7), result.measures)
    simulated = result.measures["method"] == "simulated"
    assert not again(8)[simulated]["value"].equals(result.measures[simulated]["value"])


def test_run_writes_only_where_it_is_told(study, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    ws.run(study, [ws.Skew(1)], ["ols"], repetitions=2000, most=2000)
    ws.inspect(study, [ws.Fan(2)], ["ols"])
    assert list(tmp_path.iterdir()) == []
    done = ws.run(study, [ws.Skew(1)], ["ols"], repetitions=2000, most=2000, out=tmp_path / "mine")
    assert (tmp_path / "mine" / "report.html").is_file()
    stored = pd.read_csv(tmp_path / "mine" / "measures.csv", keep_default_na=False)
    assert len(stored) == len(done.measures)
    with pytest.raises(LedgerError, match="another study, seed"):
        ws.run(study, [ws.Skew(1)], ["ols"], seed=2, repetitions=2000, most=2000, out=tmp_path / "mine")


def test_run_and_command_line_agree(study, frame, tmp_path, monkeypatch):
    from withstand.cli.entry import status

    monkeypatch.chdir(tmp_path)
    frame.to_csv("t.csv", index=False)
    (tmp_path / "t.toml").write_text(
        '[study]\ndata = "t.csv"\nmodel = "y ~ x"\nfocus = ["x"]\norder = "week"\neffect = { x = 0.5 }\n'
        '[[departure]]\nkind = "skew"\nseverity = [2]\n[procedures]\nuse = ["ols", "hc3"]\n'
        "[simulation]\nseed = 7\nrepetitions = 2000\nmost = 2000\n",
        encoding="utf-8",
    )
    assert status(["run", "t.toml", "--workers", "1", "--quiet", "--out", "cli"]) == 0
    ws.run(study, [ws.Skew(2)], ["ols", "hc3"], seed=7, repetitions=2000, most=2000, out="python")
    for name in ("measures.csv", "verdicts.csv", "tipping.csv"):
        assert (tmp_path / "cli" / name).read_bytes() == (tmp_path / "python" / name).read_bytes()


def test_inspect_simulates_nothing(study):
    found = ws.inspect(study, [ws.Fan(along="x"), ws.Skew(1)], ["ols"])
    assert set(found.measures["method"]) == {"exact"}
    assert found.facts["vif"]["x"] == pytest.approx(1.0)


def test_defaults_are_those_of_the_scenario(study):
    from withstand.front.running import planned
    from withstand.scenario.defaults import default_axes

    _, plan = planned(study, None, None)
    assert [axis.identity for axis in plan.axes] == [axis.identity for axis in default_axes(study)[0]]
    assert plan.procedures[0].name == "ols"


def test_size_of_clean_study_is_the_textbook_one(frame):
    """Rows for power 0.8 of a slope, normal errors: smallest n by the noncentral t, an independent implementation (scipy)."""
    from scipy import stats

    study = ws.Study.from_frame(frame, "y ~ x", focus=["x"], effect={"x": 0.5})
    answer = ws.size(study, power=0.8, growth="stack")
    (only,) = answer.sizes
    assert only.method == "exact"
    assert answer.n == only.n

    def power(copies):
        n = 20 * copies
        x = np.tile(frame["x"], copies)
        t = stats.t.isf(0.025, n - 2)
        noncentrality = 0.5 * np.sqrt(((x - x.mean()) ** 2).sum()) / study.error_sd
        return stats.nct.sf(t, n - 2, noncentrality) + stats.nct.cdf(-t, n - 2, noncentrality)

    # Whole copies of the 20 rows have a textbook answer; the smallest n lies between the last that falls short and the first
    # that does not.
    enough = next(copies for copies in range(1, 100) if power(copies) >= 0.8)
    assert 20 * (enough - 1) < answer.n <= 20 * enough


def test_size_over_what_the_residuals_allow(frame):
    study = ws.Study.from_frame(frame, "y ~ x", focus=["x"], effect={"x": 0.5})
    ladder = ws.size(study, ws.Fan((2.0, 40.0), along="x"), power=0.8, holds=False)
    allowed = ws.size(study, ws.Fan((2.0, 40.0), along="x"), power=0.8, holds=False, plausible=True)
    assert "fan along x, SD ratio 40" in ladder.worlds
    assert "fan along x, SD ratio 40" not in allowed.worlds
    assert ws.size(study, power=0.8, holds=False).worlds == ("nothing wrong",)
    assert any(world.startswith("fan") for world in ws.size(study, power=0.8, holds=False, plausible=True, largest=40).worlds)


def test_size_refuses_power_without_an_effect(frame):
    study = ws.Study.from_frame(frame, "y ~ x", focus=["x"])
    with pytest.raises(InputError, match=r"without an effect.*smallest effect that matters"):
        ws.size(study, power=0.8)


def test_arguments_are_checked(study):
    with pytest.raises(ScenarioError, match="repetitions is 5"):
        ws.run(study, [ws.Skew(1)], ["ols"], repetitions=5)
    with pytest.raises(ScenarioError, match="most is 100, below repetitions"):
        ws.run(study, [ws.Skew(1)], ["ols"], repetitions=2000, most=100)
    with pytest.raises(ScenarioError, match=r"wrong_verdict is 0\.9"):
        ws.run(study, [ws.Skew(1)], ["ols"], wrong_verdict=0.9)
