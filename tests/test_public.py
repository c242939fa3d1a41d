"""The public face: what `import withstand` offers, pinned, and loaded only when asked for."""

import inspect
import subprocess
import sys

import pytest

import withstand

NAMES = [
    "Bowtie", "Clusters", "Contaminated", "Curvature", "Custom", "Fan", "HeavyTails", "LevelSpread", "Outliers", "PowerSpread",
    "Pretest", "Result", "Serial", "Skew", "Study", "Tolerance", "WithstandError", "WorstFan", "inspect", "run", "size",
]  # fmt: skip


def test_names_are_pinned_sorted_and_listed():
    assert withstand.__all__ == NAMES == sorted(NAMES)
    assert dir(withstand) == NAMES


@pytest.mark.parametrize("name", NAMES)
def test_every_name_is_there_under_its_own_name_and_described(name):
    found = getattr(withstand, name)
    assert found.__name__ == name
    assert inspect.getdoc(found)


def test_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="no attribute 'Skwe'"):
        _ = withstand.Skwe


def test_every_departure_is_offered():
    from withstand.departures import REGISTRY

    assert {cls.__name__ for cls in REGISTRY.values()} <= set(NAMES)


def test_import_loads_no_numerical_library():
    code = "import sys, withstand; print(sorted({'numpy', 'pandas', 'scipy', 'matplotlib'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
