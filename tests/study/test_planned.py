import pickle

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf

from withstand.errors import InputError, ScenarioError
from withstand.study.columns import Blocks, Drawn, InSequence, Levels, Shares
from withstand.study.pilot import Pilot
from withstand.study.planned import StudyPlan
from withstand.study.planning import replanned
from withstand.study.resolving import planned_study
from withstand.study.study import Study

COLUMNS = {
    "dose": Levels((0.0, 1.0, 2.0, 4.0)),
    "age": Drawn("normal", mean=50, sd=12, correlated={"dose": 0.3}),
    "site": Shares({"south": 0.5, "north": 0.5}),
    "week": InSequence(),
}
STATED = {"Intercept": 10.0, "dose": 0.8, "site[north]": 1.5}


def plan(**changes):
    return StudyPlan(**({"rows": 40, "columns": COLUMNS, "coefficients": STATED, "error_sd": 3.0} | changes))


MODEL = "y ~ dose + age + site"


def study(formula=MODEL, **changes):
    if formula != MODEL:
        changes = {"coefficients": {}} | changes
    options = {k: changes.pop(k) for k in ("focus", "order", "groups", "weights", "level", "effect") if k in changes}
    return planned_study(plan(**changes), formula, **options)


def generator(seed=1):
    return np.random.default_rng(seed)


def test_a_plan_becomes_a_study():
    planned = study(focus=["dose", "site"], order="week")
    assert planned.design.names == ("Intercept", "dose", "age", "site[north]")
    assert planned.coefficients.tolist() == [10.0, 0.8, 0.0, 1.5]
    assert planned.error_sd == 3.0
    assert planned.response is None
    assert planned.design.order.tolist() == list(range(1, 41))
    assert planned.design.fitted == pytest.approx(planned.design.X @ planned.coefficients)
    # Columns outside the model are kept: spread may run along them.
    assert set(planned.design.columns) == {"dose", "age", "week"}
    assert planned.design.factors["site"].levels == ("south", "north")


def test_the_design_is_that_of_the_same_table_as_data():
    planned = study("y ~ dose * site + log(age)")
    columns, factors = planned.design.columns, planned.design.factors
    frame = pd.DataFrame(columns).assign(site=np.array(factors["site"].levels)[factors["site"].codes])
    frame["site"] = pd.Categorical(frame["site"], ["south", "north"])
    frame["y"] = generator().standard_normal(len(frame))
    data = Study.from_frame(frame, "y ~ dose * site + log(age)")
    assert data.design.names == planned.design.names
    np.testing.assert_array_equal(data.design.X, planned.design.X)


def test_random_columns_are_drawn_afresh_or_once():
    fresh, once = study(), study(draw="once")
    assert not fresh.rows.fixed
    assert once.rows.fixed
    a, b = fresh.rows.draw(generator(1)), fresh.rows.draw(generator(2))
    assert a.columns["dose"].tolist() == b.columns["dose"].tolist()
    assert not np.array_equal(a.columns["age"], b.columns["age"])
    assert fresh.rows.draw(generator(1)).X.tolist() == a.X.tolist()
    assert once.rows.draw(generator(1)) is once.rows.draw(generator(2))
    assert once.design.X.tolist() == study(draw="once").design.X.tolist()
    assert once.design.X.tolist() != study(draw="once", seed=2).design.X.tolist()
    assert study("y ~ dose", columns={"dose": COLUMNS["dose"]}).rows.fixed


def test_tables_drawn_together_are_those_drawn_one_by_one():
    # 6 rows of a rare level: some tables do not carry the model and are drawn again.
    columns = {"x": Drawn("uniform", low=0, high=1), "g": Shares({"a": 0.8, "b": 0.2})}
    rows = study("y ~ x + g", rows=6, columns=columns, coefficients={}).rows
    together = rows.draw_all([generator(seed) for seed in range(40)])
    singly = [rows.draw(generator(seed)) for seed in range(40)]
    for a, b in zip(together, singly, strict=True):
        assert a.X.tolist() == b.X.tolist()
        assert a.factors["g"].codes.tolist() == b.factors["g"].codes.tolist()


