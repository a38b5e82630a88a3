"""NPZ tables: the same to the last bit, read by numpy, every damage named."""

import io
import json
import zipfile
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.export import npz_file, read_table, write_table

FIELDS = ("time", "position", "velocity", "acceleration", "jerk", "torque", "step", "pose", "tool_speed")

NOT_OURS = "is not an array of the kind that pathplan writes"


def written(table, tmp_path, name="table.npz"):
    write_table(table, tmp_path / name, overwrite=True)
    return tmp_path / name


def same(ours, original):
    for name in FIELDS:
        mine, other = getattr(ours, name), getattr(original, name)
        assert (mine is None) == (other is None), name
        assert mine is None or np.array_equal(mine, other), name
    for name in ("joint_names", "joint_kinds", "cycle", "marks", "meta"):
        assert getattr(ours, name) == getattr(original, name), name


def test_reading_back_gives_the_same_table_to_the_last_bit(full_table, bare_table, tmp_path):
    same(read_table(written(full_table, tmp_path)), full_table)
    same(read_table(written(bare_table, tmp_path)), bare_table)
    unknown = replace(bare_table, joint_kinds=(), cycle=None)
    same(read_table(written(unknown, tmp_path)), unknown)
    assert not read_table(tmp_path / "table.npz").position.flags.writeable


def test_numpy_reads_it_without_pickles(full_table, tmp_path):
    with np.load(written(full_table, tmp_path), allow_pickle=False) as file:
        assert set(file.files) == {*FIELDS, "header"}
        assert np.array_equal(file["pose"], full_table.pose) and file["step"].dtype == np.int64
        header = json.loads(file["header"].item())
    assert header["joints"][1] == ["lift", "prismatic"] and header["cycle_s"] == 0.004
    assert header["marks"][0] == {"name": "gripper closed", "time_s": 0.08, "row": 20, "step": 0}
    assert header["meta"]["task"] == "Tiles, belt to kiln car" and "BREAKS LIMITS" not in header


def test_a_table_that_breaks_limits_says_so(full_table, tmp_path):
    table = replace(full_table, meta={"breaks_limits": True})
    with np.load(written(table, tmp_path)) as file:
        header = json.loads(file["header"].item())
    assert header["BREAKS LIMITS"] == "this table failed its audit and must not be run"


def test_the_same_table_gives_the_same_bytes_in_chunks_too(full_table, tmp_path, monkeypatch):
    whole = written(full_table, tmp_path).read_bytes()
    assert written(full_table, tmp_path, "again.npz").read_bytes() == whole
    monkeypatch.setattr(npz_file, "IN_MEMORY", 100)  # so that the spools go to disk
    assert written(full_table.chunks(7), tmp_path, "chunks.npz").read_bytes() == whole
    assert sorted(path.name for path in tmp_path.iterdir()) == ["again.npz", "chunks.npz", "table.npz"]


@settings(deadline=None, max_examples=50)
@given(st.lists(st.lists(st.floats(-1.7e308, 1.7e308), min_size=2, max_size=2), min_size=1))
def test_any_finite_float_comes_back(bare_table, tmp_path_factory, rows):
    q = np.array(rows)
    table = replace(bare_table, time=np.arange(float(len(q))), position=q, step=None, joint_names=(), joint_kinds=())
    file = tmp_path_factory.mktemp("t") / "t.npz"
    write_table(table, file)
    again = read_table(file).position
    assert np.array_equal(again, q) and np.array_equal(np.signbit(again), np.signbit(q))


def rewritten(file, **changes):
    """The file with members replaced (arrays), or taken out (None)."""
    with np.load(file) as old:
        arrays = {**dict(old), **changes}
    members = {name: array for name, array in arrays.items() if array is not None}
    np.savez(file, **members)
    return file


def header_with(full_table, tmp_path, **changes):
    with np.load(written(full_table, tmp_path)) as old:
        header = {**json.loads(old["header"].item()), **changes}
    return np.array(json.dumps({key: value for key, value in header.items() if value != "gone"}))


