import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf
from statsmodels.stats.outliers_influence import variance_inflation_factor

from withstand.errors import DesignError, FormulaError, InputError, ScenarioError, TableError
from withstand.study import Study
from withstand.study.facts import design_facts, focal_estimates
from withstand.study.focus import FocusKind


@pytest.fixture
def frame():
    rng = np.random.default_rng(11)
    n = 60
    table = pd.DataFrame(
        {
            "y": rng.normal(20.0, 2.0, n),
            "x": rng.normal(50.0, 9.0, n),
            "z": rng.uniform(1.0, 3.0, n),
            "s": rng.choice(["oak", "ash", "NA"], n),
            "code": np.arange(n) % 4 + 1,
            "run": np.arange(n) * 2.0,
            "batch": np.repeat(np.arange(12), 5),
            "w": rng.uniform(0.5, 2.0, n),
        }
    )
    return table.sample(frac=1.0, random_state=3)


@pytest.mark.parametrize(
    "formula",
    [
        "y ~ x + z",
        "y ~ x*s",
        "y ~ x + C(code)",
        "log(y) ~ log(x) + I(z**2)",
        "y ~ poly(x, 2) + s:z",
        "y ~ 0 + s + x",
        "y ~ bs(x, df=5)",
        "y ~ center(x) + scale(z)",
    ],
)
def test_reference_fit_agrees_with_statsmodels(frame, formula):
    study = Study.from_frame(frame, formula)
    direct = sm.OLS(study.response, study.design.X).fit()
    assert study.coefficients == pytest.approx(direct.params, rel=1e-8, abs=1e-10)
    assert study.error_sd == pytest.approx(np.sqrt(direct.mse_resid), rel=1e-10)
    if "(" not in formula.replace("C(", "").replace("log(", ""):
        other = smf.ols(formula.replace("log(", "np.log("), frame).fit()
        assert np.sort(other.fittedvalues) == pytest.approx(np.sort(study.design.fitted), rel=1e-8)


def test_known_weights_give_the_weighted_fit(frame):
    study = Study.from_frame(frame, "y ~ x + z", weights="w")
    direct = smf.wls("y ~ x + z", frame, weights=frame["w"]).fit()
    assert study.coefficients == pytest.approx(direct.params.to_numpy(), rel=1e-9)
    told = {one["name"]: one["se"] for one in design_facts(study).coefficients}
    assert told["x"] == pytest.approx(direct.bse["x"], rel=1e-9)


def test_from_results_takes_over_fit_weights_and_names(frame):
    frame.loc[frame.index[4], "x"] = np.nan
    for results in (
        smf.ols("y ~ x + C(code) + s", frame).fit(),
        smf.wls("y ~ x + s", frame, weights=frame["w"]).fit(),
        sm.OLS(frame["y"], sm.add_constant(frame[["z", "run"]])).fit(),
        sm.OLS(frame["y"].to_numpy(), frame[["z", "run"]].to_numpy()).fit(),
    ):
        study = Study.from_results(results)
        assert np.sort(study.coefficients) == pytest.approx(np.sort(np.asarray(results.params)), rel=1e-7, abs=1e-9)
        assert study.n == int(results.nobs)
        assert (study.design.weights is not None) == (type(results.model).__name__ == "WLS")


def test_from_results_refuses_what_it_cannot_repeat(frame):
    with pytest.raises(ScenarioError, match="GLS"):
        Study.from_results(sm.GLS(frame["y"], frame[["x"]]).fit())
    with pytest.raises(FormulaError, match=r"np\.log"):
        Study.from_results(smf.ols("y ~ np.log(x)", frame).fit())


