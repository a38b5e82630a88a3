"""What may be overwritten, and what chunks must agree on."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.errors import InputError
from pathplan.export import check_destination, kinds, may_replace, read_table, write_table

SUFFIXES = (".csv", ".jsonl", ".npz", ".parquet")
REFUSAL = "exists and is no earlier output of this task: choose another name or ask to overwrite"


def with_meta(table, **changes):
    return replace(table, meta={**table.meta, **changes})


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_our_own_earlier_output_of_the_task_is_replaced(full_table, tmp_path, suffix):
    file = tmp_path / f"t{suffix}"
    write_table(full_table, file)
    newer = with_meta(full_table.part(0, 9), task_file="elsewhere/tiles.toml", sources={})
    assert may_replace(file, newer) and may_replace(file, newer.meta)
    write_table(newer, file)
    assert len(read_table(file)) == 9


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize(
    "changes",
    [{"task": "Other"}, {"task_file": "other.toml"}, {"task": ""}, {"task_file": None}, {"task": None}],
)
def test_the_output_of_another_task_is_kept(full_table, tmp_path, suffix, changes):
    file = tmp_path / f"t{suffix}"
    write_table(with_meta(full_table, **changes), file)
    before = file.read_bytes()
    other = with_meta(full_table, **changes) if None in changes.values() else full_table
    assert not may_replace(file, other)
    with pytest.raises(InputError) as error:
        write_table(other, file)
    assert str(error.value) == f"{file}: {REFUSAL}"
    assert file.read_bytes() == before
    write_table(other, file, overwrite=True)
    assert read_table(file).meta == dict(other.meta)


@pytest.mark.parametrize("content", [b"", b"a,b\n1,2\n", b"PK\x03\x04", bytes(range(256)) * 50])
@pytest.mark.parametrize("suffix", SUFFIXES)
def test_other_peoples_files_are_kept(full_table, tmp_path, suffix, content):
    file = tmp_path / f"t{suffix}"
    file.write_bytes(content)
    with pytest.raises(InputError) as error:
        check_destination(file, full_table.meta)
    assert str(error.value) == f"{file}: {REFUSAL}"
    check_destination(file, full_table.meta, overwrite=True)
    with pytest.raises(InputError, match="exists and is no earlier output"):
        write_table(full_table, file)
    assert file.read_bytes() == content


def test_a_free_name_may_be_taken(full_table, tmp_path):
    check_destination(tmp_path / "new.csv", full_table)
    with pytest.raises(InputError, match="unknown kind of table"):
        check_destination(tmp_path / "new.txt", full_table)
    with pytest.raises(InputError, match="there is no folder"):
        check_destination(tmp_path / "gone" / "new.csv", full_table)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"joint_names": ("a", "b", "c")}, "joint_names differs from the first chunk's"),
        ({"cycle": 0.001}, "cycle differs from the first chunk's"),
        ({"marks": ()}, "marks differs from the first chunk's"),
        ({"meta": {}}, "meta differs from the first chunk's"),
        ({"torque": None}, "has other columns than the first chunk"),
    ],
)
@pytest.mark.parametrize("suffix", SUFFIXES)
def test_chunks_must_be_of_one_table(full_table, tmp_path, suffix, change, message):
    chunks = [full_table.part(0, 30), replace(full_table.part(30, 50), **change)]
    file = tmp_path / f"t{suffix}"
    with pytest.raises(InputError) as error:
        write_table(chunks, file)
    assert str(error.value) == f"{file}: chunk at row 31: {message}"
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize(
    ("field", "index", "place"),
    [
        ("position", (41, 1), "row 42: position of lift"),
        ("tool_speed", 3, "row 4: tool_speed"),
        ("pose", (7, 0, 3), "row 8: pose"),
    ],
)
def test_what_is_not_finite_is_never_written(full_table, tmp_path, suffix, field, index, place):
    values = getattr(full_table, field).copy()
    values[index] = np.nan
    file = tmp_path / f"t{suffix}"
    with pytest.raises(InputError) as error:
        write_table(replace(full_table, **{field: values}).chunks(20), file)
    assert str(error.value) == f"{file}: {place} is not a finite number: nothing written"
    assert list(tmp_path.iterdir()) == []


def test_no_rows_and_too_many(full_table, tmp_path, monkeypatch):
    file = tmp_path / "t.csv"
    with pytest.raises(InputError) as error:
        write_table([], file)
    assert str(error.value) == f"{file}: there are no rows to write"
    monkeypatch.setattr("pathplan.export.write.MAX_ROWS", 49)
    with pytest.raises(InputError) as error:
        write_table(full_table, file)
    assert str(error.value) == f"{file}: more than 49 rows: write the table in several files"
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"meta": {"cycle_s": 1}}, "meta: can't be a key of a file header: 'cycle_s'"),
        ({"meta": {"a\nb": 1}}, "meta: can't be a key of a file header: 'a\\nb'"),
        ({"meta": {"a": object}}, "meta: expected JSON values only (Object of type type is not"),
        ({"meta": {"a": float("nan")}}, "meta: expected JSON values only (Out of range float values"),
        ({"joint_names": ("a\nb", "c", "d")}, "joint_names: can't be a column name: 'a\\nb'"),
    ],
)
def test_what_a_header_can_not_hold(full_table, tmp_path, changes, message):
    with pytest.raises(InputError) as error:
        write_table(replace(full_table, **changes), tmp_path / "t.npz")
    # what the json module says of its own goes on, differently from release to release of Python
    assert str(error.value).startswith(f"table: {message}")
    assert list(tmp_path.iterdir()) == []


def test_every_kind_reads_what_it_writes(full_table, tmp_path):
    for suffix, kind in kinds.kinds().items():
        assert kind.suffix == suffix
        write_table(full_table, tmp_path / f"t{suffix}")
        assert kind.read_header(tmp_path / f"t{suffix}").meta == full_table.meta
