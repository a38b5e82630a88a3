"""Tables from elsewhere as joint tables: what is recognised, what is asked, what is refused."""

import zipfile

import numpy as np
import pandas
import pyarrow
import pyarrow.parquet
import pytest

from pathplan.errors import InputError
from pathplan.export import read_table, write_table
from pathplan.export.foreign import Asked, is_own, read_foreign

NAMES = ("x", "y", "z", "wrist")
UNITS = ("mm", "mm", "mm", "deg")


def asked(time=None, columns=None, unit=None):
    return Asked.parse(time, columns, unit)


def frame(motion, on_screen, names, time="time_s", **more):
    return pandas.DataFrame({time: motion[0], **dict(zip(names, on_screen.T, strict=True)), **more})


@pytest.mark.parametrize("kind", ["csv", "tsv", "txt", "parquet", "npz"])
def test_every_kind_with_units_in_its_names(arm, motion, on_screen, tmp_path, kind):
    names = [f"{name}_{unit}" for name, unit in zip(NAMES, UNITS, strict=True)]
    table = frame(motion, on_screen, names)
    file = tmp_path / f"t.{kind}"
    if kind == "parquet":
        table.to_parquet(file)
    elif kind == "npz":
        np.savez(file, **{name: table[name].to_numpy() for name in table})
    else:
        table.to_csv(file, index=False, sep={"csv": ",", "tsv": "\t", "txt": " "}[kind])
    found = read_foreign(file, arm)
    assert np.array_equal(found.table.time, motion[0]) and found.notes == ()
    np.testing.assert_allclose(found.table.position, motion[1], rtol=1e-15, atol=1e-15)
    assert found.table.joint_names == NAMES and found.table.cycle is None and found.table.velocity is None
    assert found.table.meta["arm"] == "loader4" and found.table.meta["read_from"] == file.name


def test_columns_and_units_by_options(arm, motion, on_screen, tmp_path):
    table = frame(motion, on_screen, ["A1", "A2", "A3", "A4"], time="stamp", state="OK", A5=1.0)
    table.to_csv(tmp_path / "t.csv", index=False)
    how = asked("stamp", "A1=x, A2=y,A3=z,A4=wrist", "deg, mm, s")
    found = read_foreign(tmp_path / "t.csv", arm, how)
    np.testing.assert_allclose(found.table.position, motion[1], rtol=1e-15, atol=1e-15)
    assert found.notes == ("columns that are not used: state, A5",)
    assert found.table.meta["columns_read"] == ["stamp", "A1", "A2", "A3", "A4"]


def test_time_from_row_to_row(arm, motion, on_screen, tmp_path):
    table = frame(motion, on_screen, [f"q{k}" for k in range(4)], time="ignored")
    table.to_csv(tmp_path / "t.csv", index=False)
    found = read_foreign(tmp_path / "t.csv", arm, asked("2 ms", None, "deg, mm"))
    assert found.table.cycle == 0.002 and found.table.time[-1] == 1.0
    assert found.notes == ("columns that are not used: ignored",)


def test_an_npz_of_whole_arrays(arm, motion, tmp_path):
    time, position = motion
    np.savez_compressed(
        tmp_path / "t.npz",
        t=(1000 * time).astype(np.int32),
        q=position.astype(">f8"),
        qd=np.asfortranarray(np.gradient(position, 0.004, axis=0)),
        dt=0.004,
        wide=np.zeros((501, 200)),
        note="x",
        anything=np.array([{"a": 1}], dtype=object),
    )
    found = read_foreign(tmp_path / "t.npz", arm, asked(None, None, "rad, m, ms"))
    assert np.array_equal(found.table.position, position) and np.array_equal(found.table.time, time)
    assert np.array_equal(found.table.velocity, np.gradient(position, 0.004, axis=0))