def test_rows_are_counted_and_named(frame):
    frame = frame.reset_index(drop=True).astype({"code": float})
    frame.loc[0] = np.nan
    frame.loc[[1, 2], "x"] = np.nan
    frame.loc[2, "y"] = np.nan
    frame.loc[5, "s"] = "  "
    frame.loc[7, "run"] = np.nan
    study = Study.from_frame(frame, "y ~ x + s", order="run")
    assert dict(study.account.dropped) == {"(blank row)": 1, "y": 1, "x": 1, "s": 1, "run": 1}
    assert study.account.used == study.n == 55
    assert (np.diff(study.design.order) > 0).all()
    assert len(study.labels) == 55
    assert "0" not in study.labels


def test_order_sorts_rows_groups_and_weights_together(frame):
    study = Study.from_frame(frame, "y ~ x", order="run", groups="batch", weights="w")
    arranged = frame.sort_values("run")
    assert study.response.tolist() == arranged["y"].tolist()
    assert study.design.weights.tolist() == arranged["w"].tolist()
    assert study.design.groups.tolist() == pd.factorize(arranged["batch"])[0].tolist()
    assert study.design.columns["z"].tolist() == arranged["z"].tolist()  # a bystander outside the model


def test_dates_are_an_order(frame):
    frame["day"] = pd.Timestamp("2031-04-09") + pd.to_timedelta(frame["run"], unit="D")
    as_text = frame.assign(day=frame["day"].dt.strftime("%Y-%m-%d"))
    for table in (frame, as_text):
        assert np.diff(Study.from_frame(table, "y ~ x", order="day").design.order).tolist() == [2.0] * 59


def test_gaps_and_ties_and_codes_are_said(frame):
    frame["run"] = frame["run"].where(frame["run"] < 100.0, frame["run"] + 7.0)
    said = " ".join(Study.from_frame(frame, "y ~ x + code", order="run").notices)
    assert "from 2 to 9" in said
    assert "C(code)" in said
    frame["run"] = 1.0
    assert "59 rows stand at the same place" in " ".join(Study.from_frame(frame, "y ~ x", order="run").notices)


def test_focus_of_every_kind(frame):
    entries = [
        "x", "s", "s[oak] - s[ash]", "0.5 * s[oak] + 0.5*s[ash] - s[NA]", "code[2]", "x:s",
        {"at": {"x": 50.0, "s": "oak", "code": 2}, "of": "mean"}, {"at": {"x": 50, "s": "NA", "code": "1"}, "of": "new"},
    ]  # fmt: skip
    study = Study.from_frame(frame, "y ~ x*s + C(code)", focus=entries, effect={"x": 0.1, "s": [1.0, 2.0]})
    kinds = [focus.kind for focus in study.focus]
    assert kinds == [
        FocusKind.COEFFICIENT, FocusKind.JOINT, FocusKind.CONTRAST, FocusKind.CONTRAST, FocusKind.COEFFICIENT,
        FocusKind.JOINT, FocusKind.MEAN, FocusKind.NEW,
    ]  # fmt: skip
    direct = smf.ols("y ~ x*C(s) + C(code)", frame).fit()
    half = study.focus[3].L[0] @ study.coefficients
    assert half == pytest.approx((direct.params["C(s)[T.oak]"] + direct.params["C(s)[T.ash]"]) / 2, rel=1e-6)
    at = pd.DataFrame({"x": [50.0], "s": ["oak"], "code": [2]})
    assert study.focus[6].point.fitted == pytest.approx(direct.predict(at).iloc[0], rel=1e-8)
    assert study.focus[0].effect.tolist() == [0.1]
    assert study.focus[1].effect.tolist() == [1.0, 2.0]


def test_focus_left_out_is_every_term(frame):
    assert [focus.name for focus in Study.from_frame(frame, "y ~ x + s").focus] == ["x", "s"]
    assert [focus.name for focus in Study.from_frame(frame, "y ~ 1").focus] == ["Intercept"]


def test_levels_keep_the_order_of_a_categorical(frame):
    frame["s"] = pd.Categorical(frame["s"], categories=["oak", "ash", "NA"])
    assert Study.from_frame(frame, "y ~ s").design.names == ("Intercept", "s[ash]", "s[NA]")