def test_it_grows_by_its_own_generator():
    planned = study("y ~ dose + scale(age)", groups="site")
    grown = planned.grow(80)
    assert grown.n == 80
    assert grown.grow(40).design.X.tolist() == planned.design.X.tolist()
    assert grown.digest != planned.digest
    # Scale and centre stay those of the table that is shown, so that a coefficient means the same at every n.
    age = planned.design.columns["age"]
    assert grown.design.X[:, 2] == pytest.approx((grown.design.columns["age"] - age.mean()) / age.std(ddof=1))


def test_more_rows_make_more_blocks():
    columns = {"dose": Levels((0.0, 1.0)), "plot": Blocks(4)}
    planned = study("y ~ dose + plot", rows=12, columns=columns, coefficients={"dose": 1.0, "plot[b2]": 0.5}, groups="plot")
    assert planned.design.names == ("Intercept", "dose", "plot[b2]", "plot[b3]")
    assert planned.design.group_count == 3
    grown = planned.grow(20)
    assert grown.design.p == 6
    assert grown.coefficients.tolist() == [0.0, 1.0, 0.5, 0.0, 0.0, 0.0]


def test_numbers_in_c_are_codes():
    planned = study("y ~ C(dose)", coefficients={"dose[4]": 2.0}, focus=["dose", "dose[4] - dose[1]"])
    assert planned.design.names == ("Intercept", "dose[1]", "dose[2]", "dose[4]")
    assert planned.focus[0].k == 3
    assert planned.focus[1].L.tolist() == [[0.0, -1.0, 0.0, 1.0]]


def test_attrition_is_taken_off():
    assert study(attrition=0.25).n == 30
    assert study(attrition=0.25).grow(80).n == 60
    assert not study("y ~ dose", columns={"dose": COLUMNS["dose"]}, attrition=0.25).rows.fixed


def test_error_sd_from_r_squared():
    # With columns that stay as they are the variance of the mean is known: 0.8^2 var(dose) + 1.5^2/4.
    columns = {"dose": COLUMNS["dose"], "site": Levels(("south", "north"))}
    planned = study("y ~ dose + site", columns=columns, error_sd=None, r_squared=0.3, coefficients=STATED)
    variance = 0.64 * np.var([0, 1, 2, 4]) + 1.5**2 / 4
    assert planned.error_sd == pytest.approx(np.sqrt(variance * 0.7 / 0.3))
    drawn = study(error_sd=None, r_squared=0.3, columns=COLUMNS | {"age": Drawn("normal", mean=0, sd=1)})
    # The mean over 100 tables of 40 rows: covariance of dose and site moves the variance by 2 x 0.8 x 1.5 x 0.117 a table, so
    # the SD by 0.7 %; 4.5 standard errors, and 0.4 % for shares whose variance in a sample is 1/40 smaller.
    assert drawn.error_sd == pytest.approx(np.sqrt(variance * 0.7 / 0.3), rel=0.036)


def test_power_is_judged_at_stated_coefficients_and_said_so():
    planned = study(focus=["dose", "age", "site"], effect={"site": 2.0})
    assert [None if f.effect is None else f.effect.tolist() for f in planned.focus] == [[0.8], None, [2.0]]
    assert planned.notices == ("power for 'dose' is judged at 0.8, from the stated coefficients, as no effect is given",)


def test_a_study_can_be_planned_otherwise():
    planned = study(focus="dose")
    changed = replanned(planned, error_sd=5.0, columns={"age": Drawn("uniform", low=20, high=80)})
    assert changed.error_sd == 5.0
    assert changed.design.columns["age"].min() >= 20
    assert list(changed.design.columns) == list(planned.design.columns)
    assert changed.digest != planned.digest
    data = Study.from_frame(pd.DataFrame({"x": range(9), "y": [1, 3, 2, 5, 4, 6, 8, 7, 9]}), "y ~ x")
    with pytest.raises(ScenarioError, match="has data, and no plan"):
        replanned(data, error_sd=2.0)


def test_a_plan_crosses_process_borders():
    planned = study(order="week")
    other = pickle.loads(pickle.dumps(planned))
    assert other.rows.draw(generator(3)).X.tolist() == planned.rows.draw(generator(3)).X.tolist()