def test_pickles_are_never_loaded(arm, tmp_path):
    """An array of Python objects would run code when loaded; as a column it is simply not there."""

    class Trap:
        def __reduce__(self):
            return (exec, ("raise SystemExit('executed')",))

    np.savez(tmp_path / "t.npz", time_s=np.arange(3.0), q_rad=np.array([[Trap()] * 4] * 3, dtype=object))
    with pytest.raises(InputError, match="no column with the position of x, y, z, wrist: its columns are time_s: say"):
        read_foreign(tmp_path / "t.npz", arm)


def test_rates_take_the_unit_of_the_position(arm, motion, on_screen, tmp_path):
    names = [f"{name}_{unit}" for name, unit in zip(NAMES, UNITS, strict=True)]
    speeds = {f"{name}_velocity": 2.0 * values for name, values in zip(NAMES, on_screen.T, strict=True)}
    forces = {f"{name}_torque": values for name, values in zip(NAMES, on_screen.T, strict=True)}
    frame(motion, on_screen, names, **speeds, **forces).to_csv(tmp_path / "t.csv", index=False)
    found = read_foreign(tmp_path / "t.csv", arm)
    np.testing.assert_allclose(found.table.velocity, 2 * motion[1], rtol=1e-15, atol=1e-15)
    assert np.array_equal(found.table.torque, on_screen)
    assert found.notes == (
        "velocity tells no unit: taken per s in that of position",
        "force tells no unit: taken in N",
        "torque tells no unit: taken in N m",
    )


