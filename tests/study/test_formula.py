import ast

import formulaic
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from withstand.errors import FormulaError
from withstand.study.formula import FUNCTIONS, parse_formula

COLUMNS = ["y", "a", "b", "my col:^", "s"]

ACCEPTED = [
    ("y ~ a + b", ("a", "b"), ()),
    ("log(y) ~ a*b + C(s)", ("a", "b", "s"), ("s",)),
    ("y ~ `my col:^` + a:b", ("my col:^", "a", "b"), ()),
    ("y ~ (a + b)**2 - a:b", ("a", "b"), ()),
    ("y ~ (a + b)^2", ("a", "b"), ()),
    ("y ~ poly(a, 2, raw=True)", ("a",), ()),
    ("y ~ bs(a, df=4) + cr(b, df=3)", ("a", "b"), ()),
    ("y ~ bs(a, knots=[200, 300])", ("a",), ()),
    ("y ~ 0 + a", ("a",), ()),
    ("y ~ a - 1", ("a",), ()),
    ("y ~ 1", (), ()),
    ("y ~ I(a**2) + I(2 * a - b / 3) + I(-a)", ("a", "b"), ()),
    ("y ~ sqrt(a) + exp(b) + log2(a) + log10(a) + log1p(a)", ("a", "b"), ()),
    ("y ~ center(a) + scale(b) + a/b", ("a", "b"), ()),
    ("y ~ C(s) + s", ("s",), ()),
]


@pytest.mark.parametrize(("text", "columns", "coded"), ACCEPTED)
def test_accepted(text, columns, coded):
    formula = parse_formula(text, COLUMNS)
    assert formula.columns == columns
    assert formula.coded == coded
    assert formula.response_columns == ("y",)


def test_powers_reach_the_library_as_powers():
    frame = pd.DataFrame({"a": [1.0, 2.0, 3.0]})
    formula = parse_formula("y ~ I(a^2)", ["y", "a"])
    assert np.asarray(formulaic.model_matrix(formula.predictors, frame))[:, 1].tolist() == [1.0, 4.0, 9.0]


REFUSED = {
    "y ~ a**2": "I(a**2)",
    "y ~ a^3": "I(a**2)",
    "y ~ __import__('os').system('x')": "calls a function",
    "y ~ I(__import__('os'))": "`__import__(...)`",
    "y ~ open(a)": "`open(...)`",
    "y ~ a.b": "attribute",
    "y ~ I(a.real)": "attribute",
    "y ~ a[0]": "index",
    "y ~ np.log(a)": "`np.log(...)`",
    "y ~ hashed(a)": "`hashed(...)`",
    "y ~ Q('a')": "`Q(...)`",
    "y ~ lag(a)": "`lag(...)`",
    "y ~ (lambda x: x)(a)": "cannot be read",
    "y ~ I(a if b else a)": "not evaluated",
    "y ~ I(a > 3)": "not evaluated",
    "y ~ I([a for a in b])": "not evaluated",
    "y ~ {a + 1}": "not evaluated",
    "y ~ f'{a}'": "not evaluated",
    "y ~ 'a'": "cannot be a term",
    "y ~ a | b": "not evaluated",
    "y ~ a @ b": "'@'",
    "y ~ .": "cannot be read",
    "y ~ a +": "cannot be read",
    "y ~ 5": "`5` cannot be a term",
    "y ~ 2*a": "`2` cannot be a term",
    "y ~ True": "cannot be a term",
    "y ~ C(s, contr.sum)": "more than a column",
    "y ~ log(a, base=b)": "no number",
    "y ~ log()": "names no column",
    "y ~ I(a**9**9)": "exponent",
    "y ~ I(a * 9**9)": "power of a number",
    "y ~ I(a**99)": "beyond 20",
    "y ~ poly(a, 1000000)": "beyond 100",
    "y ~ (a + b)**b": "whole number",
    "y ~ colour": "no column 'colour'",
    "y ~ a + y": "right side too",
    "y a": "not of the form",
    "~ a": "not of the form",
    "y ~ a ~ b": "not of the form",
    "y / 2 ~ a": "left side",
    "y + a ~ b": "left side",
    "1 ~ a": "left side",
    "I(3) ~ a": "names no column",
    "": "not of the form",
}


@pytest.mark.parametrize("text", REFUSED)
def test_refused(text):
    with pytest.raises(FormulaError) as caught:
        parse_formula(text, COLUMNS)
    assert REFUSED[text] in str(caught.value)
    assert caught.value.where == "study.model"
    assert caught.value.remedy


def test_unknown_column_offers_the_nearest():
    with pytest.raises(FormulaError, match="Did you mean 'dry_hours'"):
        parse_formula("y ~ dry_hour", ["y", "dry_hours", "species"])


def test_response_of_a_plan_need_not_be_there():
    assert parse_formula("bloom ~ a", ["a"], planned=True).response_columns == ("bloom",)
    with pytest.raises(FormulaError, match="one name"):
        parse_formula("log(bloom) ~ a", ["a"], planned=True)


@settings(max_examples=400, deadline=None)
@given(st.text(alphabet="ab yls()+-*/:^~[].,`'\"=0129ICogq_{}|&%@!<>\n", max_size=30))
def test_strange_text_is_refused_or_harmless(text):
    try:
        formula = parse_formula(f"y ~ {text}", COLUMNS)
    except FormulaError:
        return
    source = formula.predictors.replace("`my col:^`", "a").replace("`", "").replace(":", "@")
    nodes = list(ast.walk(ast.parse(source, mode="eval")))
    assert not any(isinstance(node, ast.Attribute | ast.Subscript | ast.Lambda | ast.JoinedStr) for node in nodes)
    assert {node.id for node in nodes if isinstance(node, ast.Name)} <= {*COLUMNS, *FUNCTIONS}
