"""Bad input: one clear message that names the offending thing, exit status 2, and nothing written over."""

import json
import sqlite3

import pytest

ROWS = [
    line.split(",")
    for line in "1.2,1,a;2.9,2,a;2.1,3,b;4.6,4,b;4.8,5,c;6.3,6,c;6.2,7,d;8.9,8,d".replace(";", "\n").splitlines()
]


def table(rows=ROWS, header="y,x,g"):
    return "\n".join([header, *(",".join(row) for row in rows)]) + "\n"


def with_cell(row, column, value):
    rows = [list(cells) for cells in ROWS]
    rows[row][column] = value
    return table(rows)


def scenario(extra="", study="", model="y ~ x"):
    return f'[study]\ndata = "t.csv"\nmodel = "{model}"\n{study}\n{extra}\n'


GOOD = table()
# name: (table, arguments behind the table or a scenario, words the message must hold)
TABLES = {
    "empty file": ("", ["--model", "y ~ x"], ["t.csv", "empty"]),
    "no rows": ("y,x,g\n", ["--model", "y ~ x"], ["t.csv", "no rows"]),
    "no model": (GOOD, [], ["t.csv", "--model"]),
    "unknown column": (GOOD, ["--model", "y ~ xx"], ["xx", "Did you mean", "'x'"]),
    "unknown response": (GOOD, ["--model", "z ~ x"], ["z", "Known"]),
    "unknown focus": (GOOD, ["--model", "y ~ x", "--focus", "xs"], ["xs", "Did you mean", "'x'"]),
    "unknown order": (GOOD, ["--model", "y ~ x", "--order", "tt"], ["tt"]),
    "unknown groups": (GOOD, ["--model", "y ~ x", "--groups", "gg"], ["gg", "'g'"]),
    "text among numbers": (with_cell(4, 1, "<0.05"), ["--model", "y ~ x"], ["x", "<0.05", "row 6"]),
    "decimal comma": (
        "y;x;g\n" + "".join(f"{y.replace('.', ',')};{x};{g}\n" for y, x, g in ROWS),
        ["--model", "y ~ x"],
        ["t.csv, row 2", "'y'", "1,2", '--decimal ","'],
    ),
    "no rows left": (
        table([[*row[:2], ""] if i % 2 else [row[0], "", row[2]] for i, row in enumerate(ROWS)]),
        ["--model", "y ~ x + g"],
        ["row"],
    ),
    "rank deficient": (table([[*row, row[1]] for row in ROWS], "y,x,g,z"), ["--model", "y ~ x + z"], ["x", "z"]),
    "more columns than rows": (table(ROWS[:3]), ["--model", "y ~ x + C(g) + I(x**2)"], ["3 rows"]),
    "as many columns as rows": (table(ROWS[:2]), ["--model", "y ~ x"], ["2"]),
    "constant response": (table([["3", *row[1:]] for row in ROWS]), ["--model", "y ~ x"], ["y", "3"]),
    "no residual variance": (
        table([[str(2 * float(row[1]) + 1), *row[1:]] for row in ROWS]),
        ["--model", "y ~ x"],
        ["without error"],
    ),
    "infinite value": (with_cell(2, 1, "inf"), ["--model", "y ~ x"], ["inf", "row 4"]),
    "column named twice": (table(header="y,x,x"), ["--model", "y ~ x"], ["'x'", "2 times"]),
    "formula that calls": (GOOD, ["--model", "y ~ __import__('os').system('touch owned')"], ["__import__"]),
    "formula that reaches attributes": (GOOD, ["--model", "y ~ x.real"], ["."]),
    "formula that indexes": (GOOD, ["--model", "y ~ x[0]"], ["["]),
    "formula with an unknown function": (GOOD, ["--model", "y ~ eval(x)"], ["eval"]),
    "power outside I()": (GOOD, ["--model", "y ~ x**2"], ["I(x**2)"]),
    "formula without a response": (GOOD, ["--model", "x"], ["~"]),
    "contrast of unknown levels": (GOOD, ["--model", "y ~ C(g)", "--focus", "g[a] - g[q]"], ["q"]),
    "effect without a number": (GOOD, ["--model", "y ~ x", "--effect", "x"], ["--effect", "'x'"]),
    "effect beyond all squares": (GOOD, ["--model", "y ~ x", "--effect", "x=1e308"], ["--effect", "1e+308"]),
    "effect of no focus": (GOOD, ["--model", "y ~ x", "--effect", "q=2"], ["q"]),
    "factor of a focus that is infinite": (GOOD, ["--model", "y ~ x", "--focus", "1e400*x"], ["inf", "1e400*x", "1e+50"]),
    "sum of a focus that would overflow": (GOOD, ["--model", "y ~ x", "--focus", "1e308*x + 1e308*x"], ["1e+308"]),
    "term without a column": (GOOD, ["--model", "y ~ x + poly(x, 0)"], ["poly(x, 0)", "no column"]),
    "factor with one level": (table([[*row[:2], "a"] for row in ROWS]), ["--model", "y ~ x + C(g)"], ["`g`", "no column"]),
    "squares that overflow": (
        table([[f"{row[0]}e200", *row[1:]] for row in ROWS]),
        ["--model", "y ~ x"],
        ["1.2e+200", "row 2"],
    ),
    "quotient by zero": (with_cell(3, 1, "0"), ["--model", "y ~ I(1/x)"], ["row 5", "inf", "divisor"]),
    "level in percent": (GOOD, ["--model", "y ~ x", "--level", "95"], ["95", "--level"]),
    "few repetitions": (GOOD, ["--model", "y ~ x", "--repetitions", "5"], ["5", "--repetitions"]),
}
SCENARIOS = {
    "unknown departure": (scenario('[[departure]]\nkind = "skwe"'), ["s.toml, line 5", "skwe", "'skew'"]),
    "unknown procedure": (scenario('[procedures]\nuse = ["hc9"]'), ["procedures.use 1", "hc9", "'hc"]),
    "unknown key": (scenario(study="groops = 1"), ["line 4", "groops", "'groups'"]),
    "unknown tolerance": (scenario('[tolerance]\nsize = "cochrane"'), ["line 6", "cochrane", "'cochran'"]),
    "serial without an order": (scenario('[[departure]]\nkind = "serial"'), ["departure 1", "serial", "order"]),
    "clusters without groups": (scenario('[[departure]]\nkind = "clusters"'), ["departure 1", "clusters", "groups"]),
    "fan along an unknown column": (scenario('[[departure]]\nkind = "fan"\nalong = "xx"'), ["departure 1", "xx"]),
    "fan along text": (scenario('[[departure]]\nkind = "fan"\nalong = "g"'), ["departure 1", "'g'"]),
    "severity out of range": (
        scenario('[[departure]]\nkind = "skew"\nseverity = [900]'),
        ["departure 1, severity", "900", "skew"],
    ),
    "correlation beyond one": (
        scenario('[[departure]]\nkind = "serial"\nseverity = [1.2]', 'order = "x"'),
        ["severity", "1.2"],
    ),
    "companion with a ladder": (
        scenario('[[departure]]\nkind = "skew"\nwith = [{ kind = "fan", along = "x" }]'),
        ["departure 1, with 1", "one severity"],
    ),
    "two of a layer": (
        scenario('[[departure]]\nkind = "skew"\nwith = [{ kind = "heavy-tails", severity = 0.2 }]'),
        ["skew", "heavy-tails"],
    ),
    "departure twice": (scenario('[[departure]]\nkind = "skew"\n[[departure]]\nkind = "skew"'), ["skew", "twice"]),
    "procedure twice": (scenario('[procedures]\nuse = ["ols", "ols"]'), ["ols", "twice"]),
    "cap below the start": (scenario("[simulation]\nrepetitions = 5000\nmost = 1000"), ["most", "1000"]),
    "departure twice in a stack": (
        scenario(
            '[[departure]]\nkind = "skew"\nwith = [{ kind = "fan", along = "x", severity = 2 }, '
            '{ kind = "fan", along = "x", severity = 3 }]'
        ),
        ["departure 1", "'fan along x' acts twice"],
    ),
    "step beyond all gaps": (
        scenario('[[departure]]\nkind = "serial"\nstep = 1e200', 'order = "x"'),
        ["departure 1", "1e+200", "longest gap"],
    ),
    "path with a zero byte": (scenario().replace("t.csv", "t\\u0000.csv"), ["t\\x00.csv", "null byte"]),
    "no end of brackets": ("x = " + 3000 * "[" + 3000 * "]", ["s.toml", "nested too deeply"]),
    "no TOML": (scenario("[procedures"), ["not valid TOML", "line 5"]),
    "known weights without weights": (scenario('[procedures]\nuse = ["known-weights"]'), ["procedures.use 1", "known-weights"]),
    "missing table": (scenario().replace("t.csv", "missing.csv"), ["missing.csv", "no such file"]),
    "hc3 at leverage one": (
        scenario('[procedures]\nuse = ["hc3"]', model="y ~ x + one"),
        ["procedures.use 1", "hc3", "leverage"],
    ),
}