@pytest.mark.parametrize("weights", [None, "w"])
def test_estimates_and_intervals_of_the_focus(frame, weights):
    entries = ["x", "s", "s[oak] - s[ash]", {"at": {"x": 50.0, "s": "oak"}}, {"at": {"x": 50.0, "s": "oak"}, "of": "new"}]
    study = Study.from_frame(frame, "y ~ x + s", focus=entries, weights=weights, level=0.9)
    found = focal_estimates(study)
    assert found[1] == {}
    X, y = study.design.X, study.response
    direct = (sm.OLS(y, X) if weights is None else sm.WLS(y, X, weights=study.design.weights)).fit()
    for place in (0, 2, 3):
        other = direct.t_test(study.focus[place].L)
        low, high = other.conf_int(alpha=0.1)[0]
        assert list(found[place].values()) == pytest.approx([other.effect[0], low, high], rel=1e-8)
    new = direct.get_prediction(study.focus[4].L).summary_frame(alpha=0.1)
    expected = new[["mean", "obs_ci_lower", "obs_ci_upper"]].to_numpy()[0]
    assert list(found[4].values()) == pytest.approx(expected, rel=1e-8)


def test_collinearity_is_told(frame):
    frame["x2"] = frame["x"] + 0.1 * frame["z"]
    study = Study.from_frame(frame, "y ~ x + x2", focus=["x", "x2 - x"])
    facts = design_facts(study)
    assert list(facts.widening) == ["x"]
    reference = variance_inflation_factor(study.design.X, 1)
    assert facts.vif["x"] == pytest.approx(reference, rel=1e-8)
    assert facts.widening["x"] == pytest.approx(np.sqrt(reference), rel=1e-8)


def test_a_row_that_fits_itself_is_named(frame):
    frame = frame.reset_index(drop=True)
    frame["dummy"] = (frame.index == 17) * 1.0
    study = Study.from_frame(frame, "y ~ x + dummy")
    assert any("row 17 " in notice and "HC3" in notice for notice in study.notices)


def changed(frame, **columns):
    return frame.reset_index(drop=True).assign(**columns)


def with_cell(frame, column, cell):
    table = changed(frame)
    table[column] = table[column].astype(object)
    table.loc[8, column] = cell
    return table