PILOT = pd.DataFrame(
    {
        "dose": [0.0, 1.0, 2.0, 4.0, 0.0, 1.0, 2.0, 4.0, 1.0],
        "age": [41.0, 52.5, 47.0, 66.0, 55.0, 38.5, 61.0, 49.0, 44.0],
        "site": list("nsnsnsnsn"),
        "y": [11.2, 13.9, 12.1, 17.0, 9.6, 12.8, 13.3, 15.1, 11.9],
    }
)


def test_a_pilot_gives_error_sd_columns_and_coefficients():
    planned = study("y ~ dose + age + site", columns={}, coefficients={"dose": 1.0}, error_sd=None, pilot=Pilot(PILOT))
    fit = smf.ols("y ~ dose + age + site", PILOT).fit()
    assert planned.error_sd == pytest.approx(np.sqrt(fit.scale), rel=1e-9)
    by_name = dict(zip(planned.design.names, planned.coefficients, strict=True))
    assert by_name["dose"] == 1.0
    assert by_name["site[s]"] == pytest.approx(fit.params["site[T.s]"], rel=1e-9)
    assert planned.design.factors["site"].levels == ("n", "s")
    assert planned.focus[0].effect.tolist() == [1.0]
    # What was fitted to the pilot is not an effect that matters.
    assert planned.focus[1].effect is None
    assert "rests on a pilot of 9 rows (5 degrees of freedom)" in planned.notices[0]
    low, high = planned.grow.sd_range
    assert low < planned.error_sd < high


@pytest.mark.parametrize(
    ("changes", "where", "value"),
    [
        ({"rows": 1}, "study.plan.rows", "1 rows"),
        ({"error_sd": -1.0}, "study.plan.error_sd", "-1"),
        ({"error_sd": None}, "study.plan", "nothing says"),
        ({"r_squared": 0.5}, "study.plan", "error_sd and r_squared"),
        ({"error_sd": None, "r_squared": 1.5}, "study.plan.r_squared", "1.5"),
        ({"error_sd": None, "r_squared": 0.5, "coefficients": {}}, "study.plan.r_squared", "explain nothing"),
        ({"draw": "twice"}, "study.plan.draw", "twice"),
        ({"coefficients": {"dose": np.nan}}, "study.plan.coefficients", "nan"),
        ({"coefficients": {"dosis": 1.0}}, "study.plan.coefficients", "'dosis'"),
        ({"formula": "y ~ doze"}, "study.model", "doze"),
        ({"formula": "y ~ C(age)"}, "study.model", "'age'"),
        ({"formula": "log(y) ~ dose"}, "study.model", "log(y)"),
        ({"formula": "dose ~ age"}, "study.model", "dose"),
        ({"order": "month"}, "study.plan.columns", "'month'"),
        ({"order": "site"}, "study.order", "'site'"),
        ({"weights": "dose"}, "study.weights", "'dose'"),
        ({"rows": 3}, "", "3 rows"),
        ({"level": 1.2}, "study.level", "1.2"),
        ({"focus": "dosis"}, "study.focus", "'dosis'"),
        ({"effect": {"week": 1.0}}, "study.effect", "'week'"),
        ({"error_sd": None, "pilot": Pilot(PILOT.drop(columns="y"))}, "study.plan.pilot", "'y'"),
        ({"error_sd": None, "pilot": Pilot(PILOT)}, "study.plan.pilot", "'n'"),
        ({"error_sd": None, "pilot": Pilot(PILOT.drop(columns="age"))}, "study.plan.pilot", "'age'"),
    ],
)
def test_what_a_plan_cannot_do_is_refused_with_the_remedy(changes, where, value):
    with pytest.raises(InputError) as caught:
        study(**changes)
    assert value in caught.value.what
    assert caught.value.remedy
    if where:
        assert caught.value.where == where


def test_a_spline_beyond_its_range_says_what_to_do():
    planned = study("y ~ bs(age, df=4)", coefficients={})
    with pytest.raises(InputError, match='draw = "once"'):
        planned.rows.draw_all([generator(seed) for seed in range(50)])
