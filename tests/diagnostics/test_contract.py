"""What every registered diagnostic keeps: free of scale and coefficients, one value a replicate, inputs left alone."""

import numpy as np
import pytest

from withstand.diagnostics import groups, influence, mean, serial, shape, shapiro, spread
from withstand.diagnostics.base import REGISTRY, Diagnostic, independent_columns, make_diagnostic, observed
from withstand.errors import ScenarioError
from withstand.procedures.sample import Sample
from withstand.study.design import Design

FAMILIES = (groups, influence, mean, serial, shape, shapiro, spread)
OPTIONS = {"added-square": {"along": "x"}}


def design(n=40):
    rng = np.random.default_rng(3)
    x = rng.uniform(1.0, 5.0, n)
    return Design(
        X=np.column_stack([np.ones(n), x, rng.normal(size=n)]),
        names=("Intercept", "x", "z"),
        columns={"x": x},
        fitted=2.0 * x,
        order=np.arange(n, dtype=float),
        groups=(np.arange(n) % 6).astype(np.int64),
    )


def every():
    return [make_diagnostic(name, **OPTIONS.get(name, {})) for name in sorted(REGISTRY)]


def test_the_registry_holds_every_diagnostic_defined():
    defined = {
        cls.name
        for family in FAMILIES
        for cls in vars(family).values()
        if isinstance(cls, type) and issubclass(cls, Diagnostic) and "name" in vars(cls)
    }
    assert defined == set(REGISTRY)


@pytest.mark.parametrize("diagnostic", every(), ids=lambda d: d.name)
def test_says_what_it_is(diagnostic):
    for text in (diagnostic.title, diagnostic.null, diagnostic.formula, diagnostic.source):
        assert text.strip() == text
        assert text
    assert diagnostic.needs in ("", "order", "groups", "response")
    assert diagnostic.not_applicable(design()) is None


@pytest.mark.parametrize("diagnostic", every(), ids=lambda d: d.name)
def test_free_of_scale_and_of_coefficients(diagnostic):
    d = design()
    errors = np.random.default_rng(5).standard_t(4, (d.n, 7))
    beta = np.array([3.0, -2.0, 0.5])
    plain = diagnostic.statistic(Sample(d, errors, None, coefficients=beta))
    before = errors.copy()
    scaled = diagnostic.statistic(Sample(d, 250.0 * errors, None, coefficients=250.0 * beta))
    assert plain.shape == (7,)
    assert np.isfinite(plain).all()
    np.testing.assert_allclose(scaled, plain, rtol=1e-9, atol=1e-12)
    np.testing.assert_array_equal(errors, before)
    if diagnostic.needs != "response":
        other = diagnostic.statistic(Sample(d, errors + (d.X @ beta)[:, None], None))
        np.testing.assert_allclose(other, plain, rtol=1e-7, atol=1e-9)


@pytest.mark.parametrize("diagnostic", every(), ids=lambda d: d.name)
def test_one_replicate_alone_is_the_same_as_in_a_block(diagnostic):
    d = design()
    errors = np.random.default_rng(6).normal(size=(d.n, 5))
    beta = np.array([3.0, -2.0, 0.5])
    block = diagnostic.statistic(Sample(d, errors, None, coefficients=beta))
    for b in range(5):
        alone = diagnostic.statistic(observed(d, d.X @ beta + errors[:, b]))
        np.testing.assert_allclose(alone[0], block[b], rtol=1e-8)


def test_identity_names_changed_options():
    assert make_diagnostic("koenker").identity == "koenker"
    assert make_diagnostic("koenker", along="x").identity == "koenker(along=x)"
    assert make_diagnostic(make_diagnostic("reset")).name == "reset"


def test_an_unknown_name_offers_the_nearest():
    with pytest.raises(ScenarioError, match=r"unknown diagnostic 'konker'\. Did you mean 'koenker'\?"):
        make_diagnostic("konker")


def test_an_unknown_option_offers_the_known_ones():
    with pytest.raises(ScenarioError, match=r"'ljung-box' has no option 'lag'\. Did you mean 'lags'\?"):
        make_diagnostic("ljung-box", lag=2)
    with pytest.raises(ScenarioError, match=r"'skewness' has no option 'lag'\. It takes no options"):
        make_diagnostic("skewness", lag=2)


@pytest.mark.parametrize(
    ("name", "options", "told"),
    [
        ("ljung-box", {"lags": 0}, "lags is 0"),
        ("reset", {"power": 1}, "power is 1"),
        ("goldfeld-quandt", {"drop": 1.0}, "drop is 1"),
    ],
)
def test_options_out_of_range_are_refused(name, options, told):
    with pytest.raises(ScenarioError, match=told):
        make_diagnostic(name, **options)


@pytest.mark.parametrize(
    ("name", "options", "reason"),
    [
        ("durbin-watson", {}, "needs a time order"),
        ("group-f", {}, "needs two groups or more"),
        ("lag-one", {"within": True}, "names no groups"),
        ("breusch-godfrey", {"lags": 3}, "3 lags are too many for 3 degrees of freedom"),
        ("goldfeld-quandt", {"along": "x"}, "too small to carry the model"),
        ("koenker", {"along": "flat"}, "'flat' is the same in every row"),
        ("added-square", {"along": "two"}, "takes 2 values"),
        ("reset", {"power": 4}, "leave no degree of freedom"),
    ],
)
def test_not_applicable_says_why(name, options, reason):
    x = np.arange(6.0)
    small = Design(
        X=np.column_stack([np.ones(6), x, x**2]),
        names=("Intercept", "x", "x2"),
        columns={"x": x, "flat": np.ones(6), "two": x % 2},
    )
    told = make_diagnostic(name, **options).not_applicable(small)
    assert told is not None
    assert told.startswith("not applicable, because")
    assert reason in told


def test_a_row_with_leverage_one_does_not_stand_out():
    x = np.zeros(12)
    x[0] = 1.0
    d = Design(X=np.column_stack([np.ones(12), x]), names=("Intercept", "x"))
    errors = np.random.default_rng(2).normal(size=(12, 4))
    without = Design(X=np.ones((11, 1)), names=("Intercept",))
    for name in ("max-studentised", "max-cook"):
        assert np.isfinite(make_diagnostic(name).statistic(Sample(d, errors, None))).all()
    np.testing.assert_allclose(
        make_diagnostic("max-studentised").statistic(Sample(d, errors, None)),
        make_diagnostic("max-studentised").statistic(Sample(without, errors[1:], None)),
        rtol=1e-10,
    )


def test_independent_columns_ignore_units_and_constants():
    rng = np.random.default_rng(1)
    a = rng.normal(size=30)
    basis = independent_columns(np.column_stack([np.ones(30), a, 1e9 * a + 4.0, 1e-9 * a**2]))
    assert basis.shape == (30, 2)
    np.testing.assert_allclose(basis.T @ basis, np.eye(2), atol=1e-12)


def test_observed_data_have_no_randomness_to_give():
    with pytest.raises(TypeError, match="asked for randomness"):
        observed(design(), np.ones(40)).noise.procedure_generator("wild-bootstrap")
