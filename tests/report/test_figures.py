import dataclasses
import io
import re

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
from PIL import Image

from withstand.errors import InputError
from withstand.report.figures import FIGURES, as_png, as_svg, available, figure
from withstand.report.style import COLOURS, HIGHLIGHTED, MARKERS, drawable, highlighted, own_style, stretched, stretched_ticks
from withstand.report.view import View


@pytest.mark.parametrize("name", list(FIGURES))
def test_the_same_bytes_whatever_the_user_has_set(bare, rich, name):
    outcome = rich if name == "harm" else bare
    first = as_svg(figure(outcome, name)), as_png(figure(outcome, name))
    with mpl.rc_context({"font.size": 20, "svg.fonttype": "path", "savefig.bbox": "tight", "text.parse_math": True}):
        second = as_svg(figure(outcome, name)), as_png(figure(outcome, name))
    assert first == second
    assert b"<dc:date>" not in first[0]
    assert Image.open(io.BytesIO(first[1])).size[0] == 1152


def test_hostile_names_stay_text(hostile):
    svg = as_svg(figure(hostile, "coverage")).decode()
    assert "<script" not in svg
    assert "&lt;script&gt;" in svg


def test_signs_the_font_lacks_become_boxes_and_dollars_stay():
    assert drawable("木 $x_1$", 30) == "□ $x_1$"
    assert drawable("a" * 50, 10) == "aaaaaaaaa…"
    assert drawable("one two three four", 8, 2) == "one two\nthree f…"


def panels(drawn):
    return [axes for axes in drawn.axes if axes.get_title(loc="left")]


def test_one_panel_a_departure_and_six_colours_at_most(crowded, rich):
    view = View(crowded)
    assert len(view.procedures) == 15
    chosen = highlighted(view, "dry_hours")
    assert len(chosen) == HIGHLIGHTED == 6
    assert "ols" in chosen
    drawn = figure(crowded, "coverage")
    assert len(panels(drawn)) == len(view.ladders) == 14
    assert any("9 others" in text.get_text() for legend in drawn.legends for text in legend.get_texts())
    assert len(panels(figure(rich, "coverage"))) == 7


def test_exact_points_are_filled_and_simulated_ones_open(rich):
    first = panels(figure(rich, "coverage"))[0]
    faces = {
        (line.get_color(), line.get_markerfacecolor())
        for line in first.lines
        if line.get_marker() in MARKERS and len(line.get_xdata())
    }
    assert (COLOURS[0], COLOURS[0]) in faces  # ols is exact under clusters
    assert (COLOURS[4], "white") in faces  # huber is simulated
    assert (COLOURS[0], "white") not in faces


def test_the_line_goes_through_the_values(rich):
    view = View(rich)
    first = panels(figure(rich, "coverage"))[0]
    line = next(line for line in first.lines if line.get_color() == COLOURS[0] and len(line.get_xdata()) == 5)
    shares = rich.measures.query(
        "measure == 'coverage' and focus == 'dry_hours' and procedure == 'ols' and departure == 'clusters'"
    )
    start = view.baseline("ols", "dry_hours", "coverage").value
    assert np.allclose(line.get_ydata(), stretched(np.array([start, *shares["value"]])))


def test_ticks_are_apart_and_the_nominal_level_is_one():
    places, labels = stretched_ticks(float(stretched(0.7)), float(stretched(0.98)))
    assert "95" in labels
    assert min(np.diff(places)) > 0.3


def test_colours_differ_in_greyscale():
    def luminance(colour):
        red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
        return 0.2126 * red + 0.7152 * green + 0.0722 * blue

    shades = sorted(luminance(colour) for colour in COLOURS)
    # neighbours may be close, because markers differ as well; the range must be wide
    assert shades[-1] - shades[0] > 100
    assert len(set(MARKERS)) == len(COLOURS) == 6


def test_failures_are_written_beside_the_procedure(rich):
    drawn = figure(rich, "premium")
    told = [text for axes in drawn.axes for text in axes.texts if "no answer" in text.get_text()]
    assert [text.get_text() for text in told] == ["no answer in up to 0.37 %"]
    names = [label.get_text() for label in drawn.axes[0].get_yticklabels()]
    assert round(told[0].xy[1]) == names.index("huber")
    without = dataclasses.replace(rich, measures=rich.measures[rich.measures["measure"] != "failure_rate"])
    assert "no answer" not in as_svg(figure(without, "premium")).decode()


def test_size_adjusted_power_is_drawn_where_there_is_some(rich):
    def labels(outcome):
        return [text.get_text() for legend in figure(outcome, "premium").legends for text in legend.get_texts()]

    assert "power, size-adjusted" not in labels(rich)
    table = rich.measures
    row = table[(table["measure"] == "power") & (table["departure"] == "none") & (table["procedure"] == "hc3")].iloc[[0]]
    more = pd.concat([table, row.assign(measure="size_adjusted_power", value=0.4321)], ignore_index=True)
    outcome = dataclasses.replace(rich, measures=more)
    assert "power, size-adjusted" in labels(outcome)
    crosses = [line for line in figure(outcome, "premium").axes[1].lines if line.get_marker() == "x"]
    assert [tuple(line.get_xydata()[0]) for line in crosses] == [(pytest.approx(43.21), View(rich).procedures.index("hc3"))]


def test_what_there_is_no_figure_for_is_said(bare, rich):
    assert available(View(bare), "dry_hours") == ["coverage", "size", "premium"]
    with pytest.raises(InputError, match=r"no numbers for the figure 'harm' of 'dry_hours'.*There is: coverage, size, premium"):
        figure(bare, "harm")
    with pytest.raises(InputError, match=r"unknown figure 'covrage'.*Did you mean 'coverage'"):
        figure(rich, "covrage")
    with pytest.raises(InputError, match=re.escape("unknown focus 'dry_hour'")):
        figure(rich, "coverage", "dry_hour")


def test_the_style_leaves_no_trace():
    before = dict(mpl.rcParams)
    with own_style():
        pass
    assert dict(mpl.rcParams) == before
