"""TOML files: what is read, and one line for whatever is wrong with them."""

import hashlib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation
from spatialmath import SE3

from pathplan.errors import InputError
from pathplan.tomlfile import (
    MAX_BYTES,
    Problems,
    Table,
    read_toml,
    rotation_from_quaternion,
    rotation_from_rpy,
)


def written(folder, content):
    path = folder / "pick.toml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def complaint(call):
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value)


def test_reads_content_and_digest(tmp_path):
    raw = b'title = "Tile"\r\n[a]\r\nb = 1\r\n'
    data, digest = read_toml(written(tmp_path, raw))
    assert data == {"title": "Tile", "a": {"b": 1}}
    assert digest == hashlib.sha256(raw).hexdigest()


def test_a_byte_order_mark_is_no_part_of_the_text(tmp_path):
    assert read_toml(written(tmp_path, b"\xef\xbb\xbfa = 1\n"))[0] == {"a": 1}


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("a = 1\nb 2\n", "pick.toml: line 2: not TOML: Expected '=' after a key in a key/value pair"),
        ("a = 1\n\n[b\n", "pick.toml: line 3: not TOML: Expected ']' at the end of a table declaration"),
        ("a = 1\na = 2", "pick.toml: line 2: not TOML: Cannot overwrite a value"),
        ("a = ", "pick.toml: line 1: not TOML: Invalid value"),
        ("step: 1\n", "pick.toml: line 1: not TOML: Expected '=' after a key in a key/value pair"),
        ("a = " + "[" * 4000, "pick.toml: not TOML that can be read: nested too deeply"),
        (b'a = "tile"\nb = "\xff"\n', "pick.toml: line 2: not UTF-8 text, expected a TOML file"),
        (b"\x89PNG\r\n\x1a\n", "pick.toml: line 1: not UTF-8 text, expected a TOML file"),
        (b"#" * (MAX_BYTES + 1), "pick.toml: larger than 20 MB, expected a TOML file of less"),
    ],
)
def test_what_is_not_toml(tmp_path, content, message):
    path = written(tmp_path, content)
    assert complaint(lambda: read_toml(path)) == message


def test_an_integer_of_thousands_of_digits_is_one_line(tmp_path):
    path = written(tmp_path, "a = " + "9" * 5000)
    assert complaint(lambda: read_toml(path)).startswith("pick.toml: not TOML: Exceeds the limit")


def test_what_is_no_file(tmp_path):
    assert complaint(lambda: read_toml(tmp_path / "none.toml")) == f"{tmp_path}/none.toml: no such file"
    assert complaint(lambda: read_toml(tmp_path)) == f"{tmp_path}: is a directory, expected a TOML file"
    assert complaint(lambda: read_toml("a\0b")) == "a?b: can't be read: embedded null byte"
    under_a_file = written(tmp_path, "a = 1") / "b.toml"
    assert complaint(lambda: read_toml(under_a_file)) == f"{under_a_file}: can't be read: Not a directory"


DATA = {
    "speed": "250 mm/s",
    "blend": -5,
    "name": "",
    "flag": 1,
    "count": 2.0,
    "kind": "revolut",
    "xyz": [1, 2],
    "far": [0, 0, 2e6],
    "joints": [90, "100 mm"],
    "row": [{"a": 1}, 5],
    "pose": {"xyz": [1, "2 cm", 3], "rpy": [0, 0, 90]},
}


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda t: t.take("blnd"), 'pick.toml: step[4]: missing key "blnd" (is "blend" meant for it?)'),
        (lambda t: t.take("tool"), 'pick.toml: step[4]: missing key "tool"'),
        (
            lambda t: t.quantity("blend", "length", positive=True),
            'pick.toml: step[4].blend: expected a length above zero such as "20 mm", got -5',
        ),
        (
            lambda t: t.quantity("blend", "length", not_negative=True),
            'pick.toml: step[4].blend: expected a length of zero or more such as "20 mm", got -5',
        ),
        (
            lambda t: t.quantity("speed", "time"),
            'pick.toml: step[4].speed: expected a time such as "0.2 s", got "250 mm/s"',
        ),
        (lambda t: t.text("name"), 'pick.toml: step[4].name: expected a text on one line, got ""'),
        (lambda t: t.text("count"), "pick.toml: step[4].count: expected a text on one line, got 2.0"),
        (lambda t: t.flag("flag"), "pick.toml: step[4].flag: expected true or false, got 1"),
        (
            lambda t: t.integer("count", high=9),
            "pick.toml: step[4].count: expected a whole number from 0 to 9, got 2.0",
        ),
        (
            lambda t: t.choice("kind", ("revolute", "prismatic")),
            'pick.toml: step[4].kind: expected "revolute" or "prismatic", got "revolut", did you mean "revolute"?',
        ),
        (
            lambda t: t.vector("xyz", 3, "length"),
            "pick.toml: step[4].xyz: expected a list of 3 quantities, got 2 of them",
        ),
        (
            lambda t: t.vector("speed", 3, "length"),
            'pick.toml: step[4].speed: expected a list of 3 quantities, got "250 mm/s"',
        ),
        (
            lambda t: t.position("far"),
            "pick.toml: step[4].far: expected coordinates within 1000 m, got [0, 0, 2000000.0]",
        ),
        (
            lambda t: t.mixed_vector("joints", ("angle", "angle")),
            'pick.toml: step[4].joints[2]: expected an angle such as "10 deg", got "100 mm"',
        ),
        (lambda t: t.table("speed"), 'pick.toml: step[4].speed: expected a table, got "250 mm/s"'),
        (lambda t: t.tables("row"), "pick.toml: step[4].row[2]: expected a table, got 5"),
        (
            lambda t: t.tables("speed"),
            'pick.toml: step[4].speed: expected a list of tables [[step[4].speed]], got "250 mm/s"',
        ),
        (lambda t: t.named_tables("xyz"), "pick.toml: step[4].xyz: expected a table, got [1, 2]"),
    ],
)
def test_every_getter_names_the_key_and_what_was_expected(call, message):
    assert complaint(lambda: call(Table(DATA, "pick.toml", "step[4]"))) == message


