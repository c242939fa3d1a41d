"""Certified regressions of the NIST Statistical Reference Datasets (Linear Regression; https://www.itl.nist.gov/div898/strd/)."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import scipy.stats
import statsmodels.api as sm

from withstand.study import Study
from withstand.study.design import Design
from withstand.study.facts import design_facts
from withstand.study.formula import parse_formula
from withstand.study.model import Model


def errors(study):
    return [one["se"] for one in design_facts(study).coefficients]


def test_norris():
    """The data file ships with SciPy's own tests; certified values: NIST StRD, Norris (lower level of difficulty)."""
    path = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_linregress" / "Norris.dat"
    lines = path.read_text().splitlines()[60:96]
    frame = pd.DataFrame([map(float, line.split()) for line in lines], columns=["y", "x"])
    study = Study.from_frame(frame, "y ~ x")
    assert study.n == 36
    assert study.coefficients == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-11)
    assert errors(study) == pytest.approx([0.232818234301152, 0.000429796848199937], rel=1e-11)
    assert study.error_sd == pytest.approx(0.884796396144373, rel=1e-11)


def test_longley():
    """The data ship with statsmodels; certified values: NIST StRD, Longley (higher level of difficulty)."""
    study = Study.from_frame(sm.datasets.longley.load_pandas().data, "TOTEMP ~ GNPDEFL + GNP + UNEMP + ARMED + POP + YEAR")
    certified = [
        -3482258.63459582, 15.0618722713733, -0.0358191792925910, -2.02022980381683, -1.03322686717359, -0.0511041056535807,
        1829.15146461355,
    ]  # fmt: skip
    certified_errors = [
        890420.383607373, 84.9149257747669, 0.0334910077722432, 0.488399681651699, 0.214274163161675, 0.226073200069370,
        455.478499142212,
    ]  # fmt: skip
    assert study.coefficients == pytest.approx(certified, rel=1e-8)
    assert errors(study) == pytest.approx(certified_errors, rel=1e-8)
    assert study.error_sd == pytest.approx(304.854073561965, rel=1e-9)


def test_wampler1():
    """NIST StRD, Wampler1 (higher level of difficulty): y is the sum of the powers 0 to 5 of x, so every coefficient is 1.

    The certified residual SD is 0, which a study refuses, so the fit alone is compared.
    """
    x = np.arange(21.0)
    frame = pd.DataFrame({"x": x, "y": sum(x**power for power in range(6))})

    formula = parse_formula("y ~ x + I(x**2) + I(x**3) + I(x**4) + I(x**5)", ["x", "y"])
    _, X = Model.of(formula, frame)

    assert Design(X, tuple("abcdef")).coefficients(frame["y"].to_numpy()) == pytest.approx(np.ones(6), rel=1e-7)
