"""Arm files: what they mean, and one clear line for everything that is wrong with one."""

# ruff: noqa: E501  (messages are tested whole, on one line)

import hashlib
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan import errors
from pathplan.arm import load_arm

ROBOTS = Path(__file__).parents[2] / "robots"

TWO = """\
name = "two"
title = "Two joints"

[base]
xyz = [0, 0, 500]

[mechanical_interface]
xyz = [300, 0, 100]

[[joint]]
name = "turn"
kind = "revolute"
origin = [0, 0, 100]
axis = [0, 0, 1]
position = [-170, 170]
velocity = 180
acceleration = "10 rad/s^2"
jerk = 6000
torque = 40
continuous_torque = 15
gear_ratio = -80
encoder_counts = 131072
mass = 4
com = [100, 0, 0]
inertia = [0.02, 0.05, 0.05, 0.001, 0, -0.001]
viscous_friction = 1.5
coulomb_friction = [2, 3]
rotor_inertia = "20 kg mm^2"

[[joint]]
name = "slide"
kind = "prismatic"
origin = [300, 0, 100]
axis = [2, 0, 0]
position = "unlimited"
velocity = 500
acceleration = 2000
jerk = 20000
mass = "800 g"

[tools.cup]
xyz = [0, 0, 50]
quat = [0, 1, 0, 0]
mass = 0.3
com = [0, 0, -20]
speed = 400
acceleration = "3 m/s^2"
turning_speed = 90

[payloads.tile]
mass = 1.2
inertia = [0.004, 0.009, 0.013]

[positions]
home = [90, 20]
aside = ["0.5 rad", -10]

[[limit]]
name = "spline"
kind = "revolute"
row = [1, 18]
position = [-400, 500]
velocity = [-900, 1000]
acceleration = 8000
"""


@pytest.fixture
def write(tmp_path):
    def write_file(text: str, name: str = "two.toml") -> Path:
        path = tmp_path / name
        path.write_text(text)
        return path

    return write_file


def test_everything_in_a_file_arrives_in_si(write):
    arm = load_arm(write(TWO))
    turn, slide = arm.joints
    assert (arm.name, arm.title, arm.structure) == ("two", "Two joints", "general")
    assert turn.position == pytest.approx(np.deg2rad([-170, 170]))
    assert (turn.velocity, turn.acceleration, turn.jerk) == pytest.approx((np.pi, 10.0, np.deg2rad(6000)))
    assert (turn.torque, turn.continuous_torque) == (40.0, 15.0)
    assert (turn.gear_ratio, turn.encoder_counts) == (-80.0, 131072)
    assert (turn.torque_corner, turn.torque_at_velocity) == (None, None)
    assert slide.position == (-np.inf, np.inf)
    assert (slide.velocity, slide.acceleration, slide.jerk, slide.torque) == (0.5, 2.0, 20.0, None)
    link = arm.links[0]
    assert (link.mass, link.viscous, link.coulomb) == (4.0, 1.5, (2.0, 3.0))
    assert link.rotor_inertia == pytest.approx(20e-6)
    np.testing.assert_allclose(link.com, [0.1, 0, 0])
    np.testing.assert_allclose(link.inertia, [[0.02, 0.001, 0], [0.001, 0.05, -0.001], [0, -0.001, 0.05]])
    assert arm.links[1].mass == pytest.approx(0.8)
    cup, tile = arm.tools["cup"], arm.payloads["tile"]
    assert (cup.mass, cup.speed, cup.acceleration, cup.turning_speed) == (0.3, 0.4, 3.0, pytest.approx(np.pi / 2))
    np.testing.assert_allclose(cup.flange_from_tool[:3], [[1, 0, 0, 0], [0, -1, 0, 0], [0, 0, -1, 0.05]], atol=1e-15)
    assert tile.mass == 1.2
    np.testing.assert_allclose(arm.positions["home"], [np.pi / 2, 0.02])
    np.testing.assert_allclose(arm.positions["aside"], [0.5, -0.01])
    np.testing.assert_allclose(arm.gravity, [0, 0, -9.80665])
    assert (arm.tool.name, arm.payload) == ("none", None)
    # base 500 mm up; the tool of the turned, slid arm
    np.testing.assert_allclose(arm.forward(arm.positions["home"])[:3, 3], [0, 0.32, 0.6], atol=1e-12)
    assert arm.sources == {"two.toml": hashlib.sha256(TWO.encode()).hexdigest()}