@pytest.fixture
def earlier(tmp_path, monkeypatch):
    """A working folder in which earlier runs left something; gives a snapshot of it."""
    monkeypatch.chdir(tmp_path)
    for name in ("t", "s"):
        kept = tmp_path / "outputs" / name
        kept.mkdir(parents=True)
        (kept / "measures.csv").write_text("kept\n", encoding="utf-8")
        with sqlite3.connect(kept / "ledger.sqlite") as base:
            base.execute("CREATE TABLE mine (x)")
        base.close()

    def snapshot():
        return {str(path.relative_to(tmp_path)): path.read_bytes() for path in sorted(tmp_path.rglob("*")) if path.is_file()}

    return snapshot


def refused(call, snapshot, arguments, words):
    before = snapshot()
    code, out, err = call(*arguments)
    assert code == 2, err
    assert out == ""
    assert err.startswith("withstand: ")
    assert "Traceback" not in err
    for word in words:
        assert word in err, err
    assert snapshot() == before


@pytest.mark.parametrize("case", TABLES)
def test_table_is_refused(case, call, earlier, tmp_path):
    text, options, words = TABLES[case]
    (tmp_path / "t.csv").write_text(text, encoding="utf-8")
    refused(call, earlier, ["run", "t.csv", *options], words)


@pytest.mark.parametrize("case", SCENARIOS)
def test_scenario_is_refused(case, call, earlier, tmp_path):
    text, words = SCENARIOS[case]
    one = [[*row, "1" if i == 0 else "0"] for i, row in enumerate(ROWS)]
    (tmp_path / "t.csv").write_text(table(one, "y,x,g,one"), encoding="utf-8")
    (tmp_path / "s.toml").write_text(text, encoding="utf-8")
    refused(call, earlier, ["run", "s.toml"], words)


