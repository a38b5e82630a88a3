"""CSV tables: read back by the csv module, by numpy and by ourselves; every damage named."""

import csv
import io
import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from pathplan.errors import InputError
from pathplan.export import read_table, write_table
from pathplan.table import JointTable, tick_times


def written(table, tmp_path, name="table.csv"):
    write_table(table, tmp_path / name, overwrite=True)
    return tmp_path / name


def within_one_ulp(ours, original):
    return np.all(np.abs(ours - original) <= np.spacing(np.abs(original)))


def test_pythons_csv_module_reads_mm_and_degrees(full_table, tmp_path):
    lines = written(full_table, tmp_path).read_text(encoding="utf-8").split("\n")
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) == len(full_table)
    for i in (0, 1, 49):
        row = {key: float(value) for key, value in rows[i].items()}
        q, v = full_table.position[i], full_table.velocity[i]
        assert row["time_s"] == round(i * 0.004, 3)
        assert row["swing_deg"] == np.degrees(q[0])
        assert row["lift_mm"] == q[1] * 1000
        assert row['wrist, "left"_deg_s'] == np.degrees(v[2])
        assert row["lift_mm_s3"] == full_table.jerk[i, 1] * 1000
        assert (row["swing_Nm"], row["lift_N"]) == tuple(full_table.torque[i, :2])
        assert row["tcp_y_mm"] == full_table.pose[i, 1, 3] * 1000
        assert row["tool_speed_mm_s"] == full_table.tool_speed[i] * 1000
        assert rows[i]["step"] == str(i // 20 + 1)
        quaternion = [row[f"tcp_q{c}"] for c in "wxyz"]
        rotation = Rotation.from_quat(quaternion, scalar_first=True).as_matrix()
        assert np.abs(rotation - full_table.pose[i, :3, :3]).max() < 2e-15


def test_numpy_reads_it(full_table, tmp_path):
    file = written(full_table, tmp_path)
    skip = sum(line.startswith("#") for line in file.read_text(encoding="utf-8").split("\n"))
    rows = np.loadtxt(file, delimiter=",", skiprows=skip + 1)
    assert np.array_equal(rows[:, 1], np.degrees(full_table.position[:, 0]))
    assert np.array_equal(rows[:, -1], full_table.step + 1)


def test_the_header_says_it_in_words(full_table, tmp_path):
    lines = written(full_table, tmp_path).read_text(encoding="utf-8").split("\n")
    header = [line for line in lines if line.startswith("#")]
    assert header[0] == "# pathplan joint table, format 1"
    assert '# task = "Tiles, belt to kiln car"' in header
    assert '# sources = {"tiles.toml": "ab12", "glazer6.toml": "cd34"}' in header
    assert "# cycle_s = 0.004" in header
    assert '# mark = {"name": "gripper closed", "time_s": 0.08, "row": 21, "step": 1}' in header
    assert any(line.rstrip() == "# rows = 50" for line in header)
    assert not any("BREAKS" in line for line in header)


def test_a_table_that_breaks_limits_says_so_above_all(full_table, tmp_path):
    table = replace(full_table, meta={**full_table.meta, "breaks_limits": True})
    file = written(table, tmp_path)
    second = file.read_text(encoding="utf-8").split("\n")[1]
    assert second == "# THIS TABLE BREAKS LIMITS: it failed its audit and must not be run"
    assert read_table(file).meta["breaks_limits"] is True


def test_reading_back_gives_the_same_table(full_table, tmp_path):
    again = read_table(written(full_table, tmp_path))
    for name in ("time", "torque", "step"):
        assert np.array_equal(getattr(again, name), getattr(full_table, name)), name
    for name in ("position", "velocity", "acceleration", "jerk", "tool_speed"):
        assert within_one_ulp(getattr(again, name), getattr(full_table, name)), name
    assert within_one_ulp(again.pose[:, :3, 3], full_table.pose[:, :3, 3])
    assert np.abs(again.pose - full_table.pose).max() < 2e-15
    for name in ("joint_names", "joint_kinds", "cycle", "marks", "meta"):
        assert getattr(again, name) == getattr(full_table, name), name
    assert not again.position.flags.writeable


def test_a_table_of_time_and_position_stays_one(bare_table, tmp_path):
    again = read_table(written(bare_table, tmp_path))
    assert again.velocity is None and again.pose is None and again.tool_speed is None and again.torque is None
    assert within_one_ulp(again.position, bare_table.position)


@settings(deadline=None, max_examples=200)
@given(st.lists(st.tuples(st.floats(-1e6, 1e6), st.floats(-1e300, 1e300), st.floats(-7, 7)), min_size=1, max_size=20))
def test_any_float_comes_back_within_one_unit_in_the_last_place(tmp_path_factory, values):
    q = np.array(values)
    q[np.abs(q) < 1e-290] = 0.0  # subnormal numbers have fewer places
    table = JointTable(
        time=tick_times(np.arange(len(q)), 0.001),
        position=q,
        joint_kinds=("revolute", "prismatic", "revolute"),
        cycle=0.001,
    )
    file = tmp_path_factory.mktemp("t") / "t.csv"
    write_table(table, file)
    again = read_table(file)
    assert within_one_ulp(again.position, q)
    assert np.array_equal(again.time, table.time)


@pytest.mark.parametrize("cycle", [0.001, 0.004, 0.012])
def test_differences_of_the_written_positions_keep_the_rounding_bound(tmp_path, cycle):
    """n-th difference / cycle^n within limit x (1 + 1e-6) + 8 eps / cycle^n, first and last row padded.

    The motion is the minimum-jerk polynomial (Flash & Hogan 1985), whose peaks are known: 1.875 A/D,
    5.7735 A/D^2 and 60 A/D^3. They are the limits here, so that nothing but rounding is spared.
    """
    distance, duration = 2.5, 3.0
    ticks = np.arange(int(np.ceil(duration / cycle)) + 1)
    tau = np.minimum(tick_times(ticks, cycle) / duration, 1.0)
    q = -1.2 + distance * tau**3 * (10 - 15 * tau + 6 * tau**2)
    table = JointTable(time=tick_times(ticks, cycle), position=q[:, None], joint_kinds=("revolute",), cycle=cycle)
    lines = written(table, tmp_path).read_text(encoding="utf-8").split("\n")
    rows = csv.DictReader(line for line in lines if not line.startswith("#"))
    p = np.array([float(row["joint1_deg"]) for row in rows])
    p = np.concatenate([[p[0]] * 3, p, [p[-1]] * 3])
    eps = np.spacing(np.abs(p).max())
    for n, peak in ((1, 1.875), (2, 10 / np.sqrt(3)), (3, 60.0)):
        limit = np.degrees(peak * distance / duration**n)
        assert np.abs(np.diff(p, n)).max() / cycle**n <= limit * (1 + 1e-6) + 8 * eps / cycle**n


def test_times_print_cleanly_even_when_made_by_multiplying(tmp_path):
    ticks = np.arange(1000)
    table = JointTable(time=ticks * 0.1, position=np.zeros((1000, 1)), joint_kinds=("prismatic",), cycle=0.1)
    assert not np.array_equal(table.time, tick_times(ticks, 0.1))
    text = written(table, tmp_path).read_text()
    assert "\n0.3,0.0,1\n" in text and "00000000" not in text
    off = replace(table, time=ticks * 0.1 + 0.03)
    assert np.array_equal(read_table(written(off, tmp_path)).time, off.time)


def test_minus_zero_is_written_as_zero(bare_table, tmp_path):
    table = replace(bare_table, position=np.full(bare_table.position.shape, -0.0))
    assert "-0.0" not in written(table, tmp_path).read_text(encoding="utf-8")


def test_chunks_give_the_same_bytes_as_the_whole(full_table, tmp_path):
    whole = written(full_table, tmp_path).read_bytes()
    assert written(full_table.chunks(7), tmp_path, "chunks.csv").read_bytes() == whole
    assert written(full_table, tmp_path, "again.csv").read_bytes() == whole


def test_column_order_and_line_ends_of_editors_are_read(full_table, tmp_path):
    file = written(full_table, tmp_path)
    text = file.read_text(encoding="utf-8")
    head = [line for line in text.split("\n") if line.startswith("#")]
    rows = list(csv.reader(line for line in text.split("\n")[:-1] if not line.startswith("#")))
    turned = io.StringIO()
    csv.writer(turned, lineterminator="\r\n").writerows(row[::-1] for row in rows)
    file.write_bytes(("\ufeff" + "\r\n".join(head) + "\r\n" + turned.getvalue()).encode())
    again = read_table(file)
    assert within_one_ulp(again.jerk, full_table.jerk) and np.array_equal(again.step, full_table.step)
    assert again.meta == full_table.meta


def edited(table, tmp_path, edit):
    """The file of a table after `edit(lines)` on its list of lines."""
    file = written(table, tmp_path)
    lines = file.read_text(encoding="utf-8").split("\n")
    edit(lines)
    file.write_text("\n".join(lines), encoding="utf-8")
    return file


def cell(row, column, value):
    """An edit: one cell of the bare table, whose header has 5 lines and a row of names."""

    def edit(lines):
        cells = lines[6 + row].split(",")
        cells[column] = value
        lines[6 + row] = ",".join(cells)

    return edit


def line(index, text):
    return lambda lines: lines.__setitem__(index, text)


NAMES = 'time_s,swing_deg,lift_mm,"wrist, ""left""_deg",step'
DAMAGES = [
    (cell(2, 1, "abc"), "row 3 (line 9), column swing_deg: expected a number, got 'abc'"),
    (cell(2, 1, "1_0"), "row 3 (line 9), column swing_deg: expected a number, got '1_0'"),
    (cell(0, 2, ""), "row 1 (line 7), column lift_mm: expected a number, got ''"),
    (cell(49, 2, "nan"), "row 50 (line 56), column lift_mm: expected a finite number, got nan"),
    (cell(3, 0, "1e999"), "row 4 (line 10), column time_s: expected a finite number, got inf"),
    (cell(4, 4, "0"), "row 5 (line 11), column step: expected the number of a step, 1 or above, got 0"),
    (cell(4, 4, "1.5"), "row 5 (line 11), column step: expected the number of a step, 1 or above, got 1.5"),
    (cell(5, 4, "1,2"), "row 6 (line 12): expected 5 values, got 6"),
    (line(11, ""), "row 6 (line 12): expected 5 values, got 0"),
    (lambda lines: lines.pop(20), "has 49 rows where its header says 50: cut short or edited"),
    (lambda lines: lines.pop(), "line 56: the file is cut short in the middle of this line"),
    (line(0, "time;q1;q2"), "not a joint table written by pathplan: it starts with 'time;q1;q2'"),
    (line(0, "# pathplan joint table, format 9"), "format 9 of table: this pathplan reads 1"),
    (line(2, "# cycle_s = -0.004"), "cycle_s: expected a positive time or null, got -0.004"),
    (line(2, "# cycle_s = NaN"), "line 3: header is damaged at 'NaN\\n'"),
    (line(2, "# remark"), 'header has no line "# cycle_s = ..."'),
    (line(3, '# joints = "swing"'), "joints: expected a list of [name, kind], got 'swing'"),
    (
        line(3, '# joints = [["a", "screw"]]'),
        "joints: expected different names of known kinds, got [['a', 'screw']]",
    ),
    (line(3, '# joints = [["a", ""]]'), "joints: the kinds of the joints are missing"),
    (line(1, "# cycle_s = 0.004"), "line 3: cycle_s is stated twice"),
    (
        line(1, '# mark = {"name": "x"}'),
        "line 2: mark: expected name, time_s, row and step, got {'name': 'x'}",
    ),
    (line(4, "# rows = 1e9"), "rows: expected a number up to 20000000, got 1000000000.0"),
    (line(5, NAMES.replace("lift_mm,", "")), "column lift_mm: missing"),
    (line(5, NAMES.replace("lift_mm", "lift_m")), "column 'lift_m': unknown for these joints"),
    (line(5, NAMES.replace("lift_mm", "swing_deg")), "column swing_deg: is there twice"),
    (line(5, ""), "has a header but no row of column names"),
    (line(5, NAMES + ",swing_deg_s"), "column lift_mm_s: missing"),
    (
        lambda lines: lines.__delitem__(slice(6, 56)),
        "has 0 rows where its header says 50: cut short or edited",
    ),
    (line(8, "1" * (1 << 20)), "line 9: longer than 1048576 bytes"),
]


@pytest.mark.parametrize(("edit", "message"), DAMAGES, ids=[message[:40] for _, message in DAMAGES])
def test_every_damage_is_one_clear_line(bare_table, tmp_path, edit, message):
    file = edited(bare_table, tmp_path, edit)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


def test_a_quaternion_must_have_length_one(full_table, tmp_path):
    file = written(full_table, tmp_path)
    lines = file.read_text(encoding="utf-8").split("\n")
    names = next(i for i, text in enumerate(lines) if not text.startswith("#"))
    cells = lines[names + 2].split(",")
    cells[-6:-2] = ["1.0", "1.0", "0.0", "0.0"]
    lines[names + 2] = ",".join(cells)
    file.write_text("\n".join(lines), encoding="utf-8")
    with pytest.raises(InputError) as error:
        read_table(file)
    place = f"row 2 (line {names + 3}), column tcp_qw"
    assert str(error.value) == f"{file}: {place}: expected a quaternion of length 1, got length 1.41421"


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "not a joint table written by pathplan: it starts with nothing"),
        (b"\x00\xff\xfe", "not a joint table written by pathplan: it starts with '\\x00��'"),
        (b"# pathplan joint table, format 1\n# a = \xff\n", "line 2: is not UTF-8 text"),
        (
            b"# pathplan joint table, format 1\n# a = {",
            "line 2: the file is cut short in the middle of this line",
        ),
    ],
)
def test_other_peoples_files_are_told(tmp_path, content, message):
    file = tmp_path / "other.csv"
    file.write_bytes(content)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