def test_peak_torque_that_falls_with_speed(write):
    text = TWO.replace("gear_ratio = -80", "torque_corner_speed = 90\ntorque_at_velocity = 20")
    arm = load_arm(
        write(
            text.replace(
                "jerk = 20000", 'jerk = 20000\ntorque = 30\ntorque_corner_speed = 100\ntorque_at_velocity = "0.01 kN"'
            )
        )
    )
    first, second = arm.joints
    assert (first.torque, first.torque_corner, first.torque_at_velocity) == (40.0, pytest.approx(np.pi / 2), 20.0)
    assert (second.torque, second.torque_corner, second.torque_at_velocity) == (30.0, pytest.approx(0.1), 10.0)


def test_the_example_at_the_head_of_the_loader_is_a_good_file(write):
    from textwrap import dedent

    import pathplan.arm.load

    text = pathplan.arm.load.__doc__.split("\n\n", 1)[1].split("Link data are stated")[0]
    arm = load_arm(write(dedent(text)))
    assert (arm.name, arm.n, arm.tools["cup"].speed) == ("lifter", 2, 0.8)
    np.testing.assert_allclose(arm.forward(arm.positions["home"])[:3, 3], [0.5, 0, 0.3 + 0.4 - 0.1 - 0.02], atol=1e-12)


def test_extra_limit_rows(write):
    """18 deg of the spline per mm of the slide are 18 * pi / 180 * 1000 rad per m."""
    limits = load_arm(write(TWO)).limits
    assert limits.names == ("turn", "slide", "spline")
    np.testing.assert_allclose(limits.matrix, [[1, 0], [0, 1], [1, np.deg2rad(18.0) * 1e3]])
    np.testing.assert_allclose(limits.position[2], np.deg2rad([-400, 500]))
    np.testing.assert_allclose(limits.velocity[2], np.deg2rad([-900, 1000]))
    np.testing.assert_allclose(limits.acceleration[2], np.deg2rad([-8000, 8000]))
    np.testing.assert_array_equal(limits.jerk[2], [-np.inf, np.inf])
    np.testing.assert_array_equal(limits.torque, [[-40, 40], [-np.inf, np.inf], [-np.inf, np.inf]])
    np.testing.assert_allclose(limits.velocity[:2], [[-np.pi, np.pi], [-0.5, 0.5]])


@pytest.mark.parametrize("name", ["loader4", "sorter4", "glazer6", "stacker6", "stacker7", "stacker6-pallet"])
def test_the_robots_of_the_project(name):
    arm = load_arm(ROBOTS / f"{name}.toml")
    assert arm.name == name and arm.warnings == ()
    for joint in arm.joints:
        assert joint.position[0] < joint.position[1]
        # at its limits a joint gets up to speed within half a second, and to full acceleration within 0.2 s
        assert joint.velocity / joint.acceleration <= 0.5
        assert joint.acceleration / joint.jerk < 0.2
    held = [arm.joint_names.index(joint) for joint in arm.free_joints]
    for position in arm.positions.values():
        pose = arm.forward(position)
        if held:
            answers = arm.inverse_free(pose[None], held, position[None, held]).q[0, 0]
        else:
            answers = arm.inverse(pose, outside=position)
        assert np.abs(answers - position).max(axis=1).min() < 1e-9
    assert (arm.links is not None) == (name not in ("loader4", "sorter4"))
    assert len(arm.tools) >= 1 and {"tile", "box"} & set(arm.payloads)