REFUSED = [
    (lambda f: f, "y ~ x + q", {}, FormulaError, ["'q'", "Known"]),
    (lambda f: f, "y ~ x", {"order": "runn"}, TableError, ["'runn'", "'run'", "study.order"]),
    (lambda f: f, "y ~ x", {"groups": "bach"}, TableError, ["'bach'", "'batch'"]),
    (lambda f: f, "y ~ x", {"focus": "s"}, ScenarioError, ["'s'", "study.focus"]),
    (lambda f: f, "y ~ x + s", {"focus": "s[elm] - s[ash]"}, ScenarioError, ["'s' has no level 'elm'", "ash"]),
    (lambda f: f, "y ~ x + s", {"focus": "s[oak] - s[oak]"}, ScenarioError, ["0 whatever"]),
    (lambda f: f, "y ~ x", {"focus": ["x", "x"]}, ScenarioError, ["twice"]),
    (lambda f: f, "y ~ x", {"focus": "x", "effect": {"z": 1.0}}, ScenarioError, ["'z'", "study.effect"]),
    (lambda f: f, "y ~ s", {"focus": "s", "effect": {"s": 1.0}}, ScenarioError, ["1 numbers", "2 are tested"]),
    (lambda f: f, "y ~ x", {"focus": {"at": {"z": 1.0}}}, ScenarioError, ["'z' is no predictor"]),
    (lambda f: f, "y ~ x + s", {"focus": {"at": {"x": 1.0, "s": "elm"}}}, ScenarioError, ["no level 'elm'"]),
    (lambda f: f, "y ~ x", {"focus": {"at": {"x": 1.0}, "of": "median"}}, ScenarioError, ["median", "mean, new"]),
    (lambda f: f, "y ~ x", {"level": 95}, ScenarioError, ["95", "0.95"]),
    (lambda f: f, "y ~ x", {"rows": "resampled", "order": "run"}, ScenarioError, ["study.rows"]),
    (lambda f: f, "s ~ x", {}, TableError, ["'s' is text"]),
    (lambda f: with_cell(f, "x", "<0.05"), "y ~ x", {}, TableError, ["<0.05", "row 8", "'x'", "below or above"]),
    (lambda f: with_cell(f, "x", "12,5"), "y ~ x", {}, TableError, ["12,5", 'decimal = ","']),
    (lambda f: with_cell(f, "x", "NA"), "y ~ x", {}, TableError, ["'NA'", "blank"]),
    (lambda f: with_cell(f, "x", "nan"), "y ~ x", {}, TableError, ["'nan'", "finite"]),
    (lambda f: with_cell(f, "x", np.inf), "y ~ x", {}, TableError, ["inf", "row 8", "'x'"]),
    (lambda f: with_cell(f, "run", "soon"), "y ~ x", {"order": "run"}, TableError, ["soon", "row 8"]),
    (lambda f: with_cell(f, "w", 0.0), "y ~ x", {"weights": "w"}, TableError, ["not positive", "row 8"]),
    (lambda f: with_cell(f, "x", -1.0), "y ~ log(x)", {}, TableError, ["row 8", "log(x)"]),
    (lambda f: changed(f, x=np.nan), "y ~ x", {}, TableError, ["no row is left", "60 for 'x'"]),
    (lambda f: changed(f, y=3.0), "y ~ x", {}, TableError, ["`y` is 3 in every row"]),
    (lambda f: changed(f, y=f["x"].to_numpy() * 2 + 1), "y ~ x", {}, TableError, ["residual variance is zero"]),
    (lambda f: changed(f, x2=f["x"].to_numpy() * 2), "y ~ x + x2", {}, DesignError, ["'x2'", "Intercept, x"]),
    (lambda f: f[(f["s"] != "oak") | (f["code"] != 2)], "y ~ s*C(code)", {}, DesignError, ["s[oak]:code[2]"]),
    (lambda f: f.head(3), "y ~ x + z", {}, DesignError, ["3 rows", "3 columns"]),
    (lambda f: f.head(0), "y ~ x", {}, TableError, ["no rows"]),
    (lambda f: pd.concat([f, f[["x"]]], axis=1), "y ~ x", {}, TableError, ["'x' comes 2 times"]),
]


@pytest.mark.parametrize("case", range(len(REFUSED)))
def test_refused(frame, case):
    change, formula, options, kind, told = REFUSED[case]
    table = change(frame)
    before = table.copy()
    with pytest.raises(InputError) as caught:
        Study.from_frame(table, formula, **options)
    assert isinstance(caught.value, kind)
    for part in told:
        assert part in str(caught.value)
    pd.testing.assert_frame_equal(table, before)


def test_resampled_rows_keep_whole_groups(frame):
    study = Study.from_frame(frame, "y ~ x", groups="batch", rows="resampled")
    drawn = study.rows.draw(np.random.default_rng(1))
    assert not study.rows.fixed
    assert drawn.n == study.n
    assert np.bincount(drawn.groups).tolist() == [5] * 12


def test_digest_follows_what_matters(frame):
    digest = Study.from_frame(frame, "y ~ x + z", focus="x").digest
    assert digest == Study.from_frame(frame, "y ~ x + z", focus="x", name="other").digest
    assert digest != Study.from_frame(frame, "y ~ x + z", focus="z").digest
    assert digest != Study.from_frame(frame, "y ~ x + z", focus="x", level=0.9).digest
    assert digest != Study.from_frame(changed(frame, y=frame["y"].to_numpy() + 1e-9), "y ~ x + z", focus="x").digest
