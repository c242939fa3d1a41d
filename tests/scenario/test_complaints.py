"""Every way a scenario can be malformed ends in one message that names the place, the value and the remedy."""

import pytest
from pydantic import ValidationError

from withstand.errors import ScenarioError
from withstand.scenario.complaints import complaint
from withstand.scenario.schema import Scenario
from withstand.scenario.source import Source

BASE = '[study]\ndata = "a.csv"\nmodel = "y ~ x"\n'
PLAN = '[study]\nmodel = "y ~ x"\n[study.plan]\nrows = 3\nerror_sd = 1\n[study.plan.columns]\n'


def refusal(text, tmp_path):
    source = Source("s.toml", text, tmp_path)
    raw = source.parse()
    with pytest.raises(ValidationError) as caught:
        Scenario.model_validate(raw)
    return complaint(caught.value, raw, source)


CASES = {
    "misspelt key": (
        '[study]\ndata = "a.csv"\nmodle = "y ~ x"\n',
        "s.toml, line 3, study.modle",
        "unknown key 'modle'",
        "Did you mean 'model'?",
    ),
    "misspelt table": (BASE + '[tolerence]\nsize = "cochran"\n', "s.toml, line 4, tolerence", "'tolerence'", "'tolerance'"),
    "unknown departure": (BASE + '[[departure]]\nkind = "skwe"\n', "line 4, departure 1", "unknown departure 'skwe'", "'skew'"),
    "no kind": (BASE + "[[departure]]\nseverity = [1]\n", "departure 1", "'kind' is missing", 'kind = "..."'),
    "unknown option": (BASE + '[[departure]]\nkind = "fan"\nalogn = "x"\n', "line 6, departure 1, alogn", "'alogn'", "'along'"),
    "text for a number": (
        BASE + '[[departure]]\nkind = "skew"\nseverity = "much"\n',
        "departure 1, severity",
        "'much'",
        "a number",
    ),
    "option of a companion": (
        BASE + '[[departure]]\nkind = "skew"\nwith = [{ kind = "serial", severty = 1 }]\n',
        "with 1, severty",
        "'severty'",
        "'severity'",
    ),
    "ladder of a companion": (
        BASE + '[[departure]]\nkind = "skew"\nwith = [{ kind = "serial", severity = [0.1, 0.2] }]\n',
        "with 1, severity",
        "[0.1, 0.2]",
        "a number",
    ),
    "one table for a list": (BASE + '[departure]\nkind = "skew"\n', "line 4, departure", "one table", "[[departure]]"),
    "unknown procedure": (
        BASE + '[procedures]\nuse = ["ols", { name = "hcc" }]\n',
        "procedures.use 2",
        "unknown procedure 'hcc'",
        "'hc",
    ),
    "option of a procedure": (BASE + '[procedures]\nuse = [{ name = "hac", lagz = 3 }]\n', "use 1, lagz", "'lagz'", "'lag'"),
    "number for a procedure": (
        BASE + '[procedures]\nuse = ["ols", 3]\n',
        "procedures.use 2",
        "entry 2 of use is 3",
        "text in quotes",
    ),
    "no procedures": (BASE + "[procedures]\nuse = []\n", "procedures.use", "use is the list []", "1 or more"),
    "focus as number": (BASE + "focus = 3\n", "line 4, study.focus", "focus is 3", "text in quotes"),
    "key of a point": (BASE + "focus = [{ att = { x = 1 } }]\n", "study.focus 1, att", "'att'", "'at'"),
    "kind of a point": (BASE + 'focus = [{ at = { x = 1 }, of = "men" }]\n', "focus 1, of", "'men'", "'mean'"),
    "level in percent": (BASE + "level = 95\n", "line 4, study.level", "level is 95", "less than 1"),
    "unknown rows": (BASE + 'rows = "resample"\n', "line 4, study.rows", "'resample'", "'resampled'"),
    "neither data nor plan": (
        '[study]\nmodel = "y ~ x"\n',
        "s.toml, line 1, study",
        "neither data nor a plan",
        'data = "table.csv"',
    ),
    "both data and plan": (
        PLAN.replace("[study]\n", '[study]\ndata = "a.csv"\n') + "x = { levels = [1, 2] }\n",
        "study",
        "both",
        "one of them",
    ),
    "no study": ('title = "a"\n', "s.toml", "'study' is missing", "[study]"),
    "study as number": ("study = 3\n", "line 1, study", "study is 3", "a table"),
    "infinite effect": (BASE + "effect = { x = inf }\n", "line 4, study.effect.x", "inf", "finite"),
    "negative seed": (BASE + "[simulation]\nseed = -1\n", "line 5, simulation.seed", "-1", "0"),
    "broken repetitions": (BASE + "[simulation]\nrepetitions = 1000.5\n", "simulation.repetitions", "1000.5", "a whole number"),
    "few repetitions": (BASE + "[simulation]\nrepetitions = 10\n", "simulation.repetitions", "10", "100"),
    "half a range": (BASE + "[tolerance]\nsize = [0.1]\n", "line 5, tolerance.size", "[0.1]", "2 or more"),
    "bias true": (BASE + "[tolerance]\nbias = true\n", "line 5, tolerance.bias", "true", "a number or false"),
    "key of a column": (PLAN + "x = { levles = [1, 2] }\n", "line 7, study.plan.columns.x.levles", "'levles'", "'levels'"),
    "two ways of a column": (PLAN + 'x = { law = "normal", levels = [1] }\n', "columns.x", "levels and law", "one of"),
    "no error SD": (PLAN.replace("error_sd = 1\n", "") + "x = { levels = [1, 2] }\n", "study.plan", "how large", "error_sd"),
}


