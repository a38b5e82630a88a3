"""Every kind of file read by pandas and pyarrow: the numbers come back, named with their units."""

import csv
import io
import math

import numpy as np
import pandas
import pyarrow.csv
import pyarrow.json
import pyarrow.parquet
import pytest
from scipy.spatial.transform import Rotation

from pathplan.export import read_table, write_table

TEXT = (".csv", ".jsonl", ".parquet")
UNITS = [("deg", "mm"), ("rad", "mm"), ("deg", "m"), ("rad", "m")]
TAILS = {"position": "", "velocity": "_s", "acceleration": "_s2", "jerk": "_s3"}


def pandas_frame(file):
    if file.suffix == ".csv":
        return pandas.read_csv(file, comment="#", engine="python")  # which reads floats exactly in every release
    return (
        pandas.read_parquet(file)
        if file.suffix == ".parquet"
        else pandas.read_json(file, lines=True, precise_float=True)
    )


def arrow_table(file):
    if file.suffix == ".csv":
        remarks = sum(line.startswith("#") for line in file.read_text(encoding="utf-8").split("\n"))
        return pyarrow.csv.read_csv(file, read_options=pyarrow.csv.ReadOptions(skip_rows=remarks))
    return pyarrow.parquet.read_table(file) if file.suffix == ".parquet" else pyarrow.json.read_json(file)


def expected_columns(table, angle, length):
    """Name -> numbers of every column that the units allow to be told without our own code."""
    sizes = {"deg": 180 / math.pi, "rad": 1.0, "mm": 1000.0, "m": 1.0}
    columns = {"time_s": table.time, "step": table.step + 1}
    for k, (name, kind) in enumerate(zip(table.joint_names, table.joint_kinds, strict=True)):
        unit = angle if kind == "revolute" else length
        for field, tail in TAILS.items():
            columns[f"{name}_{unit}{tail}"] = getattr(table, field)[:, k] * sizes[unit]
        columns[f"{name}_{'Nm' if kind == 'revolute' else 'N'}"] = table.torque[:, k]
    for k, axis in enumerate("xyz"):
        columns[f"tcp_{axis}_{length}"] = table.pose[:, k, 3] * sizes[length]
    columns[f"tool_speed_{length}_s"] = table.tool_speed * sizes[length]
    return columns


@pytest.mark.parametrize(("angle", "length"), UNITS)
@pytest.mark.parametrize("suffix", TEXT)
@pytest.mark.parametrize("read", [pandas_frame, arrow_table])
def test_the_numbers_come_back(full_table, tmp_path, suffix, angle, length, read):
    file = tmp_path / f"t{suffix}"
    write_table(full_table, file, units=f"{angle}, {length}")
    found = read(file)
    columns = expected_columns(full_table, angle, length)
    for name, numbers in columns.items():
        np.testing.assert_array_equal(np.asarray(found[name], dtype=float), numbers + 0.0, err_msg=name)
    quaternions = np.column_stack([np.asarray(found[f"tcp_q{part}"]) for part in "wxyz"])
    rotations = Rotation.from_quat(quaternions, scalar_first=True).as_matrix()
    np.testing.assert_allclose(rotations, full_table.pose[:, :3, :3], atol=2e-15)
    names = list(found.columns if read is pandas_frame else found.column_names)
    extra = {"pathplan"} if suffix == ".jsonl" else set()  # the header, in the first row alone
    assert set(names) == {*columns, *(f"tcp_q{part}" for part in "wxyz")} | extra
    assert len(found) == len(full_table)


@pytest.mark.parametrize("suffix", TEXT)
def test_columns_stand_in_the_same_order_in_every_kind(full_table, tmp_path, suffix):
    write_table(full_table, tmp_path / "t.csv")
    write_table(full_table, tmp_path / f"t{suffix}", overwrite=True)
    first = next(line for line in (tmp_path / "t.csv").read_text("utf-8").split("\n") if line[0] != "#")
    names = [name for name in arrow_table(tmp_path / f"t{suffix}").column_names if name != "pathplan"]
    assert names == next(csv.reader(io.StringIO(first)))


@pytest.mark.parametrize(("angle", "length"), UNITS)
@pytest.mark.parametrize("suffix", TEXT)
def test_reading_back_gives_the_same_table_in_any_unit(full_table, bare_table, tmp_path, suffix, angle, length):
    for table in (full_table, bare_table):
        file = tmp_path / f"t{suffix}"
        write_table(table, file, units=f"{length} {angle}", overwrite=True)
        again = read_table(file)
        for name in ("time", "torque", "step"):
            assert np.array_equal(getattr(again, name), getattr(table, name)), name
        for name in ("position", "velocity", "acceleration", "jerk", "tool_speed"):
            mine, other = getattr(again, name), getattr(table, name)
            assert (mine is None) == (other is None)
            assert mine is None or np.all(np.abs(mine - other) <= np.spacing(np.abs(other))), name
        assert table.pose is None or np.abs(again.pose - table.pose).max() < 2e-15
        for name in ("joint_names", "joint_kinds", "cycle", "marks", "meta"):
            assert getattr(again, name) == getattr(table, name), name
    if (angle, length) == ("rad", "m"):
        assert np.array_equal(again.position, bare_table.position)  # nothing is multiplied


@pytest.mark.parametrize("suffix", [*TEXT, ".npz"])
def test_chunks_give_the_same_bytes_as_the_whole(full_table, tmp_path, suffix):
    write_table(full_table, tmp_path / f"whole{suffix}")
    write_table(full_table.chunks(7), tmp_path / f"chunks{suffix}")
    write_table(full_table.chunks(1), tmp_path / f"rows{suffix}")
    whole = (tmp_path / f"whole{suffix}").read_bytes()
    assert (tmp_path / f"chunks{suffix}").read_bytes() == whole == (tmp_path / f"rows{suffix}").read_bytes()


def test_long_tables_in_parquet_do_not_depend_on_their_chunks(bare_table, tmp_path, monkeypatch):
    monkeypatch.setattr("pathplan.export.parquet_file.ROW_GROUP", 16)
    for size in (3, 16, 17, 50):
        write_table(bare_table.chunks(size), tmp_path / f"{size}.parquet")
    assert len({(tmp_path / f"{size}.parquet").read_bytes() for size in (3, 16, 17, 50)}) == 1
    assert pyarrow.parquet.ParquetFile(tmp_path / "3.parquet").metadata.num_row_groups == 4
    assert len(read_table(tmp_path / "17.parquet")) == 50