WRONG = [
    ('name = "two"', 'nmae = "two"', 'missing key "name" (is "nmae" meant for it?)'),
    ("[base]\nxyz", "[base]\nxzy", 'base.xzy: unknown key, did you mean "xyz"?'),
    ("velocity = 180", "velocty = 180", 'joint[1]: missing key "velocity" (is "velocty" meant for it?)'),
    ("torque = 40", "torqe = 40", 'joint[1].torqe: unknown key, did you mean "torque"?'),
    (
        "velocity = 180",
        "velocity = 0",
        'joint[1].velocity: expected an angular speed above zero such as "180 deg/s", got 0',
    ),
    (
        "velocity = 500",
        "velocity = -500",
        'joint[2].velocity: expected a speed above zero such as "250 mm/s", got -500',
    ),
    ("velocity = 500", "velocity = nan", 'joint[2].velocity: expected a speed such as "250 mm/s", got nan'),
    (
        "velocity = 500",
        'velocity = "500 deg/s"',
        'joint[2].velocity: expected a speed such as "250 mm/s", got "500 deg/s"',
    ),
    (
        "velocity = 500",
        "velocity = 1e-9",
        'joint[2].velocity: expected a speed such as "250 mm/s", got 1e-09: no machine has it',
    ),
    ("jerk = 20000", "jerk = 0", 'joint[2].jerk: expected a jerk above zero such as "20000 mm/s^3", got 0'),
    (
        '"10 rad/s^2"',
        "0",
        'joint[1].acceleration: expected an angular acceleration above zero such as "600 deg/s^2", got 0',
    ),
    ("[-170, 170]", "[170, -170]", "joint[1].position: low 170 deg is not below high -170 deg"),
    ("[-170, 170]", "[170, 170]", "joint[1].position: low 170 deg is not below high 170 deg"),
    ("[-170, 170]", "[-170]", "joint[1].position: expected a list of 2 quantities, got 1 of them"),
    ('"unlimited"', '"free"', 'joint[2].position: expected [low, high] or "unlimited", got "free"'),
    ("[-170, 170]", "[-1e9, 170]", "joint[1].position: expected at most 1000 m or rad, got [-1000000000.0, 170]"),
    (
        'kind = "prismatic"\norigin',
        'kind = "prizmatic"\norigin',
        'joint[2].kind: expected "revolute" or "prismatic", got "prizmatic", did you mean "prismatic"?',
    ),
    ("axis = [2, 0, 0]", "axis = [0, 0, 0]", "joint[2].axis: expected a direction [x, y, z], got [0, 0, 0]"),
    (
        "axis = [2, 0, 0]",
        "dh = { a = 0 }",
        'joint[2].dh: given without dh = "standard" or "modified" at the top of the file',
    ),
    ('title = "Two joints"', 'dh = "modified"', 'joint[1].axis: given in a file of DH rows, expected "dh" instead'),
    ('title = "Two joints"', 'dh = "craig"', 'dh: expected "standard" or "modified", got "craig"'),
    ("mass = 4", "mass = -4", 'joint[1].mass: expected a mass of zero or more such as "1.2 kg", got -4'),
    ("mass = 4\n", "", 'joint[1]: missing key "mass": other joints have one'),
    (
        "0.05, 0.05, 0.001",
        "0.05, 0.09, 0.001",
        "joint[1].inertia: no body has principal moments 0.01997, 0.05001, 0.09002 kg m^2, one is above the sum of the other two",
    ),
    (
        "0.02, 0.05, 0.05, 0.001",
        "-0.02, 0.05, 0.05, 0.001",
        "joint[1].inertia: no body has principal moments -0.02001, 0.04901, 0.05101 kg m^2, one is above",
    ),
    (
        "0.001, 0, -0.001]",
        "0.001]",
        "joint[1].inertia: expected [xx, yy, zz] or [xx, yy, zz, xy, xz, yz] in kg m^2, got [0.02, 0.05, 0.05, 0.001]",
    ),
    (
        "continuous_torque = 15",
        "continuous_torque = 45",
        "joint[1].continuous_torque: 45 N m is above torque (its peak) 40 N m",
    ),
    (
        "gear_ratio = -80",
        "torque_corner_speed = 180\ntorque_at_velocity = 20",
        "joint[1].torque_corner_speed: 180 deg/s is not below velocity 180 deg/s",
    ),
    (
        "gear_ratio = -80",
        "torque_corner_speed = 0\ntorque_at_velocity = 20",
        'joint[1].torque_corner_speed: expected an angular speed above zero such as "180 deg/s", got 0',
    ),
    (
        "gear_ratio = -80",
        "torque_corner_speed = 90\ntorque_at_velocity = 41",
        "joint[1].torque_at_velocity: 41 N m is above torque (its peak) 40 N m",
    ),
    (
        "gear_ratio = -80",
        "torque_corner_speed = 90\ntorque_at_velocity = 0",
        'joint[1].torque_at_velocity: expected a torque above zero such as "50 N m", got 0',
    ),
    (
        "gear_ratio = -80",
        "torque_corner_speed = 90",
        'joint[1]: missing key "torque_at_velocity": "torque_corner_speed" needs it',
    ),
    (
        "gear_ratio = -80",
        "torque_at_velocity = 20",
        'joint[1]: missing key "torque_corner_speed": "torque_at_velocity" needs it',
    ),
    (
        "torque = 40\n",
        "torque_corner_speed = 90\ntorque_at_velocity = 20\n",
        'joint[1]: missing key "torque": "torque_corner_speed" needs it',
    ),
    ("gear_ratio = -80", "gear_ratio = 0", "joint[1].gear_ratio: expected a ratio such as 100, got 0"),
    (
        "encoder_counts = 131072",
        "encoder_counts = 0.5",
        "joint[1].encoder_counts: expected a whole number from 1 to 1099511627776, got 0.5",
    ),
    (
        "coulomb_friction = [2, 3]",
        "coulomb_friction = [2, -3]",
        "joint[1].coulomb_friction: expected values of zero or more, got [2, -3]",
    ),
    (
        "viscous_friction = 1.5",
        "viscous_friction = -1.5",
        "joint[1].viscous_friction: expected a viscous friction of zero or more",
    ),
    (
        "quat = [0, 1, 0, 0]",
        "quat = [0, 1, 0, 0.1]",
        "tools.cup.quat: expected a quaternion [w, x, y, z] of length 1, got length 1.00498756",
    ),
    ("speed = 400", "sped = 400", 'tools.cup.sped: unknown key, did you mean "speed"?'),
    ("mass = 1.2\n", "", 'payloads.tile: missing key "mass"'),
    ("home = [90, 20]", "home = [90, nan]", 'positions.home[2]: expected a length such as "20 mm", got nan'),
    ("home = [90, 20]", "home = [90]", "positions.home: expected a list of 2 joint positions, got 1 of them"),
    (
        "home = [90, 20]",
        "home = [190, 20]",
        "positions.home: turn at 190 deg is outside its limits, -170 deg to 170 deg",
    ),
    (
        "home = [90, 20]",
        "home = [90, 1e308]",
        "positions.home: slide at 1e+308 mm is outside its limits, -1000000 mm to 1000000 mm",
    ),
    ("home = [90, 20]", "hom = [90, 20]", 'positions: missing key "home" (is "hom" meant for it?)'),
    ('name = "slide"', 'name = "turn"', 'joint[2].name: "turn" is taken already'),
    ('name = "spline"', 'name = "slide"', 'limit[1].name: "slide" is taken already'),
    ("row = [1, 18]", "row = [1]", "limit[1].row: expected a list of 2 quantities, got 1 of them"),
    ("row = [1, 18]", "row = [0, 0]", "limit[1].row: expected a coefficient for each joint, not all zero, got [0, 0]"),
    ('kind = "revolute"\nrow', "row", 'limit[1]: missing key "kind"'),
    (
        "velocity = [-900, 1000]",
        "velocity = [900, 1000]",
        "limit[1].velocity: expected [low below zero, high above zero], got [900, 1000]",
    ),
    ("[payloads.tile]", "[payload.tile]", 'payload: unknown key, did you mean "payloads"?'),
]


