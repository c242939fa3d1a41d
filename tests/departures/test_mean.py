import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from withstand.departures import Curvature, World
from withstand.errors import ScenarioError
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind, Point


def design_with(v, *extra):
    X = np.column_stack([np.ones(v.size), v, *extra])
    return Design(X=X, names=("Intercept", "v", *(f"c{i}" for i in range(len(extra)))), columns={"v": v})


def test_on_five_points_by_hand():
    """v = -2..2: v^2 = 4 1 0 1 4 has mean 2 and no slope; the residuals 2 -1 -2 -1 2 have maximum 2."""
    design = design_with(np.arange(-2.0, 3.0))
    assert Curvature(along="v").shift(design, 3.0) == pytest.approx([3.0, -1.5, -3.0, -1.5, 3.0])


@given(st.lists(st.floats(-1e3, 1e3), min_size=6, max_size=30, unique=True), st.floats(-5, 5), st.floats(0.01, 100))
@settings(max_examples=40, deadline=None)
def test_orthogonal_to_a_line_and_peak_one_on_any_scale(values, shift, scale):
    v = np.array(values)
    if np.diff(np.sort(v)).min() < 1e-3 * np.ptp(v):
        v = np.arange(v.size) ** 1.5
    g = Curvature(along="v").shift(design_with(v), 1.0)
    assert np.abs(g).max() == pytest.approx(1.0)
    centred = v - v.mean()
    assert abs(g.sum()) < 1e-8 * v.size
    assert abs(g @ centred) < 1e-8 * np.abs(centred).sum()
    assert Curvature(along="v").shift(design_with(shift + scale * v), 1.0) == pytest.approx(g, abs=1e-6)


def test_a_point_lies_on_the_same_curve():
    v = np.array([0.0, 1.0, 2.0, 5.0, 7.0, 11.0])
    design = design_with(v)
    departure = Curvature(along="v")
    g = departure.shift(design, 0.7)
    assert [departure.shift_at(design, Point({"v": value}), 0.7) for value in v] == pytest.approx(g)
    # The curve is a parabola: its value between the rows follows from three of them.
    through = np.polyfit(v[:3], g[:3], 2)
    assert departure.shift_at(design, Point({"v": 4.0}), 0.7) == pytest.approx(np.polyval(through, 4.0))


def test_where_the_model_has_the_square_the_cube_bends():
    v = np.linspace(0.0, 4.0, 15) ** 1.3
    design = design_with(v, v**2)
    departure = Curvature(along="v")
    assert departure.power(design) == 3
    assert departure.note(design) == "the model already follows powers of 'v' up to 2; the curvature is in its power 3"
    g = departure.shift(design, 1.0)
    assert np.abs(design.X.T @ g).max() < 1e-9 * np.abs(design.X).sum()
    assert np.abs(g).max() == pytest.approx(1.0)


def test_target_line_moves_only_means():
    v = np.arange(8.0)
    design = design_with(v)
    slope = Focus.coefficient("v", design.names)
    mean = Focus("at 3", FocusKind.MEAN, np.array([[1.0, 3.0]]), np.zeros(1), point=Point({"v": 3.0}))
    world = World(((Curvature(along="v"), 2.0),)).on(design)
    assert world.target_shift(slope) == pytest.approx([0.0])
    assert world.target_shift(mean) == pytest.approx([world.mean[3]])


def test_average_slope_by_differences():
    v = np.array([0.0, 1.0, 2.0, 5.0, 7.0, 11.0])
    design = design_with(v)
    departure = Curvature(along="v", target="average-slope")
    step = 1e-5
    rise = [
        departure.shift_at(design, Point({"v": at + step}), 2.0) - departure.shift_at(design, Point({"v": at - step}), 2.0)
        for at in v
    ]
    expected = np.mean(rise) / (2 * step)
    assert abs(expected) > 0.01
    assert departure.target_shift(design, Focus.coefficient("v", design.names), 2.0) == pytest.approx([expected], rel=1e-6)
    assert departure.target_shift(design, Focus.coefficient("Intercept", design.names), 2.0) == pytest.approx([0.0])


def test_not_where_no_curve_is_possible(design):
    assert "takes 2 values" in Curvature(along="half").not_applicable(design)
    assert "takes 1 values" in Curvature(along="flat").not_applicable(design)
    v = np.repeat(np.arange(3.0), 4)
    by_level = Design(
        X=np.column_stack([v == 0, v == 1, v == 2]).astype(float),
        names=("a", "b", "c"),
        columns={"v": v},
        factors={"g": Factor(v.astype(np.int64), ("a", "b", "c"))},
    )
    assert "follows every curve in 'v'" in Curvature(along="v").not_applicable(by_level)
    with pytest.raises(ScenarioError, match="follows every curve"):
        Curvature(along="v").shift(by_level, 1.0)


def test_average_slope_needs_its_coefficient(design):
    assert "use target" in Curvature(along="signed", target="average-slope").not_applicable(design)
    v = np.linspace(0, 1, 9)
    assert "average slope in 'v'" in Curvature(along="v", target="average-slope").not_applicable(design_with(v, v**2))


@pytest.mark.parametrize(
    ("along", "message"),
    [
        ("X", "no numeric column 'X'.*Did you mean 'x'|no numeric column 'X'"),
        ("species", "categorical"),
        ("", "does not say which"),
    ],
)
def test_a_wrong_column_is_refused(design, along, message):
    with pytest.raises(ScenarioError, match=message):
        Curvature(along=along).not_applicable(design)


def test_a_wrong_target_and_a_point_without_the_column_are_refused(design):
    with pytest.raises(ScenarioError, match=r"unknown target 'slope'.*average-slope"):
        Curvature(along="x", target="slope")
    with pytest.raises(ScenarioError, match=r"acts along 'x'.*Add x ="):
        Curvature(along="x").shift_at(design, Point(), 1.0)
