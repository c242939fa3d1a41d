import gzip

import numpy as np
import pandas as pd
import pytest

from withstand.errors import TableError
from withstand.study.table import NOTICES, read_table


def written(folder, text, name="data.csv"):
    path = folder / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def test_numbers_are_numbers_and_labels_stay_labels(tmp_path):
    frame = read_table(written(tmp_path, "y,group,note\n1,NA,\n2.5,None,x\n-3e2,nan,\n"))
    assert frame["y"].tolist() == [1.0, 2.5, -300.0]
    assert frame["group"].tolist() == ["NA", "None", "nan"]  # labels, not missing values
    assert frame["note"].isna().tolist() == [True, False, True]
    assert frame.index.tolist() == [2, 3, 4]  # as a spreadsheet counts


@pytest.mark.parametrize(
    ("text", "name"), [("a;b\n1,5;2\n", "d.csv"), ("a\tb\n1,5\t2\n", "d.tsv"), ("a\tb\n1,5\t2\n", "d.txt")]
)
def test_decimal_commas_on_request(tmp_path, text, name):
    frame = read_table(written(tmp_path, text, name), decimal=",")
    assert frame.to_numpy().tolist() == [[1.5, 2.0]]


def test_mark_of_the_encoding_is_passed_over(tmp_path):
    assert list(read_table(written(tmp_path, b"\xef\xbb\xbfa,b\n1,2\n")).columns) == ["a", "b"]


def test_quoted_cells_and_a_nameless_column(tmp_path):
    frame = read_table(written(tmp_path, ',"a, b"\n1,"x, y"\n2,"z ""q"""\n'))
    assert list(frame.columns) == ["column 1", "a, b"]
    assert frame["a, b"].tolist() == ["x, y", 'z "q"']


def test_blank_lines(tmp_path):
    frame = read_table(written(tmp_path, "a,b\n1,2\n\n3,4\n\n\n"))
    assert frame["a"].tolist()[::2] == [1.0, 3.0]  # the blank line stays as a blank row, those at the end do not
    assert len(frame) == 3


@pytest.mark.parametrize("ending", ["csv", "tsv", "parquet", "xlsx"])
@pytest.mark.parametrize("packed", [False, True])
def test_every_kind_reads_the_same(tmp_path, ending, packed):
    table = pd.DataFrame({"y": [1.5, 2.0, 4.0], "g": ["a", "NA", "b"], "k": [1, 2, 3]})
    path = tmp_path / f"table.{ending}"
    if ending == "parquet":
        table.to_parquet(path)
    elif ending == "xlsx":
        table.to_excel(path, index=False)
    else:
        table.to_csv(path, index=False, sep="\t" if ending == "tsv" else ",")
    if packed:
        path = written(tmp_path, gzip.compress(path.read_bytes()), path.name + ".gz")
    frame = read_table(path)
    assert frame["y"].tolist() == [1.5, 2.0, 4.0]
    assert frame["g"].tolist() == ["a", "NA", "b"]
    assert frame["k"].tolist() == [1, 2, 3]
    assert frame.index.tolist() == [2, 3, 4]


def test_further_sheets_are_said(tmp_path):
    path = tmp_path / "two.xlsx"
    with pd.ExcelWriter(path) as book:
        pd.DataFrame({"a": [1.0]}).to_excel(book, sheet_name="first", index=False)
        pd.DataFrame({"b": [1.0]}).to_excel(book, sheet_name="second", index=False)
    frame = read_table(path)
    assert list(frame.columns) == ["a"]
    assert "2 sheets" in frame.attrs[NOTICES][0]
    assert "'first'" in frame.attrs[NOTICES][0]


REFUSED = {
    "empty file": ("", "data.csv", "the file is empty"),
    "spaces only": ("\n\n", "data.csv", "holds no cells"),
    "header only": ("a,b\n", "data.csv", "no rows"),
    "name twice": ("a,b,a\n1,2,3\n", "data.csv", "'a' comes 2 times"),
    "long row": ("a,b\n1,2\n1,2,3\n", "data.csv", "row 3: the row has 3 cells"),
    "short row": ("a,b\n1\n", "data.csv", "row 2: the row has 1 cells"),
    "open quote": ('a,b\n"1,2\n', "data.csv", "quoted cell"),
    "other encoding": (b"a,b\n1,\xe9\n", "data.csv", "row 2: byte 7 is not UTF-8"),
    "binary": (b"\x00\x01\x02", "data.csv", "not a text file"),
    "damaged archive": (b"\x1f\x8b\x08\x00", "data.csv.gz", "damaged"),
    "not an archive": (b"a,b\n", "data.csv.gz", "damaged or not compressed"),
    "unknown kind": ("a,b\n1,2\n", "data.ods", "'data.ods' is not a kind"),
    "damaged parquet": (b"PAR1nonsense", "data.parquet", "cannot be read"),
    "damaged workbook": (b"PK\x03\x04nonsense", "data.xlsx", "cannot be read"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_refused(tmp_path, case):
    content, name, told = REFUSED[case]
    with pytest.raises(TableError) as caught:
        read_table(written(tmp_path, content, name))
    assert told in str(caught.value)
    assert name in str(caught.value)
    assert caught.value.remedy


def test_missing_file(tmp_path):
    with pytest.raises(TableError, match=r"gone\.csv.*no such file"):
        read_table(tmp_path / "gone.csv")


def test_a_folder_is_no_table(tmp_path):
    with pytest.raises(TableError, match="directory"):
        read_table(tmp_path)


def test_wide_range_of_numerals(tmp_path):
    values = np.array([0.1, 1e-300, 123456789.123456789, -0.0, 5e15])
    text = "a,b\n" + "".join(f"{value!r},1\n" for value in values.tolist())
    assert (read_table(written(tmp_path, text))["a"].to_numpy() == values).all()
