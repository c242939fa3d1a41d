import math
import os

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from withstand.errors import InputError
from withstand.lab.outcome import MEASURE_COLUMNS, RANKING_COLUMNS, TIPPING_COLUMNS, VERDICT_COLUMNS, Outcome
from withstand.report import files
from withstand.report.plain import from_json, plain, to_json
from withstand.report.store import TABLES, restore, store, stored

TEXT = st.text(st.characters(exclude_categories=("Cs",)), max_size=12)
FLOATS = st.floats(allow_nan=True, allow_infinity=True)
WORDS = {"departure", "along", "severity_label", "stack", "procedure", "focus", "measure", "method", "verdict"} | {
    "deciding_measure", "worst_label", "verdict_there", "cure", "holding_procedure",
}  # fmt: skip
COUNTS = {"n", "repetitions", "failures"}


def same_table(left, right):
    assert list(left.columns) == list(right.columns)
    assert len(left) == len(right)
    for name in left.columns:
        if isinstance(left[name].dtype, np.dtype) and left[name].dtype.kind in "if":
            assert left[name].dtype == right[name].dtype
            assert left[name].to_numpy().tobytes() == right[name].to_numpy().tobytes()
        else:
            assert left[name].tolist() == right[name].tolist()


@st.composite
def tables(draw, columns):
    rows = draw(st.integers(0, 4))

    def column(name):
        if name in WORDS:
            return pd.Series(draw(st.lists(TEXT, min_size=rows, max_size=rows)), dtype=object)
        if name in COUNTS:
            whole = draw(st.lists(st.integers(0, 2**60), min_size=rows, max_size=rows))
            return pd.Series(whole, dtype="int64")
        values = draw(st.lists(FLOATS, min_size=rows, max_size=rows))
        # one bit pattern of nan: a cell without a number cannot tell them apart
        return pd.Series([math.nan if math.isnan(value) else value for value in values], dtype="float64")

    return pd.DataFrame({name: column(name) for name in columns})


@st.composite
def outcomes(draw):
    facts = draw(st.dictionaries(TEXT, st.recursive(FLOATS | TEXT | st.booleans() | st.none() | st.integers(), st.lists)))
    return Outcome(
        draw(TEXT), draw(tables(MEASURE_COLUMNS)), draw(tables(VERDICT_COLUMNS)), draw(tables(TIPPING_COLUMNS)),
        draw(tables(RANKING_COLUMNS)), tuple(draw(st.lists(TEXT, max_size=2))), facts,
        refusals=tuple(draw(st.lists(st.tuples(TEXT, TEXT, TEXT), max_size=2))),
    )  # fmt: skip


@settings(max_examples=40, deadline=None)
@given(outcome=outcomes())
def test_what_is_stored_comes_back(tmp_path_factory, outcome):
    folder = tmp_path_factory.mktemp("run")
    store(outcome, folder)
    back = restore(folder)
    for name in TABLES:
        same_table(getattr(outcome, name), getattr(back, name))
    assert (back.title, back.headline, back.refusals) == (outcome.title, outcome.headline, outcome.refusals)
    assert repr(back.facts) == repr(plain(outcome.facts))
    assert stored(back) == stored(outcome)


def test_tables_read_the_same_with_another_program(rich, tmp_path):
    store(rich, tmp_path)
    read = pd.read_csv(tmp_path / "measures.csv", keep_default_na=False, na_values={"shift": [""]}, engine="python")
    assert list(read.columns) == list(MEASURE_COLUMNS)
    for name in ("value", "low", "high", "shift"):
        assert np.array_equal(read[name].to_numpy(), rich.measures[name].to_numpy(), equal_nan=True)
    assert read["stack"].tolist() == rich.measures["stack"].tolist()
    assert rich.measures["shift"].isna().any()


def test_numbers_json_lacks_and_numpy_values_survive():
    value = {"a": [math.nan, math.inf, -math.inf, 0.1], "b": np.float64(2.5), "c": (np.int64(3), np.array([1.0])), "d": None}
    back = from_json(to_json(value))
    assert math.isnan(back["a"][0])
    assert back["a"][1:] == [math.inf, -math.inf, 0.1]
    assert (back["b"], back["c"], back["d"]) == (2.5, [3, [1.0]], None)
    with pytest.raises(TypeError, match="object"):
        to_json({"x": object()})


def test_a_full_disk_is_one_message_and_leaves_the_old_files(rich, bare, tmp_path, monkeypatch):
    store(bare, tmp_path)
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    written = []

    def full(handle):
        written.append(handle)
        if len(written) == 3:
            raise OSError(28, os.strerror(28))

    monkeypatch.setattr(files.os, "fsync", full)
    with pytest.raises(InputError, match="No space left on device") as caught:
        store(rich, tmp_path)
    assert caught.value.where == str(tmp_path)
    assert "another folder" in caught.value.remedy
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_a_folder_that_cannot_be_made_is_one_message(rich, tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("in the way")
    with pytest.raises(InputError, match=r"Not a directory|File exists") as caught:
        store(rich, blocked / "run")
    assert str(blocked) in caught.value.where


@pytest.mark.parametrize(
    ("name", "content", "told"),
    [
        ("run.json", None, "cannot be read"),
        ("run.json", b'{"format": 99}', "format 1"),
        ("measures.csv", b"a,b\n1,2\n", "columns of 'measures.csv'"),
        ("verdicts.csv", b"", "columns of 'verdicts.csv'"),
    ],
)
def test_a_folder_with_changed_files_is_refused(rich, tmp_path, name, content, told):
    store(rich, tmp_path)
    if content is None:
        (tmp_path / name).unlink()
    else:
        (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=told):
        restore(tmp_path)


def test_a_cell_that_is_no_number_is_named(rich, tmp_path):
    store(rich, tmp_path)
    path = tmp_path / "ranking.csv"
    first = repr(float(rich.ranking["coverage_there"].iloc[0]))
    path.write_text(path.read_text().replace(first, "many", 1))
    with pytest.raises(InputError, match=r"'ranking\.csv' holds something that is no number: .*many"):
        restore(tmp_path)
