"""Help and lists: quick, complete, and light."""

import json
import os
import subprocess
import sys

import pytest

from withstand.cli.commands import withstand as commands
from withstand.departures import REGISTRY as DEPARTURES
from withstand.judgement.tolerance import CRITERIA
from withstand.measures.compute import MEASURES
from withstand.measures.names import ADJUSTED_POWER, GIVEN_PASS
from withstand.procedures import REGISTRY as PROCEDURES

HEAVY = {"numpy", "scipy", "pandas", "matplotlib", "statsmodels", "pydantic", "formulaic", "jinja2"}


@pytest.mark.parametrize("arguments", [["--help"], ["run", "--help"], ["size", "-h"], ["--version"]])
def test_help_imports_nothing_heavy(arguments):
    code = (
        "import sys; from withstand.cli.entry import status; code = status(sys.argv[1:]); "
        f"print(code, sorted({HEAVY!r} & set(sys.modules)), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code, *arguments], capture_output=True, text=True, check=True)
    assert done.stderr.strip() == "0 []"
    assert done.stdout.startswith(("Usage: withstand", "withstand 0."))


def test_inspect_loads_no_figures_and_no_distributions(folder):
    """Each of them takes longer to load than the exact answers of a small study take."""
    code = (
        "import sys; from withstand.cli.entry import status; code = status(['inspect', 'small.toml']); "
        "print(code, sorted({'matplotlib', 'scipy.stats', 'dask', 'jinja2'} & set(sys.modules)), file=sys.stderr)"
    )
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, env=environment)
    assert done.stderr.strip() == "0 []"
    assert "Tolerance" in done.stdout


def test_there_is_every_command():
    assert sorted(commands.commands) == ["demo", "inspect", "list", "report", "run", "schema", "size", "start"]


@pytest.mark.parametrize("name", sorted(commands.commands))
def test_every_command_and_option_is_explained(name):
    command = commands.commands[name]
    assert command.help
    for option in command.params:
        assert option.param_type_name == "argument" or option.help, option.name


@pytest.mark.parametrize(
    ("what", "names", "key"),
    [
        ("departures", DEPARTURES, "kind"), ("procedures", PROCEDURES, "name"),
        ("measures", [*MEASURES, ADJUSTED_POWER, *GIVEN_PASS.values()], "name"), ("tolerances", CRITERIA, "name"),
    ],
)  # fmt: skip
def test_lists_show_the_whole_registry(call, what, names, key):
    code, out, err = call("list", what)
    assert (code, err) == (0, "")
    first = [line.split()[0] for line in out.splitlines() if not line.startswith(" ")]
    assert first == list(names)
    assert max(map(len, out.splitlines())) <= 100
    told = json.loads(call("list", what, "--json")[1])
    assert [record[key] for record in told] == list(names)


def test_a_wrong_command_or_option_is_refused_in_one_line(call):
    for arguments in (["rnu"], ["run", "--wokers", "2", "x.csv"], ["list", "departure"], ["run"]):
        code, out, err = call(*arguments)
        assert (code, out) == (2, "")
        assert err.startswith("withstand: ")
        assert err.count("\n") == 1


def test_no_command_shows_the_help(call):
    code, _, err = call()
    assert code == 2
    assert "Commands:" in err


def test_schema_is_valid_and_knows_every_key(call):
    import tomllib
    from pathlib import Path

    schema = json.loads(call("schema")[1])
    assert schema["$schema"].endswith("2020-12/schema")
    assert set(schema["properties"]) == {"title", "study", "departure", "procedures", "tolerance", "simulation"}
    kinds = {
        d["properties"]["kind"]["const"] for d in schema["$defs"].values() if "const" in d.get("properties", {}).get("kind", {})
    }
    assert kinds == set(DEPARTURES)
    for scenario in Path(__file__).parents[2].glob("scenarios/*.toml"):
        assert set(tomllib.loads(scenario.read_text(encoding="utf-8"))) <= set(schema["properties"])
