"""What is written as TOML is read back the same."""

import math
import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from withstand.scenario.toml_text import toml_document, toml_key, toml_value

texts = st.text(st.characters(exclude_categories=["Cs"]))
values = st.recursive(
    st.one_of(texts, st.booleans(), st.integers(-(2**63), 2**63 - 1), st.floats(allow_nan=False)),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(texts, inner, max_size=3)),
    max_leaves=8,
)


@given(values)
def test_values_round_trip(value):
    assert tomllib.loads(f"v = {toml_value(value)}")["v"] == value


@given(texts)
def test_keys_round_trip(name):
    assert tomllib.loads(f"{toml_key(name)} = 1") == {name: 1}


@given(st.dictionaries(texts, values, max_size=4))
def test_documents_round_trip(document):
    assert tomllib.loads(toml_document(document)) == document


def test_document_of_a_scenario_and_what_toml_lacks():
    record = {
        "title": "t",
        "study": {"model": "y ~ x", "focus": [{"at": {"x": 1.0}}]},
        "departure": [{"kind": "skew"}, {"kind": "fan"}],
    }
    text = toml_document(record)
    assert tomllib.loads(text) == record
    assert text.count("[[departure]]") == 2
    assert math.isnan(tomllib.loads(f"v = {toml_value(math.nan)}")["v"])
    with pytest.raises(TypeError, match="NoneType"):
        toml_value(None)
