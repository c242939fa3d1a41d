import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure

from withstand.departures import Fan, Skew
from withstand.departures.world import World
from withstand.lab.size_answer import CURVE_COLUMNS
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.sizing import size_study
from withstand.procedures.base import make_procedure
from withstand.report.size_report import shown_measures, size_csv, size_figure, size_markdown, worst_curve, write_size_report
from withstand.study.columns import Levels
from withstand.study.planned import StudyPlan
from withstand.study.resolving import planned_study

LAMP = {"lamp": Levels((0.0, 4.0, 8.0, 12.0)), "bench": Levels(("south", "north"))}


def answer_of(*worlds, names=("ols", "hc3"), **options):
    study = planned_study(
        StudyPlan(16, LAMP, error_sd=3.0), "y ~ lamp + bench", focus="lamp", effect={"lamp": 0.5}, name="A | B"
    )
    return size_study(study, tuple(make_procedure(name) for name in names), worlds, **options)


@pytest.fixture(scope="module")
def exact():
    worlds = [World(((Fan(along="lamp"), ratio),)) for ratio in (1.2, 1.4)]
    return answer_of(*worlds, targets=Targets(power=0.9))


@pytest.fixture(scope="module")
def simulated():
    effort = Effort(repetitions=4000, most=8000)
    return answer_of(World(((Skew(), 2.0),)), names=("ols",), targets=Targets(power=0.9), effort=effort)


def test_the_curve_shows_the_worst_world(exact):
    rows = worst_curve(exact, "ols", "power")
    assert rows["n"].is_monotonic_increasing
    looked_at = []
    for row in rows.itertuples():
        same = exact.curve[
            (exact.curve["n"] == row.n) & (exact.curve["measure"] == "power") & (exact.curve["procedure"] == "ols")
        ]
        assert row.value == same["value"].min()
        looked_at.append(len(same))
        assert len(same) == 2 or row.value < 0.9
    # Where one world fails the other need not be looked at; at the answer both are.
    assert looked_at[-1] == 2
    coverage = worst_curve(exact, "ols", "coverage")
    for n in coverage["n"]:
        assert (exact.curve[(exact.curve["n"] == n) & (exact.curve["procedure"] == "ols")]["world"]).nunique() == 2
    assert shown_measures(exact) == ["coverage", "power"]


def test_the_table_can_be_read_back(exact, tmp_path):
    path = tmp_path / "size.csv"
    path.write_text(size_csv(exact), encoding="utf-8")
    frame = pd.read_csv(path)
    assert tuple(frame.columns) == CURVE_COLUMNS
    assert not np.isinf(frame.select_dtypes("number")).any().any()
    assert frame["value"].to_numpy() == pytest.approx(exact.curve["value"].to_numpy(), nan_ok=True)


def test_the_page_says_the_answer_and_its_evidence(exact, simulated):
    text = size_markdown(exact, ["At the corners: 8 to 80 rows."])
    assert text.startswith("# How many rows: A \\| B\n")
    for size in exact.sizes:
        assert f"{size.procedure}: {size.n} rows (exact)" in text
    assert "At the corners: 8 to 80 rows." in text
    assert "| exact |" in text
    assert "±" not in text.split("Each number")[0]
    noisy = size_markdown(simulated)
    assert "99 % interval" in noisy
    assert "| simulated |" in noisy
    assert "±" in noisy.split("Each number")[0]


def test_the_figure_has_a_panel_a_measure_and_marks_the_answer(exact):
    figure = size_figure(exact)
    assert isinstance(figure, Figure)
    assert [axes.get_ylabel() for axes in figure.axes] == ["coverage, %", "power, %"]
    power = figure.axes[1]
    marked = {line.get_xdata()[0] for line in power.lines if len(set(line.get_xdata())) == 1 and len(line.get_xdata()) == 2}
    assert {size.n for size in exact.sizes} <= marked
    assert any(text.get_text() == "needed: 90" for text in power.texts)


def test_nothing_to_draw_when_the_limit_answers():
    answer = answer_of(World(((Fan(along="lamp"), 5.0),)), names=("ols",))
    assert size_figure(answer) is None
    assert "no number of rows cures this" in size_markdown(answer)


def test_files_are_written_and_the_same_each_time(exact, tmp_path):
    written = write_size_report(exact, tmp_path / "one")
    again = write_size_report(exact, tmp_path / "two")
    assert [path.relative_to(tmp_path / "one").as_posix() for path in written] == [
        "size.md", "size.csv", "figures/size.svg", "figures/size.png",
    ]  # fmt: skip
    for a, b in zip(written, again, strict=True):
        assert a.read_bytes() == b.read_bytes()