def test_joints_whose_columns_would_clash_are_refused(bare_table, tmp_path):
    table = replace(bare_table, joint_names=("a", "a_mm_s", "c"), joint_kinds=("prismatic",) * 3)
    table = replace(table, velocity=table.position)
    clash = replace(table, joint_names=("tcp_x", "b", "c"))
    with pytest.raises(InputError) as error:
        write_table(clash, tmp_path / "t.csv")
    assert str(error.value) == "table: joint_names: two columns would be called tcp_x_mm"
    write_table(table, tmp_path / "t.csv")
    assert within_one_ulp(read_table(tmp_path / "t.csv").velocity, table.velocity)


def test_unknown_kinds_can_not_be_written_in_mm_or_degrees(bare_table, tmp_path):
    with pytest.raises(InputError) as error:
        write_table(replace(bare_table, joint_kinds=()), tmp_path / "t.csv")
    message = "table: joint_kinds: not known, so mm or deg can't be told: state them or write NPZ"
    assert str(error.value) == message
    assert list(tmp_path.iterdir()) == []


@settings(deadline=None, max_examples=100)
@given(data=st.data())
def test_bytes_changed_at_random_never_give_a_traceback(full_table, tmp_path_factory, data):
    file = tmp_path_factory.mktemp("t") / "t.csv"
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


@settings(deadline=None, max_examples=50)
@given(
    st.dictionaries(
        st.from_regex(r"[a-z][a-z_]{0,8}", fullmatch=True).filter(lambda key: key not in ("mark", "rows")),
        st.recursive(
            st.none() | st.booleans() | st.integers() | st.text() | st.floats(-1e300, 1e300),
            lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
            max_leaves=6,
        ),
        max_size=4,
    )
)
def test_meta_comes_back_as_its_json_self(bare_table, tmp_path_factory, meta):
    table = replace(bare_table.part(0, 2), meta=meta)
    for suffix in (".csv", ".npz"):
        file = tmp_path_factory.mktemp("t") / f"t{suffix}"
        write_table(table, file)
        assert read_table(file).meta == json.loads(json.dumps(meta))