def test_steps(arm, motion, on_screen, tmp_path):
    names = [f"{name}_{unit}" for name, unit in zip(NAMES, UNITS, strict=True)]
    for steps, expected in ((np.arange(501) // 100 + 1, True), (np.arange(501) // 100, False)):
        frame(motion, on_screen, names, step=steps).to_csv(tmp_path / "t.csv", index=False)
        found = read_foreign(tmp_path / "t.csv", arm)
        assert np.array_equal(found.table.step, steps - 1 if expected else 0 * steps)
        note = "column step is not used: it does not count steps from 1"
        assert found.notes == (() if expected else (note,))


def test_empty_cells_become_not_a_number(arm, motion, on_screen, tmp_path):
    names = [f"{name}_{unit}" for name, unit in zip(NAMES, UNITS, strict=True)]
    table = frame(motion, on_screen, names)
    table.loc[7, "z_mm"] = None
    table.to_csv(tmp_path / "t.csv", index=False)
    table.to_parquet(tmp_path / "t.parquet")
    for file in (tmp_path / "t.csv", tmp_path / "t.parquet"):
        found = read_foreign(file, arm).table.position
        assert np.argwhere(np.isnan(found)).tolist() == [[7, 2]]


THERE = "its columns are time_s, x_mm, y_mm, z_mm, wrist_deg"
COLUMNS = "time_s,x_mm,y_mm,z_mm,wrist_deg"


@pytest.mark.parametrize(
    ("names", "options", "message"),
    [
        (
            "t,a,b,c,d",
            {},
            "no column with the position of x, y, z, wrist: its columns are t, a, b, c, d: "
            'say which with --columns "NAME=x, NAME=y, ..."',
        ),
        (
            "time_s,x_mm,y_mm,z_mm,w_deg",
            {},
            "no column with the position of wrist: its columns are time_s, x_mm, y_mm, z_mm, w_deg: "
            'say which with --columns "NAME=wrist"',
        ),
        (
            "stamp,x_mm,y_mm,z_mm,wrist_deg",
            {},
            "no column of time: its columns are stamp, x_mm, y_mm, z_mm, wrist_deg: "
            'say which with --time NAME, or the time from row to row with --time "4 ms"',
        ),
        ("time,x_mm,y_mm,z_mm,wrist_deg", {}, "column time: tells no unit: say it with --unit s (or ms)"),
        ("time_s,x_mm,y_mm,z_mm,wrist", {}, "column wrist: tells no unit: say it with --unit deg (or rad)"),
        ("time_s,x,y_mm,z_mm,wrist", {"unit": "deg"}, "column x: tells no unit: say it with --unit mm (or m)"),
        (
            "time_s,x_mm,y_mm,z_mm,wrist_mm",
            {},
            "column wrist_mm: mm is no unit of the position of revolute joint wrist",
        ),
        (
            "time_s,x_mm,y_mm,z_mm,wrist position [deg/s]",
            {},
            "column wrist position [deg/s]: deg/s is no unit of the position of revolute joint wrist",
        ),
        (
            "time_s,x_mm,y_mm,z_mm,wrist_deg,q4_deg",
            {},
            "columns wrist_deg and q4_deg would both be position of wrist: say which with --columns or --time",
        ),
        (
            "time_s,t_ms,x_mm,y_mm,z_mm,wrist_deg",
            {},
            "columns time_s and t_ms would both be time: say which with --columns or --time",
        ),
        (
            COLUMNS + ",x_mm_s",
            {},
            'column x_mm_s is velocity, but there is none of y, z, wrist: say which with --columns "NAME=y velocity"',
        ),
        (COLUMNS, {"time": "tim"}, 'the file --time: no column "tim", did you mean "time_s"?'),
        (
            COLUMNS,
            {"columns": "A1=x"},
            'the file --columns: no column "A1", there are time_s, x_mm, y_mm, z_mm, wrist_deg',
        ),
        (
            COLUMNS,
            {"columns": "x_mm=x, x_mm=y"},
            '--columns: column "x_mm" is there twice',
        ),
        (
            COLUMNS,
            {"columns": "x_mm=x, y_mm=x"},
            "columns x_mm and y_mm would both be position of x: say which with --columns or --time",
        ),
        (
            COLUMNS,
            {"columns": "x_mm"},
            '--columns: expected pairs of a column and a joint such as "A1=base, A2=shoulder", got "x_mm"',
        ),
        (
            COLUMNS,
            {"columns": "x_mm=wirst"},
            '--columns: expected "x", "y", "z" or "wrist", alone or with "position", "velocity", "acceleration", '
            '"jerk" or "torque" behind it, got "wirst", did you mean "wrist"?',
        ),
        (
            COLUMNS,
            {"unit": "deg, rad"},
            '--unit: expected an angle, a length, a time and a torque at most, such as "deg, mm, ms", got "deg, rad"',
        ),
        (
            COLUMNS,
            {"unit": "deg/s"},
            '--unit: expected an angle, a length, a time and a torque at most, such as "deg, mm, ms", got "deg/s"',
        ),
        (COLUMNS, {"time": "0 ms"}, '--time: expected a time from row to row of 1 us to 10 s, got "0 ms"'),
    ],
)
def test_refusals(arm, tmp_path, names, options, message):
    file = tmp_path / "t.csv"
    row = ",".join("0" for _ in names.split(","))
    file.write_text(f"{names}\n{row}\n{row}\n")
    with pytest.raises(InputError) as error:
        read_foreign(file, arm, asked(**options))
    expected = message.replace("the file ", f"{file}: ")
    assert str(error.value) == (expected if expected.startswith(("--", str(file))) else f"{file}: {message}")


def test_files_without_names_say_so(arm, tmp_path):
    file = tmp_path / "t.csv"
    file.write_text("0,1,2,3,4\n1,1,2,3,4\n")
    with pytest.raises(InputError) as error:
        read_foreign(file, arm)
    complaint = "it names no columns, so they are called 1, 2, 3, 4, 5: say which with --columns"
    assert str(error.value).startswith(f"{file}: no column with the position of x, y, z, wrist: {complaint}")
    found = read_foreign(file, arm, asked("1", "2=x,3=y,4=z,5=wrist", "mm,deg,s"))
    assert np.allclose(found.table.position[0] * [1000, 1000, 1000, 180 / np.pi], [1, 2, 3, 4])


def test_sizes_that_differ_or_are_absurd(arm, tmp_path):
    file = tmp_path / "t.npz"
    np.savez(file, time_s=np.zeros(5), q=np.zeros((6, 4)))
    with pytest.raises(InputError) as error:
        read_foreign(file, arm, asked(unit="rad, m"))
    assert str(error.value) == f"{file}: array q: has 6 rows where array time_s has 5"
    header = b"{'descr': '<f8', 'fortran_order': False, 'shape': (1000000000000,), }\n"
    with zipfile.ZipFile(file, "w") as archive:
        archive.writestr("t.npy", b"\x93NUMPY\x01\x00" + len(header).to_bytes(2, "little") + header)
    with pytest.raises(InputError) as error:
        read_foreign(file, arm, asked("t", "t=x,t=y,t=z,t=wrist"))
    assert str(error.value) == '--columns: column "t" is there twice'


def test_a_billion_rows_in_a_small_npz(arm, tmp_path):
    """Zeros compress to nothing: what counts is what they would become."""
    file = tmp_path / "t.npz"
    np.savez_compressed(file, t_s=np.zeros(3), q=np.zeros((3, 4)))
    header = b"{'descr': '<f8', 'fortran_order': False, 'shape': (1000000000, 4), }\n"
    with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, shape in (("t_s", b"(1000000000,)"), ("q", b"(1000000000, 4)")):
            own = header.replace(b"(1000000000, 4)", shape)
            archive.writestr(
                f"{name}.npy", b"\x93NUMPY\x01\x00" + len(own).to_bytes(2, "little") + own + bytes(1 << 20)
            )
    with pytest.raises(InputError) as error:
        read_foreign(file, arm, asked(unit="rad, m"))
    assert str(error.value) == f"{file}: array t_s: expected 1 to 20000000 rows"


def test_files_too_large_are_refused_unread(arm, tmp_path):
    file = tmp_path / "t.csv"
    with open(file, "wb") as stream:
        stream.truncate(16_000_000_001)  # takes no room
    with pytest.raises(InputError) as error:
        read_foreign(file, arm)
    assert str(error.value) == f"{file}: is larger than 16 GB: no table is read of that size"


def test_parquet_of_other_columns(arm, motion, tmp_path):
    time, position = motion
    columns = {
        "time_s": pyarrow.array(time.astype("f4")),
        "deep": pyarrow.array([{"a": 1, "b": 2}] * 501),
        **{f"{name}": pyarrow.array(position[:, k]) for k, name in enumerate(NAMES)},
        "state": pyarrow.array(["run"] * 501),
    }
    pyarrow.parquet.write_table(pyarrow.table(columns), tmp_path / "t.parquet")
    found = read_foreign(tmp_path / "t.parquet", arm, asked(unit="rad, m")).table
    assert np.array_equal(found.position, position) and np.array_equal(found.time, time.astype("f4"))
    pyarrow.parquet.write_table(pyarrow.table({"state": ["a"]}), tmp_path / "u.parquet")
    with pytest.raises(InputError) as error:
        read_foreign(tmp_path / "u.parquet", arm)
    assert str(error.value) == f"{tmp_path / 'u.parquet'}: has no columns of numbers"


@pytest.mark.parametrize("suffix", [".csv", ".npz", ".parquet"])
def test_our_own_files_are_told_from_others(arm, motion, tmp_path, suffix):
    table = read_foreign_of(motion, arm, tmp_path)
    write_table(table, tmp_path / f"own{suffix}")
    assert is_own(tmp_path / f"own{suffix}")
    again = read_table(tmp_path / f"own{suffix}")
    assert again.meta["read_from"] == "t.npz" and again.meta["arm"] == "loader4"
    file = tmp_path / f"damaged{suffix}"
    file.write_bytes(b"")
    assert is_own(file) is (suffix != ".csv")  # an empty text file is nobody's


def read_foreign_of(motion, arm, tmp_path):
    np.savez(tmp_path / "t.npz", t_s=motion[0], q=motion[1])
    assert not is_own(tmp_path / "t.npz")
    return read_foreign(tmp_path / "t.npz", arm, asked(unit="rad, m")).table
