"""Parquet: types, metadata and checksums as pyarrow sees them, and every damage named."""

import json
import sys

import numpy as np
import pyarrow
import pyarrow.parquet
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.export import read_table, write_table

DAMAGED = "is cut short or damaged: not a whole Parquet file"


def written(table, tmp_path, name="table.parquet"):
    write_table(table, tmp_path / name, overwrite=True)
    return tmp_path / name


def test_types_and_header(full_table, tmp_path):
    schema = pyarrow.parquet.read_schema(written(full_table, tmp_path))
    kinds = {str(kind) for kind in schema.types[:-1]}
    assert kinds == {"double"} and str(schema.field("step").type) == "int64"
    header = json.loads(schema.metadata[b"pathplan"])
    assert header["format"] == "pathplan joint table 1" and header["joints"][1] == ["lift", "prismatic"]
    assert header["units"].startswith("s, mm, deg, N m") and header["meta"]["task"] == full_table.meta["task"]
    assert header["marks"][0]["row"] == 21


@pytest.fixture
def without_pyarrow(monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)


def test_without_pyarrow_one_line_says_what_to_do(full_table, tmp_path, without_pyarrow):
    file = tmp_path / "t.parquet"
    expected = f'{file}: Parquet needs pyarrow, which is not installed: pip install "pathplan[parquet]"'
    with pytest.raises(InputError) as error:
        write_table(full_table, file)
    assert str(error.value) == expected
    assert list(tmp_path.iterdir()) == []
    file.write_bytes(b"PAR1")
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == expected
    write_table(full_table, tmp_path / "t.csv")  # nothing else needs it


def rewritten(file, edit):
    """The file written anew by pyarrow after `edit(table)`."""
    table = edit(pyarrow.parquet.read_table(file))
    pyarrow.parquet.write_table(table, file)
    return file


def column(name, values):
    def edit(table):
        at = table.column_names.index(name)
        changed = table.set_column(at, name, pyarrow.array(values(table[name].to_numpy())))
        return changed.replace_schema_metadata(table.schema.metadata)

    return edit


def cell(row, value):
    def change(numbers):
        numbers = numbers.copy()
        numbers[row] = value
        return numbers

    return change


def header(**changes):
    def edit(table):
        content = {**json.loads(table.schema.metadata[b"pathplan"]), **changes}
        return table.replace_schema_metadata({b"pathplan": json.dumps(content).encode()})

    return edit


DAMAGES = [
    (column("lift_mm", cell(3, np.nan)), "row 4, column lift_mm: expected a finite number, got nan"),
    (column("step", cell(9, 0)), "row 10, column step: expected the number of a step, 1 or above, got 0"),
    (column("lift_mm", lambda numbers: numbers.astype("f4")), "column lift_mm: holds float, expected double"),
    (column("lift_mm", lambda numbers: [str(x) for x in numbers]), "column lift_mm: holds string, expected double"),
    (lambda table: table.drop_columns(["lift_mm"]), "column lift_mm: missing"),
    (lambda table: table.append_column("more", table["step"]), "column 'more': unknown for these joints"),
    (lambda table: table.slice(0, 0), "has no rows"),
    (
        lambda table: table.replace_schema_metadata({}),
        "not a joint table written by pathplan: it has no header",
    ),
    (header(format="pathplan joint table 3"), "format 3 of table: this pathplan reads 1"),
    (header(joints=[["a", "screw"]]), "joints: expected different names of known kinds, got [['a', 'screw']]"),
    (
        lambda table: table.replace_schema_metadata({b"pathplan": b"{"}),
        "header is damaged at '{'",
    ),
]


@pytest.mark.parametrize(("edit", "message"), DAMAGES, ids=[message[:40] for _, message in DAMAGES])
def test_every_damage_is_one_clear_line(bare_table, tmp_path, edit, message):
    file = rewritten(written(bare_table, tmp_path), edit)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


def test_a_table_written_anew_by_pyarrow_is_read(full_table, tmp_path):
    file = rewritten(written(full_table, tmp_path), lambda table: table)
    assert np.array_equal(read_table(file).torque, full_table.torque)


def test_cut_short_and_changed_numbers_are_noticed(full_table, tmp_path):
    """Pages carry checksums: a changed number is noticed even where the file stays readable."""
    file = written(full_table, tmp_path)
    whole = file.read_bytes()
    for content in (b"", b"PAR1", whole[: len(whole) // 2], whole[:-1], whole[4:]):
        file.write_bytes(content)
        with pytest.raises(InputError) as error:
            read_table(file)
        assert str(error.value) == f"{file}: {DAMAGED}"
    chunk = pyarrow.parquet.ParquetFile(written(full_table, tmp_path)).metadata.row_group(0).column(3)
    at = chunk.data_page_offset + chunk.total_compressed_size - 5
    file.write_bytes(whole[:at] + bytes([whole[at] ^ 1]) + whole[at + 1 :])
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {DAMAGED}"


def test_too_many_rows_are_refused_before_they_are_read(bare_table, tmp_path, monkeypatch):
    file = written(bare_table, tmp_path)
    monkeypatch.setattr("pathplan.export.parquet_file.MAX_ROWS", 49)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: more than 49 rows"


def test_a_billion_rows_in_a_few_bytes(tmp_path):
    """Runs of equal numbers take no room in Parquet: what counts is what they would become."""
    file = tmp_path / "t.parquet"
    zeros = pyarrow.array(np.zeros(1 << 20))
    writer = pyarrow.parquet.ParquetWriter(file, pyarrow.schema([("time_s", pyarrow.float64())]))
    for _ in range(20):
        writer.write_table(pyarrow.Table.from_arrays([zeros], names=["time_s"]))
    writer.close()
    assert file.stat().st_size < 200_000
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: more than 20000000 rows"


@settings(deadline=None, max_examples=100)
@given(data=st.data())
def test_bytes_changed_at_random_never_give_a_traceback(full_table, tmp_path_factory, data):
    file = tmp_path_factory.mktemp("t") / "t.parquet"
    write_table(full_table.part(0, 3), file)
    content = bytearray(file.read_bytes())
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(content) - 1))
        content[at : at + data.draw(st.integers(0, 3))] = data.draw(st.binary(max_size=4))
    file.write_bytes(content)
    try:
        table = read_table(file)
    except InputError as error:
        assert "\n" not in str(error) and str(error).startswith(f"{file}: ")
    else:
        assert len(table) == 3 and np.isfinite(table.position).all()
