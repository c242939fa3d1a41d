"""Rules that look first and then choose: against the two branches and a diagnostic of a general package."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.diagnostic import het_breuschpagan, linear_reset

from withstand.departures import Fan, World
from withstand.diagnostics import Pretest
from withstand.diagnostics.base import REGISTRY as DIAGNOSTICS
from withstand.diagnostics.pretest import detector
from withstand.diagnostics.serial import DurbinWatson
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import Job
from withstand.engine.noise import BlockNoise
from withstand.engine.tally import Feature
from withstand.errors import ScenarioError
from withstand.measures.compute import measure
from withstand.procedures import REGISTRY, make_procedure
from withstand.procedures.sample import Sample
from withstand.study.design import Design
from withstand.study.focus import Focus, FocusKind
from withstand.study.rows import FixedRows
from withstand.study.study import Study

LEVEL = 0.95


def data(seed, n=25, count=60):
    """A design with errors that fan out in half of the replicates; others bend, drift, are tied or have heavy tails."""
    rng = np.random.default_rng(seed)
    x = np.sort(rng.uniform(1.0, 4.0, n))
    X = np.column_stack([np.ones(n), x, rng.standard_normal(n)])
    errors = rng.standard_normal((n, count))
    errors[:, ::2] *= (x[:, None] - 0.9) ** 1.5
    errors[:, ::3] = np.round(errors[:, ::3])
    errors[:, ::5] = rng.standard_t(2, (n, len(range(0, count, 5))))
    errors[:, ::7] += 0.5 * np.cumsum(errors[:, ::7], axis=0)
    errors[:, ::6] += 2.0 * (x[:, None] - 2.5) ** 2
    design = Design(X, ("Intercept", "x1", "x2"), columns={"x1": x}, order=np.arange(n, dtype=float), fitted=X[:, 1])
    return design, errors


def sample_of(design, errors, **more):
    return Sample(design, errors, BlockNoise(1, 0, errors.shape[1]), **more)


def foci_of(design):
    L = np.zeros((2, design.p))
    L[0, 1] = L[1, 2] = 1.0
    return [Focus.coefficient("x1", design.names), Focus("both", FocusKind.JOINT, L, np.zeros(2))]


def p_of(name, y, X):
    """The p-value a general package gives on one data set."""
    result = sm.OLS(y, X).fit()
    match name:
        case "koenker":
            return het_breuschpagan(result.resid, X)[1]
        case "shapiro":
            return stats.shapiro(result.resid).pvalue
        case "reset":
            return linear_reset(result, power=3, use_f=True).pvalue


@pytest.mark.parametrize("name", ["koenker", "shapiro", "reset"])
@pytest.mark.parametrize("seed", [1, 2])
def test_each_replicate_takes_the_branch_its_own_test_says(name, seed):
    design, errors = data(seed)
    beta, sd = np.array([4.0, 1.0, -0.5]), 1.3
    rule = Pretest(name, "hc3", "ols")
    sample = sample_of(design, errors, coefficients=beta, error_sd=sd)
    foci = foci_of(design)
    fits = rule.prepare(design, foci, LEVEL)(sample)
    y = design.X @ beta[:, None] + sd * errors
    # RESET looks at responses, and the rule then answers in their unit; the others look at errors.
    seen, centre = (y, beta[1]) if name == "reset" else (errors, 0.0)
    fails = np.array([p_of(name, y[:, b], design.X) <= 0.05 for b in range(errors.shape[1])])
    assert 5 < fails.sum() < 55
    for b, failed in enumerate(fails):
        model = sm.OLS(seen[:, b], design.X).fit()
        result = model.get_robustcov_results("HC3", use_t=True) if failed else model
        low, high = result.conf_int(alpha=1 - LEVEL)[1]
        assert fits[0].estimate[0, b] == pytest.approx(model.params[1], abs=1e-9)
        assert fits[0].width[b] == pytest.approx(high - low, rel=1e-8)
        assert fits[0].variance[b] == pytest.approx(result.bse[1] ** 2, rel=1e-8)
        below, above = (flags[b] for flags in fits[0].misses(np.array([centre])))
        assert (below, above) == (high < centre, low > centre)
        assert fits[1].rejects(np.zeros(2))[b] == (result.f_test(foci[1].L).pvalue < 1 - LEVEL)
    assert rule.equivariant == (name != "reset")


def test_the_durbin_watson_test_has_its_size():
    """Critical value by simulation on this design; the size at 5 % under the ideal model."""
    design, _ = data(1)
    count = 20_000
    errors = np.random.default_rng(3).standard_normal((design.n, count))
    rejected = detector(DurbinWatson(), design, 0.05)(sample_of(design, errors))
    # The error of the critical value (9,999 draws) and that of this check (20,000).
    tolerance = 4.5 * np.sqrt(0.05 * 0.95 * (1 / 9_999 + 1 / count))
    assert rejected.mean() == pytest.approx(0.05, abs=tolerance)
    again = detector(DurbinWatson(), design, 0.05)(sample_of(design, errors))
    np.testing.assert_array_equal(rejected, again)


def test_durbin_watson_chooses_hac_under_positive_correlation():
    design, errors = data(2)
    walk = np.cumsum(errors[:, 1::6], axis=0)
    rule = Pretest("durbin-watson", "hac", "ols")
    fit = rule.prepare(design, foci_of(design)[:1], LEVEL)(sample_of(design, walk))[0]
    hac = make_procedure("hac").prepare(design, foci_of(design)[:1], LEVEL)(sample_of(design, walk))[0]
    np.testing.assert_allclose(fit.width, hac.width)


def study_of(design):
    foci = (Focus.coefficient("x1", design.names, 0.4),)
    return Study("pretest", "", design, foci, np.array([4.0, 1.0, -0.5]), 1.3, FixedRows(design), digest="pretest")


def test_in_the_kernel_the_rule_is_one_procedure():
    """Of rules with two equal branches nothing is left but that branch, whichever way they are run."""
    design, _ = data(1)
    procedures = [make_procedure("hc3"), Pretest("koenker", "hc3", "hc3"), Pretest("reset", "hc3", "hc3")]
    job = Job(study_of(design), (World(((Fan(along="x1"), 3.0),)),), tuple(procedures), 2)
    found = Kernel(job).run(range(1), {0: range(3)})
    plain, one, other = (measure(found[0, i][0], ["coverage", "size", "power", "width", "bias"], 1.3) for i in range(3))
    for name, value in plain.items():
        assert one[name].value == pytest.approx(value.value, rel=1e-9, abs=1e-12)
        assert other[name].value == pytest.approx(value.value, rel=1e-7, abs=1e-9)


def test_the_branches_add_up_and_passing_does_not_protect():
    """Coverage where the test passed, plus coverage where it failed, is the coverage of the rule."""
    design, _ = data(1, n=25)
    rule = Pretest("koenker", "hc3", "ols")
    failed = Pretest("koenker", "hc3", "ols", branch="failed")
    job = Job(
        study_of(design), (World(((Fan(along="x1"), 3.0),)),), (rule, rule.given_passed, failed, make_procedure("ols")), 2
    )
    found = Kernel(job).run(range(4), {0: range(4), BASELINE: range(4)})
    whole, passed, other, plain = (found[0, i][0].products[Feature.ONE] for i in range(4))
    for feature in (Feature.OK, Feature.COVERED, Feature.REJECTED, Feature.POWERED):
        assert passed[feature] + other[feature] == pytest.approx(whole[feature])
    replicates = plain[Feature.ONE]
    share = passed[Feature.OK] / replicates
    assert 0.3 < share < 0.99
    given = passed[Feature.COVERED] / passed[Feature.OK]
    overall = plain[Feature.COVERED] / replicates
    # Least squares where the test passed is no better than least squares everywhere, by more than Monte Carlo error.
    assert given <= overall + 4.5 * np.sqrt(0.05 * 0.95 / passed[Feature.OK])
    rate = measure(found[0, 1][0], ["failure_rate"])["failure_rate"].value
    assert rate == pytest.approx(1.0 - share)


def test_names_and_registration():
    assert REGISTRY["pretest"] is Pretest
    assert make_procedure("pretest", if_="shapiro", then="hc3", otherwise="ols").identity == "if shapiro then hc3 else ols"
    assert Pretest(alpha=0.2).identity == "if koenker then hc3 else ols at 0.2"
    assert Pretest().given_passed.identity == "if koenker then hc3 else ols, where it passed"
    wanted = {
        "koenker", "breusch-pagan", "white", "goldfeld-quandt", "durbin-watson", "ljung-box", "breusch-godfrey", "reset",
        "shapiro-wilk", "jarque-bera", "skewness", "kurtosis", "max-studentised", "max-cook", "group-f",
    }  # fmt: skip
    assert wanted <= set(DIAGNOSTICS)


@pytest.mark.parametrize(
    ("options", "told"),
    [
        ({"if_": "konker"}, r"pretest\.if: unknown diagnostic 'konker'\. Did you mean 'koenker'\?"),
        ({"then": "hc33"}, r"pretest\.then: unknown procedure 'hc33'\. Did you mean 'hc3'\?"),
        ({"otherwise": "pretest"}, r"pretest\.else: unknown procedure 'pretest'"),
        ({"alpha": 1.0}, r"pretest\.alpha: alpha is 1"),
        ({"branch": "left"}, r"pretest\.branch: branch is 'left'"),
    ],
)
def test_rules_that_make_no_sense_are_refused(options, told):
    with pytest.raises(ScenarioError, match=told):
        Pretest(**options)


def test_not_applicable_comes_from_the_diagnostic_or_a_branch():
    design, _ = data(1)
    focus = foci_of(design)[0]
    bare = Design(design.X, design.names)
    assert "needs a time order" in Pretest("durbin-watson", "hc3", "ols").not_applicable(bare, focus)
    assert "no groups" in Pretest("koenker", "cr2", "ols").not_applicable(bare, focus)
    assert "'goldfeld-quandt' along 'fitted'" in Pretest("goldfeld-quandt", "hc3", "ols").not_applicable(bare, focus)
    assert Pretest("koenker", "hc3", "ols").not_applicable(bare, focus) is None
    assert Pretest("koenker", "permutation", "ols").answers(focus) == make_procedure("permutation").answers(focus)
