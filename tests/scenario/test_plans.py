import numpy as np
import pytest

from withstand.errors import InputError
from withstand.scenario.load import load_scenario
from withstand.study.columns import Blocks, Drawn, InSequence, Levels, Shares

STUDY = """
[study]
model = "y ~ dose + age + site"
focus = ["dose"]
order = "week"
effect = { dose = 0.5 }
"""
PLAN = """
[study.plan]
rows = 40
error_sd = 3.0
coefficients = { Intercept = 10, dose = 0.8, "site[north]" = 1.5 }
[study.plan.columns]
dose = { levels = [0, 1, 2, 4] }
age = { law = "normal", mean = 50, sd = 12, correlated = { dose = 0.3 } }
site = { shares = { south = 0.5, north = 0.5 } }
week = { sequence = true }
plot = { blocks_of = 4 }
"""


def loaded(tmp_path, text):
    path = tmp_path / "trial.toml"
    path.write_text(text, encoding="utf-8")
    return load_scenario(path)


def test_a_planned_study_is_what_the_scenario_says(tmp_path):
    study = loaded(tmp_path, STUDY + PLAN).study
    plan = study.grow.plan
    assert plan.columns == {
        "dose": Levels((0.0, 1.0, 2.0, 4.0)),
        "age": Drawn("normal", mean=50.0, sd=12.0, correlated={"dose": 0.3}),
        "site": Shares({"south": 0.5, "north": 0.5}),
        "week": InSequence(),
        "plot": Blocks(4),
    }
    assert study.n == 40
    assert study.coefficients.tolist() == [10.0, 0.8, 0.0, 1.5]
    assert study.error_sd == 3.0
    assert study.roles == {"order": "week"}
    assert study.focus[0].effect.tolist() == [0.5]
    assert not study.rows.fixed
    assert study.name == "trial"


def test_a_pilot_stands_beside_the_scenario(tmp_path):
    rng = np.random.default_rng(2)
    rows = [
        f"{dose},{rng.normal(50, 12):.3f},{site},{rng.normal(10, 2):.3f}"
        for dose, site in zip([0, 1, 2, 4] * 3, "nss" * 4, strict=True)
    ]
    (tmp_path / "pilot.csv").write_text("\n".join(["dose,age,site,y", *rows]) + "\n", encoding="utf-8")
    text = (STUDY + PLAN).replace("error_sd = 3.0", 'pilot = "pilot.csv"').replace("south", "s").replace("north", "n")
    study = loaded(tmp_path, text).study
    assert "rests on a pilot of 12 rows (8 degrees of freedom)" in study.notices[0]
    assert study.coefficients[1] == 0.8


def test_seed_and_draw_decide_the_table(tmp_path):
    once = PLAN.replace("rows = 40", 'rows = 40\ndraw = "once"')
    study = loaded(tmp_path, STUDY + once).study
    assert study.rows.fixed
    other = loaded(tmp_path, STUDY + once + "[simulation]\nseed = 5\n").study
    assert study.design.X.tolist() != other.design.X.tolist()
    assert study.design.columns["dose"].tolist() == other.design.columns["dose"].tolist()


@pytest.mark.parametrize(
    ("before", "after", "line", "words", "remedy"),
    [
        ("sd = 12,", "sd = -12,", "age =", "-12", "positive"),
        ('law = "normal"', 'law = "norml"', "age =", "norml", "normal"),
        ("dose = 0.3 }", "doze = 0.3 }", "age =", "'doze'", "dose"),
        ("[0, 1, 2, 4]", "[0, 0]", "dose =", "[0.0, 0.0]", "once"),
        ("north = 0.5 } }", "north = 0.6 } }", "site =", "north = 0.6", "shares"),
        ("blocks_of = 4", "blocks_of = 1", "plot =", "1 rows", "2"),
        ('"site[north]" = 1.5', '"site[nord]" = 1.5', "coefficients", "site[nord]", "site[north]"),
        ('order = "week"', 'order = "month"', "", "'month'", "week"),
        ('order = "week"', 'rows = "resampled"', "", "resampled", "draw"),
        ('order = "week"', 'decimal = ","', "", "decimal", "Leave it out"),
        ("rows = 40", "rows = 40\nattrition = 1.0", "attrition", "1", "less than 1"),
        ("rows = 40", "rows = 99999999999999999999", "rows", "99999999999999999999", "10,000,000"),
        ("error_sd = 3.0", "error_sd = 1e-308", "error_sd", "1e-308", "between"),
        ('"site[north]" = 1.5', '"site[north]" = 1e308', "coefficients", "1e+308", "within"),
        ("error_sd = 3.0", 'pilot = "none.csv"', "", "none.csv", ""),
    ],
)
def test_a_wrong_plan_is_refused_where_it_stands(tmp_path, before, after, line, words, remedy):
    text = (STUDY + PLAN).replace(before, after)
    assert text != STUDY + PLAN
    with pytest.raises(InputError) as caught:
        loaded(tmp_path, text)
    assert words in str(caught.value)
    assert remedy in str(caught.value)
    if line:
        number = next(i for i, written in enumerate(text.splitlines(), start=1) if written.startswith(line))
        assert f"line {number}" in str(caught.value)