def test_plain_savez_of_the_same_arrays_is_read(full_table, tmp_path):
    same(read_table(rewritten(written(full_table, tmp_path))), full_table)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"position": None}, "array position: missing"),
        ({"header": None}, "not a joint table written by pathplan: it has no header"),
        ({"header": np.array("{")}, "header is damaged at '{'"),
        (
            {"header": np.array("[1]")},
            "not a joint table written by pathplan: its header is of another kind",
        ),
        ({"header": np.array(3.0)}, "array header: is not a text of sensible size"),
        ({"extra": np.zeros(3)}, "array extra: unknown, or there twice"),
        ({"jerk": np.zeros((50, 3), dtype=np.float32)}, f"array jerk: {NOT_OURS}"),
        ({"jerk": np.zeros((50, 3), order="F")}, f"array jerk: {NOT_OURS}"),
        ({"jerk": np.array([None])}, f"array jerk: {NOT_OURS}"),
        ({"jerk": np.zeros((50, 3), dtype=np.int64)}, "array jerk: holds <i8, expected <f8"),
        ({"jerk": np.zeros(50)}, "array jerk: has shape (50,), expected 2 sensible dimensions"),
        ({"jerk": np.zeros((0, 3))}, "array jerk: has shape (0, 3), expected 2 sensible dimensions"),
        ({"jerk": np.zeros((50, 2))}, "jerk: expected shape (50, 3), got (50, 2)"),
        (
            {"pose": np.full((50, 4, 4), np.inf)},
            "row 1, array pose [0, 0]: expected a finite number, got inf",
        ),
        ({"time": np.r_[np.zeros(9), np.nan]}, "row 10, array time: expected a finite number, got nan"),
        ({"step": -np.ones(50, dtype=np.int64)}, "step: expected 0-based step numbers, got -1"),
    ],
)
def test_every_damage_is_one_clear_line(full_table, tmp_path, changes, message):
    file = rewritten(written(full_table, tmp_path), **changes)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"format": "pathplan joint table 2"}, "format 2 of table: this pathplan reads 1"),
        ({"marks": "gone"}, "header: marks is missing or of another kind"),
        ({"meta": []}, "header: meta is missing or of another kind"),
        ({"cycle_s": 0}, "cycle_s: expected a positive time or null, got 0"),
        ({"joints": [["a", "revolute"]]}, "joint_names: expected 3 different names, got ['a']"),
        (
            {"marks": [{"name": "a", "time_s": 10**400, "row": 1, "step": 0}]},
            f"mark: expected a time in s, got 1{'0' * 56}...",
        ),
    ],
)
def test_damaged_headers_are_one_clear_line(full_table, tmp_path, changes, message):
    header = header_with(full_table, tmp_path, **changes)
    file = rewritten(written(full_table, tmp_path), header=header)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


def test_cut_short_compressed_and_absurd_files(full_table, tmp_path):
    file = written(full_table, tmp_path)
    whole = file.read_bytes()
    for size in (0, 10, len(whole) // 2, len(whole) - 1):
        file.write_bytes(whole[:size])
        with pytest.raises(InputError) as error:
            read_table(file)
        assert str(error.value) == f"{file}: is cut short or damaged: not a whole NPZ file"
    np.savez_compressed(file, header=np.array("{}"))
    with pytest.raises(InputError) as error:
        read_table(file)
    complaint = "array header: is compressed: expected a plain array, as pathplan writes it"
    assert str(error.value) == f"{file}: {complaint}"


@pytest.mark.parametrize(
    ("shape", "message"),
    [
        ("(999999999999, 3)", "more than 20000000 rows"),
        ("(50, 999999999)", "has shape (50, 999999999), expected 2 sensible dimensions"),
        ("(19999999, 3)", "expected 479999976 bytes of numbers, which is not what there is"),
        ("(50, 3)", "expected 1200 bytes of numbers, which is not what there is"),
    ],
)
def test_sizes_that_are_stated_but_not_there_cost_nothing(full_table, tmp_path, shape, message):
    file = written(full_table, tmp_path)
    header = f"{{'descr': '<f8', 'fortran_order': False, 'shape': {shape}, }}\n".encode()
    member = b"\x93NUMPY\x01\x00" + len(header).to_bytes(2, "little") + header + bytes(1192)
    with np.load(file) as old, zipfile.ZipFile(tmp_path / "new.npz", "w") as new:
        for name in old.files:
            array = io.BytesIO()
            np.lib.format.write_array(array, old[name], allow_pickle=False)
            new.writestr(f"{name}.npy", member if name == "position" else array.getvalue())
    with pytest.raises(InputError) as error:
        read_table(tmp_path / "new.npz")
    assert str(error.value) == f"{tmp_path / 'new.npz'}: array position: {message}"


@settings(deadline=None, max_examples=100)
@given(data=st.data())
def test_bytes_changed_at_random_never_give_a_traceback(full_table, tmp_path_factory, data):
    file = tmp_path_factory.mktemp("t") / "t.npz"
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
    else:  # what changed is dates and the like: the arrays carry checksums
        assert np.array_equal(table.position, full_table.position[:3])
