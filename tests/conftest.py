"""A small scenario, and calls of the command line, in this process and in one of its own."""

import os
import subprocess
import sys

import pytest

from withstand.cli.entry import status

TABLE = """y,x,g,t
1.2,1,a,1
2.9,2,a,2
2.1,3,a,3
4.6,4,b,4
4.8,5,b,5
6.3,6,b,6
6.2,7,c,7
8.9,8,c,8
8.1,9,c,9
11.0,10,d,10
10.2,11,d,11
12.9,12,d,12
"""

SCENARIO = """title = "A small one"

[study]
data = "small.csv"
model = "y ~ x"
focus = ["x"]
effect = { x = 0.5 }

[[departure]]
kind = "fan"
along = "x"
severity = [2, 4]

[[departure]]
kind = "skew"
severity = [2]

[procedures]
use = ["ols", "hc3"]

[simulation]
seed = 3
repetitions = 2000
most = 4000
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A working folder with a small table and a scenario."""
    (tmp_path / "small.csv").write_text(TABLE, encoding="utf-8")
    (tmp_path / "small.toml").write_text(SCENARIO, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def call(capfd):
    """Calls a command in this process; gives exit status, standard output and standard error."""

    def run(*arguments):
        capfd.readouterr()
        code = status([str(argument) for argument in arguments])
        said = capfd.readouterr()
        return code, said.out, said.err

    return run


@pytest.fixture
def spawn(tmp_path):
    """Starts a command in a process of its own, with a process group of its own."""

    def start(*arguments, **options):
        environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path), "OPENBLAS_NUM_THREADS": "1"}
        return subprocess.Popen(
            [sys.executable, "-m", "withstand", *map(str, arguments)], stdout=subprocess.PIPE, stderr=subprocess.PIPE,
            text=True, env=environment, cwd=tmp_path, start_new_session=True, **options,
        )  # fmt: skip

    return start