@pytest.mark.parametrize("case", CASES)
def test_one_message_names_place_value_and_remedy(case, tmp_path):
    text, where, value, remedy = CASES[case]
    error = refusal(text, tmp_path)
    assert isinstance(error, ScenarioError)
    assert where in error.where
    assert value in error.what
    assert remedy in error.remedy
    assert "\n" not in str(error)


def test_says_how_many_more_keys_are_wrong(tmp_path):
    error = refusal(BASE + "levl = 0.9\n[simulation]\nsede = 3\n", tmp_path)
    assert "'levl'" in error.what
    assert "1 more key needs mending" in error.remedy
    # the misspelt key is why the required one is missing: one fault, told once
    assert "more" not in refusal('[study]\ndata = "a.csv"\nmodle = "y ~ x"\n', tmp_path).remedy


def test_message_shows_the_line_that_is_not_toml(tmp_path):
    with pytest.raises(ScenarioError, match=r"s\.toml, line 2, column \d+: this is not valid TOML.*`data = a\.csv`"):
        Source("s.toml", "[study]\ndata = a.csv\n", tmp_path).parse()
    with pytest.raises(ScenarioError, match="given twice"):
        Source("s.toml", "[study]\nlevel = 0.9\nlevel = 0.8\n", tmp_path).parse()
    with pytest.raises(ScenarioError, match="at the end of the file"):
        Source("s.toml", '[study]\ndata = ["a"', tmp_path).parse()


def test_file_that_is_missing_or_no_text(tmp_path):
    with pytest.raises(ScenarioError, match="cannot be read \\(no such file"):
        Source.read(tmp_path / "missing.toml")
    (tmp_path / "latin.toml").write_bytes('title = "Wärme"\n'.encode("latin-1"))
    with pytest.raises(ScenarioError, match="byte 11 is not UTF-8 text"):
        Source.read(tmp_path / "latin.toml")


def test_draw_may_stand_among_the_columns_or_above_them():
    def plan(text):
        return Scenario.model_validate(Source("s.toml", text, None).parse()).study.plan

    among = plan(PLAN + 'x = { levels = [1, 2] }\ndraw = "once"\n')
    above = plan(PLAN.replace("error_sd = 1\n", 'error_sd = 1\ndraw = "once"\n') + "x = { levels = [1, 2] }\n")
    assert among.draw == above.draw == "once"
    assert list(among.columns) == ["x"]