@pytest.mark.parametrize("name", ["missing.csv", "missing.toml", "missing.parquet"])
@pytest.mark.parametrize("command", ["run", "inspect", "start", "size"])
def test_missing_file(command, name, call, earlier):
    refused(call, earlier, [command, name, *([] if name.endswith("toml") else ["--model", "y ~ x"])], [name])


def test_options_of_a_table_beside_a_scenario(call, earlier, tmp_path):
    (tmp_path / "t.csv").write_text(GOOD, encoding="utf-8")
    (tmp_path / "s.toml").write_text(scenario(), encoding="utf-8")
    refused(call, earlier, ["run", "s.toml", "--model", "y ~ x"], ["--model", "s.toml"])
    refused(call, earlier, ["start", "s.toml"], ["s.toml"])


def test_report_of_a_folder_without_a_run(call, earlier, tmp_path):
    (tmp_path / "empty").mkdir()
    refused(call, earlier, ["report", "empty"], ["empty", "outputs/NAME"])
    refused(call, earlier, ["report", "nowhere"], ["nowhere"])


def test_signs_that_would_steer_the_terminal_are_spelt_out(call, earlier, tmp_path):
    (tmp_path / "t.csv").write_text(GOOD, encoding="utf-8")
    refused(call, earlier, ["run", "t.csv", "--model", "y ~ x", "--focus", "\x1b[31mx\u202e"], ["'\\x1b[31mx\\u202e'"])


def test_a_message_stays_short_whatever_it_quotes(call, earlier, tmp_path):
    (tmp_path / "t.csv").write_text(with_cell(4, 1, 100_000 * "z"), encoding="utf-8")
    refused(call, earlier, ["run", "t.csv", "--model", "y ~ x"], ["t.csv, row 6", "'zzz", "[…]", "C(x)"])
    assert len(call("run", "t.csv", "--model", "y ~ x")[2]) < 2500
    refused(call, earlier, ["run", "t.csv", "--model", f"y ~ {'x + ' * 300} q"], ["y ~ x + x", "'q'", "Known: g, x, y"])


@pytest.mark.parametrize("name", ["-x", "a\tb", "a\nb", "a - b", "2*x", "<b>", "x²"])
def test_any_column_name_is_its_own_focus(name, call, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "t.csv").write_text(table(header=f'y,"{name}",g'), encoding="utf-8")
    code, out, err = call("inspect", "t.csv", "--model", f"y ~ `{name}`", "--json")
    assert (code, err) == (0, "")
    assert f"{json.dumps(name, ensure_ascii=False)}" in out


def test_a_column_called_fitted_is_left_to_the_fitted_mean(call, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "t.csv").write_text(table(header="y,fitted,g"), encoding="utf-8")
    code, out, err = call("inspect", "t.csv", "--model", "y ~ fitted")
    assert (code, err) == (0, "")
    assert "nothing was tried along your column 'fitted'" in " ".join(out.split())


def test_line_ends_of_old_systems(call, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "t.csv").write_bytes(GOOD.replace("\n", "\r").encode())
    assert call("inspect", "t.csv", "--model", "y ~ x", "--quiet") == (0, "", "")


def test_a_ladder_that_ends_where_nothing_is_wrong(call, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "t.csv").write_text(GOOD, encoding="utf-8")
    for ladder in ("[1]", "[2, 1]"):
        (tmp_path / "s.toml").write_text(scenario(f'[[departure]]\nkind = "worst-fan"\nseverity = {ladder}'), encoding="utf-8")
        assert call("inspect", "s.toml", "--quiet") == (0, "", "")