@pytest.mark.parametrize(("old", "new", "complaint"), WRONG)
def test_what_is_wrong_is_said_in_one_line(old, new, complaint, write):
    assert old in TWO
    with pytest.raises(errors.InputError) as caught:
        load_arm(write(TWO.replace(old, new, 1)))
    assert str(caught.value).startswith("two.toml: " + complaint)
    assert "\n" not in str(caught.value)


def test_too_many_turns_are_refused(write):
    text = TWO.replace("[-170, 170]", '["-999 rad", "999 rad"]')
    second = text.replace('kind = "prismatic"', 'kind = "revolute"').replace('"unlimited"', '["-999 rad", "999 rad"]')
    with pytest.raises(errors.InputError) as caught:
        load_arm(write(second))
    assert "position limits allow 1.01e+05 combinations of whole turns, at most 20000" in str(caught.value)


def test_gravity_is_a_vector_of_accelerations(write):
    arm = load_arm(write(TWO.replace("[base]", "gravity = [0, 0, -1.62]\n[base]")))
    np.testing.assert_array_equal(arm.gravity, [0, 0, -1.62])
    with pytest.raises(
        errors.InputError, match=re.escape("two.toml: gravity: expected at most 1000 m/s^2, got [0, 0, -9810]")
    ):
        load_arm(write(TWO.replace("[base]", "gravity = [0, 0, -9810]\n[base]")))


def test_link_data_without_a_mass(write):
    text = TWO.replace("mass = 4\n", "").replace('mass = "800 g"\n', "")
    with pytest.raises(errors.InputError, match=re.escape('two.toml: joint[1]: missing key "mass": "com" needs it')):
        load_arm(write(text))


