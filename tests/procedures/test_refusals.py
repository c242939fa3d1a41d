"""Options out of range and designs without what a procedure needs: the message names the option and the value."""

from dataclasses import replace

import numpy as np
import pytest

from withstand.errors import ScenarioError
from withstand.procedures import make_procedure

from .odd_data import make, new_at, slope


@pytest.mark.parametrize(
    ("name", "options", "message"),
    [
        ("gls", {"rho": 1.0}, r"gls\.rho: rho is 1"),
        ("gls", {"rho": float("nan")}, r"gls\.rho: rho is nan"),
        ("gls", {"step": 0.0}, r"gls\.step: step is 0"),
        ("gls", {"within": "x1"}, r"gls\.within: within is 'x1'"),
        ("prais-winsten", {"within": "rows"}, r"prais-winsten\.within: within is 'rows'"),
        ("huber", {"k": 0.0}, "huber: the tuning constant is 0"),
        ("bisquare", {"c": -1.0}, "bisquare: the tuning constant is -1"),
        ("hac", {"lag": -1}, r"hac\.lag: lag is -1"),
        ("hac", {"reference": "z"}, r"hac\.reference: reference is 'z'"),
        ("hac-cosine", {"terms": 0}, r"hac-cosine\.terms: terms is 0"),
    ],
)
def test_an_option_out_of_range_is_refused(name, options, message):
    with pytest.raises(ScenarioError, match=message):
        make_procedure(name, **options)


def test_an_unknown_column_of_the_variance_function_is_refused_with_the_nearest():
    design = make("plain", 1)[0]
    with pytest.raises(ScenarioError, match=r"fitted-weights\.along: .*'x11'.*Did you mean 'x1'"):
        make_procedure("fitted-weights", along="x11").not_applicable(design, slope(design))


@pytest.mark.parametrize(
    ("name", "options", "changes", "reason"),
    [
        ("prais-winsten", {}, {"order": None}, "names no order column"),
        ("gls", {}, {"order": None}, "names no order column"),
        ("prais-winsten", {"within": "groups"}, {"groups": None}, "names no groups"),
        ("gls", {"rho": -0.5}, {"order": np.cumsum(np.linspace(1.0, 2.0, 21))}, "negative correlation -0.5"),
        ("prais-winsten", {}, {"order": np.zeros(21)}, "share the position 0"),
        ("fitted-weights", {"along": "flat"}, {"columns": {"flat": np.full(21, 2.0)}}, "'flat' is the same in every row"),
        ("cr2", {}, {"groups": None}, "names no groups"),
        ("known-weights", {}, {}, "names no known weights"),
    ],
)
def test_what_the_design_lacks_is_said(name, options, changes, reason):
    design = replace(make("plain", 1)[0], **changes)
    said = make_procedure(name, **options).not_applicable(design, slope(design))
    assert said is not None
    assert said.startswith("not applicable, because ")
    assert reason in said


def test_a_row_with_leverage_one_has_no_logarithm():
    design = make("plain", 1)[0]
    X = design.X.copy()
    X[:, 2] = 0.0
    X[6, 2] = 1.0
    said = make_procedure("fitted-weights").not_applicable(replace(design, X=X), slope(design))
    assert said is not None
    assert "row 7 (in analysis order) has leverage 1" in said


@pytest.mark.parametrize("name", ["huber", "bisquare", "lad", "lad-kernel"])
def test_robust_fits_say_nothing_about_new_responses(name):
    design = make("plain", 1)[0]
    said = make_procedure(name).not_applicable(design, new_at(design))
    assert said is not None
    assert "claims no variance for a new response" in said


def test_a_new_response_needs_the_value_its_variance_follows():
    design = make("plain", 1)[0]
    said = make_procedure("fitted-weights", along="x1").not_applicable(design, new_at(design))
    assert said is not None
    assert "no value for 'x1'" in said