def test_getters_give_si_or_the_default():
    table = Table(DATA, "pick.toml")
    assert table.quantity("speed", "speed") == 0.25
    assert table.quantity("slowness", "speed", None) is None
    assert table.quantity("count", "number", positive=True) == 2.0
    assert table.mixed_vector("joints", ("angle", "length")) == pytest.approx([np.pi / 2, 0.1])
    pose = table.table("pose").pose()
    assert pose == pytest.approx(SE3(1e-3, 20e-3, 3e-3) * SE3.Rz(90, "deg"))
    assert not pose.flags.writeable
    assert table.tables("none") == []
    assert table.named_tables("none") == {}


@pytest.mark.parametrize(
    ("data", "message"),
    [
        ({"rpy": [0, 0, 0]}, 'pick.toml: poses.pick: missing key "xyz"'),
        (
            {"xyz": [0, 0, 0], "quat": [1, 0, 0, 0.01]},
            "pick.toml: poses.pick.quat: expected a quaternion [w, x, y, z] of length 1, got length 1.00005",
        ),
        (
            {"xyz": [0, 0, 0], "quat": [1e300, 1e300, 0, 0]},
            "pick.toml: poses.pick.quat: expected a quaternion [w, x, y, z] of length 1, got length 1.41421356e+300",
        ),
        (
            {"xyz": [0, float("nan"), 0]},
            'pick.toml: poses.pick.xyz[2]: expected a length such as "20 mm", got nan',
        ),
        (
            {"xyz": [0, 0, 0], "quat": [1, 0, 0, float("nan")]},
            'pick.toml: poses.pick.quat[4]: expected a plain number such as "100", got nan',
        ),
        (
            {"xyz": [0, 0, 0], "quat": [1, 0, 0, 0], "rpy": [0, 0, 0]},
            "pick.toml: poses.pick.quat: given together with rpy, expected one of the two",
        ),
    ],
)
def test_what_is_no_pose(data, message):
    assert complaint(Table(data, "pick.toml", "poses.pick").pose) == message


def test_a_quaternion_within_1e_6_of_unit_length_is_taken_and_made_unit():
    pose = Table({"xyz": [0, 0, 0], "quat": [0.6, 0.8000004, 0, 0]}, "pick.toml").pose()
    assert pose[:3, :3] @ pose[:3, :3].T == pytest.approx(np.eye(3), abs=1e-15)


@given(st.tuples(*[st.floats(-7.0, 7.0)] * 3))
def test_rpy_turns_about_the_fixed_axes_x_then_y_then_z(rpy):
    rotation = rotation_from_rpy(np.array(rpy))
    assert rotation == pytest.approx(Rotation.from_euler("xyz", rpy).as_matrix(), abs=1e-14)  # lower case: fixed axes
    assert rotation == pytest.approx(SE3.RPY(*rpy, order="zyx").R, abs=1e-14)  # spatialmath names the order backwards


@given(st.tuples(*[st.floats(-1.0, 1.0)] * 4).filter(lambda q: np.linalg.norm(q) > 0.1))
def test_quaternions_are_w_x_y_z(quaternion):
    unit = np.array(quaternion) / np.linalg.norm(quaternion)
    expected = Rotation.from_quat(unit, scalar_first=True).as_matrix()
    assert rotation_from_quaternion(unit) == pytest.approx(expected, abs=1e-14)


def test_unknown_keys_are_refused_with_the_nearest_known_one():
    table = Table({"blnd": 1, "nonsense": 2}, "pick.toml", "step[4]")
    table.has("blend")
    table.has("motion")
    with pytest.raises(InputError) as caught:
        table.finish()
    assert caught.value.problems == (
        'pick.toml: step[4].blnd: unknown key, did you mean "blend"?',
        'pick.toml: step[4].nonsense: unknown key, expected "blend" or "motion"',
    )
    assert str(caught.value) == caught.value.problems[0] + " (and 1 more problem)"


def test_a_key_that_spoils_the_line_is_shown_on_one_line():
    table = Table({"a\nb": 1}, "pick.toml")
    assert complaint(table.finish) == 'pick.toml: "a\\nb": unknown key'


def test_problems_are_gathered_and_raised_together():
    problems = Problems()
    root = Table({"row": [{"a": 1}, {"a": "x"}, {"a": 2, "b": 3}]}, "pick.toml", problems=problems)
    for row in root.tables("row"):
        with problems.gather():
            row.quantity("a", "number")
            row.finish()
    root.finish()
    with pytest.raises(InputError) as caught:
        problems.check()
    assert caught.value.problems == (
        'pick.toml: row[2].a: expected a plain number such as "100", got "x"',
        'pick.toml: row[3].b: unknown key, expected "a"',
    )


def test_no_problems_no_error():
    Problems().check()
