"""Text files as other programs write them."""

import csv

import numpy as np
import pandas
import pytest

from pathplan.errors import InputError
from pathplan.export.foreign.text import TextSource


def source(tmp_path, text, encoding="utf-8"):
    file = tmp_path / "t.csv"
    file.write_bytes(text.encode(encoding))
    return TextSource(file)


PLAIN = "t,a,b\n0,1.5,-2\n0.1,2.5e0,+3\n"


@pytest.mark.parametrize(
    "text",
    [
        PLAIN,
        PLAIN.replace("\n", "\r\n"),
        "\ufeff" + PLAIN,
        PLAIN.replace(",", ";"),
        PLAIN.replace(",", "\t"),
        PLAIN.replace(",", "  "),
        PLAIN.replace(",", ";").replace(".", ","),
        PLAIN.replace(",", "\t").replace(".", ","),
        PLAIN.replace(",", " , "),
        "# t,a,b\n" + PLAIN[6:],
        "% " + PLAIN,
        "# written by a logger\nsome title\n\n" + PLAIN,
        PLAIN + "\n\n",
        PLAIN.replace("0.1,", "# a remark\n\n0.1,"),
        '"t","a","b"\n"0","1.5","-2"\n0.1,2.5,3\n',
        "t,a,b,\n0,1.5,-2,\n0.1,2.5,3,\n",
        "t,a,b\n0,1.5,-2,\n0.1,2.5,3,\n",
        PLAIN[:-1],
    ],
)
def test_forms(tmp_path, text):
    found = source(tmp_path, text)
    assert list(found.names[:3]) == ["t", "a", "b"] and found.named
    np.testing.assert_array_equal(found.read([0, 2, 1]), [[0, -2, 1.5], [0.1, 3, 2.5]])


def test_names_of_any_kind(tmp_path):
    names = ["zeit, t", 'a "b"', "Größe °"]
    with open(tmp_path / "t.csv", "w", encoding="utf-8", newline="") as stream:
        csv.writer(stream).writerows([names, [1, 2, 3]])
    assert list(TextSource(tmp_path / "t.csv").names) == names


def test_a_row_of_units(tmp_path):
    found = source(tmp_path, "time;A1;A2;state\ns;deg;mm/s;\n0;1;2;3\n")
    assert list(found.units) == ["s", "deg", "mm/s", ""] and list(found.names) == ["time", "A1", "A2", "state"]
    bare = source(tmp_path, "s;deg\n0;1\n")  # the only row above the numbers holds names
    assert list(bare.names) == ["s", "deg"] and list(bare.units) == ["", ""]


def test_without_names_columns_are_numbered(tmp_path):
    found = source(tmp_path, "0 1 2\n1 2 3\n")
    assert list(found.names) == ["1", "2", "3"] and not found.named


def test_columns_of_text_and_empty_cells(tmp_path):
    found = source(tmp_path, "t,a,state\n0,,OK\n1,nan,\n2,NULL,x y\n3,4,OK\n4,inf,-\n")
    np.testing.assert_array_equal(found.read([0, 1]), [[0, np.nan], [1, np.nan], [2, np.nan], [3, 4], [4, np.inf]])


@pytest.mark.parametrize("options", [{}, {"sep": ";", "decimal": ","}, {"sep": "\t"}, {"float_format": "%.9e"}])
def test_what_pandas_writes(tmp_path, options):
    rng = np.random.default_rng(0)
    frame = pandas.DataFrame({"t": np.arange(9000) / 250, "q": rng.normal(size=9000), "state": "run"})
    frame.to_csv(tmp_path / "t.csv", index=False, **options)
    found = TextSource(tmp_path / "t.csv")
    np.testing.assert_allclose(found.read([0, 1]), frame[["t", "q"]], rtol=1e-9)


@pytest.mark.parametrize("options", [{}, {"delimiter": ","}, {"fmt": "%.6f", "delimiter": ";"}])
def test_what_numpy_writes(tmp_path, options):
    values = np.random.default_rng(1).normal(size=(5000, 3))
    header = (options.get("delimiter") or " ").join(["t", "a", "b"])
    np.savetxt(tmp_path / "t.csv", values, header=header, **options)
    found = TextSource(tmp_path / "t.csv")
    assert list(found.names) == ["t", "a", "b"]
    np.testing.assert_allclose(found.read([0, 1, 2]), values, atol=1e-6)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "has no row of numbers"),
        ("a,b\nc,d\n", "has no row of numbers"),
        ("t,a\n0,1\n1,x\n", "row 2 (line 3), column a: expected a number, got 'x'"),
        ("t,a\n0,1\n\n# \n1,1_0\n", "row 2 (line 5), column a: expected a number, got '1_0'"),
        ("t,a\n0,1\n1,2,3\n", "row 2 (line 3): expected 2 values, got 3"),
        ("t,a\n0,1\n1\n", "row 2 (line 3): expected 2 values, got 1"),
        ("t,a\n0,1\n1,0x10\n", "row 2 (line 3), column a: expected a number, got '0x10'"),
        ("t,a\n0,1\n1,\0\n", "line 3: is no text"),
        ("t,a\n0,1\n" + "1" * (1 << 20), "line 3: longer than 1048576 bytes"),
        ("title\n" * 10_001, "no row of numbers in its first 10000 lines"),
        (",".join("1" * 10_001), "more than 10000 columns"),
    ],
)
def test_what_is_no_table(tmp_path, text, message):
    with pytest.raises(InputError) as error:
        source(tmp_path, text).read([0, 1])
    assert str(error.value) == f"{tmp_path / 't.csv'}: {message}"


@pytest.mark.parametrize(
    ("encoding", "message"),
    [("utf-16", "is UTF-16 text: save it as UTF-8"), ("latin-1", "line 1: is not UTF-8 text")],
)
def test_other_encodings(tmp_path, encoding, message):
    with pytest.raises(InputError) as error:
        source(tmp_path, "t,Größe\n0,1\n", encoding)
    assert str(error.value) == f"{tmp_path / 't.csv'}: {message}"


def test_too_many_rows(tmp_path, monkeypatch):
    monkeypatch.setattr("pathplan.export.foreign.text.MAX_ROWS", 5000)
    found = source(tmp_path, "t\n" + "1\n" * 5001)
    with pytest.raises(InputError) as error:
        found.read([0])
    assert str(error.value) == f"{tmp_path / 't.csv'}: more than 5000 rows"
