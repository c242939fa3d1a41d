import numpy as np
import pytest
from scipy import stats
from scipy.special import ndtr

from withstand.departures import Contaminated, HeavyTails, Skew
from withstand.departures.quantiles import (
    contaminated_quantile,
    gamma_quantile,
    lognormal_sigma,
    student_quantile,
)
from withstand.errors import ScenarioError

Z = np.linspace(-6.0, 6.0, 2401)

EXACT = [
    (HeavyTails(df=30), stats.t(30, scale=np.sqrt(28 / 30))),
    (HeavyTails(df=5), stats.t(5, scale=np.sqrt(3 / 5))),
    (HeavyTails(df=3), stats.t(3, scale=np.sqrt(1 / 3))),
    (Skew(0.02), stats.pearson3(0.02)),
    (Skew(0.5), stats.pearson3(0.5)),
    (Skew(2), stats.pearson3(2)),
    (Skew(4), stats.pearson3(4)),
    (Skew(8), stats.pearson3(8)),
]


def moment(law, power):
    """By the trapezoidal rule over the range of the table."""
    z = np.linspace(-9.0, 9.0, 200_001)
    return float(np.sum(law(z) ** power * stats.norm.pdf(z)) * (z[1] - z[0]))


@pytest.mark.parametrize(("departure", "exact"), EXACT, ids=lambda value: getattr(value, "identity", ""))
def test_quantiles_are_those_of_scipy(departure, exact):
    """To 1e-4 of an error SD within 4.5 SDs, and to 1e-5 of themselves beyond; both tails."""
    law = departure.law(departure.ladder[0])
    expected = np.where(Z < 0, exact.ppf(ndtr(Z)), exact.isf(ndtr(-Z)))
    assert np.all(np.abs(law(Z) - expected) < 1e-4 + 1e-5 * np.abs(expected))


@pytest.mark.parametrize(
    "departure", [Skew(0.5), Skew(2), Skew(4), Skew(0.5, family="lognormal"), Skew(4, family="lognormal")], ids=lambda d: d.name
)
def test_moments_of_the_table(departure):
    law = departure.law(departure.ladder[0])
    assert moment(law, 1) == pytest.approx(0.0, abs=1e-6)
    assert moment(law, 2) == pytest.approx(1.0, abs=1e-5)
    assert moment(law, 3) == pytest.approx(departure.ladder[0], rel=1e-3)
    assert moment(law, 4) == pytest.approx(law.kurtosis, rel=2e-3)


def test_moments_of_symmetric_laws():
    for departure in (HeavyTails(df=10), Contaminated(3), Contaminated(5, share=0.1), Contaminated(10)):
        law = departure.law(departure.ladder[0])
        assert moment(law, 2) == pytest.approx(1.0, abs=1e-5)
        assert moment(law, 3) == pytest.approx(0.0, abs=1e-5)
        assert moment(law, 4) == pytest.approx(law.kurtosis, rel=1e-3)


def test_stated_kurtosis():
    """SciPy's excess kurtosis plus 3; the contaminated law by hand: 3 (.95 + .05 81)/(.95 + .05 9)^2 = 15/1.96."""
    assert HeavyTails().law(0.2).kurtosis == pytest.approx(3 + stats.t(5).stats(moments="k"))
    assert HeavyTails().law(1 / 3).kurtosis == np.inf
    assert Skew().law(2.0).kurtosis == pytest.approx(3 + stats.expon.stats(moments="k"))
    sigma = lognormal_sigma(4.0)
    assert Skew(family="lognormal").law(4.0).kurtosis == pytest.approx(3 + stats.lognorm(sigma).stats(moments="k"))
    assert Contaminated().law(3.0).kurtosis == pytest.approx(15 / 1.96)


@pytest.mark.parametrize("skewness", [1e-6, 0.01, 0.5, 4.0, 8.0])
def test_lognormal_has_the_skewness_asked_for(skewness):
    w_minus_1 = np.expm1(lognormal_sigma(skewness) ** 2)
    assert (w_minus_1 + 3) * np.sqrt(w_minus_1) == pytest.approx(skewness, rel=1e-12)


def test_the_exponential_has_closed_form_quantiles():
    """Skewness 2 is the exponential law: -log(1 - Phi(z)), and the scale is that of the mean."""
    law = Skew().law(2.0)
    assert law(Z) == pytest.approx(-stats.norm.logsf(Z) - 1.0, abs=1e-5)


@pytest.mark.parametrize(("k", "share"), [(3.0, 0.05), (10.0, 0.05), (50.0, 0.3)])
def test_contaminated_quantiles_invert_the_mixture(k, share):
    z = Z[Z != 0]
    x = contaminated_quantile(z, k, share)
    tail = (1 - share) * ndtr(-np.abs(x)) + share * ndtr(-np.abs(x) / k)
    assert tail == pytest.approx(ndtr(-np.abs(z)), rel=1e-10)
    assert np.array_equal(np.sign(x), np.sign(z))


def test_next_to_the_normal_the_expansions_join_the_exact_quantiles():
    z = np.linspace(-6, 6, 401)
    assert student_quantile(z, 0.99e-6) == pytest.approx(student_quantile(z, 1.01e-6), abs=1e-5)
    assert student_quantile(z, 0.5e-6) == pytest.approx(z + 0.5e-6 * (z**3 + z) / 4)
    for skewness in (0.00999, 0.01001):
        exact = np.where(z < 0, stats.pearson3(skewness).ppf(ndtr(z)), stats.pearson3(skewness).isf(ndtr(-z)))
        quantile = gamma_quantile(z, skewness) * (1.0 if skewness < 0.01 else skewness / 2)
        assert quantile == pytest.approx(exact, abs=1e-5)


@pytest.mark.parametrize(
    "departure",
    [
        HeavyTails([1e-9, 0.1, 0.45]),
        Contaminated([1.001, 3, 50]),
        Skew([1e-6, 0.1, 8]),
        Skew([1e-6, 0.1, 8], family="lognormal"),
    ],
    ids=lambda d: d.name,
)
def test_laws_never_turn_back(departure):
    z = np.linspace(-12, 12, 20001)
    for severity in departure.ladder:
        values = departure.law(severity)(z)
        assert np.isfinite(values).all()
        assert np.diff(values).min() >= -1e-12


def test_small_severities_are_near_the_normal():
    for departure, severity in (
        (HeavyTails(), 1e-7),
        (Contaminated(), 1.0001),
        (Skew(), 1e-5),
        (Skew(family="lognormal"), 1e-5),
    ):
        assert departure.law(severity)(Z) == pytest.approx(Z, abs=1e-3)


def test_degrees_of_freedom_in_place_of_the_severity():
    departure = HeavyTails(df=[30, 10, 5, 3])
    assert departure == HeavyTails()
    assert [departure.label(severity) for severity in departure.ladder] == [f"t with {df} df" for df in (30, 10, 5, 3)]
    assert HeavyTails(df=np.inf).ladder == (0.0,)
    with pytest.raises(ScenarioError, match="df 2 is out of range"):
        HeavyTails(df=[5, 2])
    with pytest.raises(ScenarioError, match="both severity and df"):
        HeavyTails(0.1, df=10)


def test_wrong_options_are_refused():
    with pytest.raises(ScenarioError, match="unknown family 'weibull'"):
        Skew(family="weibull")
    with pytest.raises(ScenarioError, match="share 1 is out of range"):
        Contaminated(share=1.0)


def test_a_law_is_tabulated_once():
    assert Skew().law(2.0) is Skew().law(2.0)
    assert Skew().law(2.0) is not Skew(family="lognormal").law(2.0)