def test_a_torque_limit_without_link_masses(write):
    text = (ROBOTS / "sorter4.toml").read_text()
    jerk = next(line for line in text.splitlines() if line.startswith("jerk"))
    message = re.escape('arm.toml: joint[1]: missing key "mass": "torque" needs it')
    with pytest.raises(errors.InputError, match=message):
        load_arm(write(text.replace(jerk, f"{jerk}\ntorque = 30", 1), "arm.toml"))


def test_a_limit_row_that_limits_nothing(write):
    text = TWO[: TWO.index("position = [-400")]
    message = "two.toml: limit[1]: limits nothing, expected position, velocity, acceleration or jerk"
    with pytest.raises(errors.InputError, match=re.escape(message)):
        load_arm(write(text))


def test_several_problems_are_gathered(write):
    text = (
        TWO.replace("velocity = 180", "velocity = 0")
        .replace("jerk = 20000", "jerk = -1")
        .replace("mass = 1.2", "mass = -1")
    )
    with pytest.raises(errors.InputError) as caught:
        load_arm(write(text))
    assert str(caught.value).endswith("got 0 (and 2 more problems)")
    assert [problem.split(":")[1].strip() for problem in caught.value.problems] == [
        "joint[1].velocity",
        "joint[2].jerk",
        "payloads.tile.mass",
    ]


def test_files_that_are_none(tmp_path, write):
    with pytest.raises(errors.InputError, match=re.escape(f"{tmp_path / 'gone.toml'}: no such file")):
        load_arm(tmp_path / "gone.toml")
    with pytest.raises(errors.InputError, match=re.escape(f"{tmp_path}: is a directory, expected a TOML file")):
        load_arm(tmp_path)
    with pytest.raises(errors.InputError, match=re.escape("two.toml: line 1: not TOML: ")):
        load_arm(write("<robot/>"))
    with pytest.raises(errors.InputError, match=re.escape('two.toml: missing key "joint"')):
        load_arm(write('name = "two"\n'))


def test_joints_of_an_absurd_number_are_refused(write):
    row = '[[joint]]\nname = "{}"\n'
    text = 'name = "many"\n' + "".join(row.format(i) for i in range(33))
    with pytest.raises(
        errors.InputError, match=re.escape("two.toml: joint: expected 1 to 32 tables [[joint]], got 33")
    ):
        load_arm(write(text))


def test_standard_dh_rows_state_links_in_their_own_frames(tmp_path):
    """A standard DH row's frame is the end of the link: the same bodies as the Puma model's of the
    toolbox.
    """
    text = """\
name = "standard"
dh = "standard"
[[joint]]
name = "a"
kind = "revolute"
dh = { a = 400, alpha = 90 }
position = [-90, 90]
velocity = 1
acceleration = 1
jerk = 1
mass = 2
com = [-100, 20, 30]
[positions]
home = [0]
"""
    path = tmp_path / "standard.toml"
    path.write_text(text)
    arm = load_arm(path)
    # Rz(0) Tx(0.4) Rx(90 deg): y of the row's frame points up, z to -y
    np.testing.assert_allclose(arm.links[0].com, [0.3, -0.03, 0.02], atol=1e-15)
    np.testing.assert_allclose(arm.forward([0.0])[:3, 3], [0.4, 0, 0], atol=1e-15)


SCRAPS = st.sampled_from(
    [
        "",
        "nan",
        "inf",
        "-1",
        "0",
        "1e308",
        "1e-308",
        '"3 deg"',
        "[]",
        "{}",
        "true",
        "[[joint]]",
        "9" * 400,
        "'",
        "\n",
        "=",
    ]
)


@settings(max_examples=150, deadline=None)
@given(st.sampled_from(["loader4", "sorter4", "glazer6", "two"]), st.integers(0, 10_000), st.integers(0, 12), SCRAPS)
def test_a_damaged_file_never_ends_in_a_traceback(tmp_path_factory, name, at, cut, scrap):
    text = TWO if name == "two" else (ROBOTS / f"{name}.toml").read_text()
    at %= len(text)
    path = tmp_path_factory.getbasetemp() / "damaged.toml"
    path.write_text(text[:at] + scrap + text[at + cut :])
    try:
        arm = load_arm(path)
    except errors.InputError as error:
        assert str(error).startswith("damaged.toml: ") and "\n" not in str(error)
    else:
        assert np.isfinite(arm.forward(arm.positions["home"])).all()
        assert np.isfinite(arm.jacobian(arm.positions["home"])).all()
