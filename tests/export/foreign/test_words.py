"""What names of columns say."""

import math

import pytest

from pathplan.export.foreign.words import meaning_of, unit_of, unit_split

JOINTS = ("base", "upper arm", "x")
DEG = math.pi / 180


@pytest.mark.parametrize(
    ("text", "dimension", "order", "size"),
    [
        ("deg", "angle", 0, DEG),
        ("°", "angle", 0, DEG),
        ("Degrees", "angle", 0, DEG),
        ("rad/s", "angle", 1, 1.0),
        ("deg_s", "angle", 1, DEG),
        ("deg/s^2", "angle", 2, DEG),
        ("deg/s²", "angle", 2, DEG),
        ("rad_s3", "angle", 3, 1.0),
        ("°/s**3", "angle", 3, DEG),
        (" mm ", "length", 0, 1e-3),
        ("m/s", "length", 1, 1.0),
        ("cm", "length", 0, 1e-2),
        ("ms", "time", 0, 1e-3),
        ("s", "time", 0, 1.0),
        ("µs", "time", 0, 1e-6),
        ("μs", "time", 0, 1e-6),
        ("Nm", "torque", 0, 1.0),
        ("N m", "torque", 0, 1.0),
        ("kN", "force", 0, 1e3),
    ],
)
def test_units(text, dimension, order, size):
    unit = unit_of(text)
    assert (unit.dimension, unit.order, unit.size) == (dimension, order, pytest.approx(size, rel=1e-15))


@pytest.mark.parametrize("text", ["", "base", "deg s", "s2", "deg/min", "inch", "mm/s4", "1", "degree_s_s", "m_"])
def test_what_is_no_unit(text):
    assert unit_of(text) is None


@pytest.mark.parametrize(
    ("name", "stem", "unit"),
    [
        ("base_deg", "base", "deg"),
        ("base_deg_s2", "base", "deg_s2"),
        ("t[s]", "t", "s"),
        ("A1 (deg/s)", "A1", "deg/s"),
        ("A1/deg", "A1", "deg"),
        ("v/deg/s", "v", "deg/s"),
        ("A1 deg", "A1", "deg"),
        ("upper_arm_mm", "upper_arm", "mm"),
        ("base", "base", None),
        ("q[1]", "q[1]", None),
        ("status (ok)", "status (ok)", None),
    ],
)
def test_a_name_and_its_unit(name, stem, unit):
    found = unit_split(name)
    assert found[0] == stem and (found[1].text if found[1] else None) == unit


@pytest.mark.parametrize(
    ("name", "field", "joint", "number", "unit"),
    [
        ("base", "", 0, None, None),
        ("BASE_deg", "position", 0, None, "deg"),
        ("upper arm [deg/s]", "velocity", 1, None, "deg/s"),
        ("upper_arm_velocity", "velocity", 1, None, None),
        ("velocity_upper_arm", "velocity", 1, None, None),
        ("pos.base (rad)", "position", 0, None, "rad"),
        ("base acceleration [rad/s^2]", "acceleration", 0, None, "rad/s^2"),
        ("jerk base", "jerk", 0, None, None),
        ("base_Nm", "torque", 0, None, "Nm"),
        ("tau_base", "torque", 0, None, None),
        ("x", "", 2, None, None),
        ("x_m_s2", "acceleration", 2, None, "m_s2"),
        ("q1", "", None, 1, None),
        ("q0[deg]", "position", None, 0, "deg"),
        ("qd3 (rad/s)", "velocity", None, 3, "rad/s"),
        ("qdd_2", "acceleration", None, 2, None),
        ("joint_3_deg", "position", None, 3, "deg"),
        ("Axis 2 velocity", "velocity", None, 2, None),
        ("velocity_2", "velocity", None, 2, None),
        ("j1_deg", "position", None, 1, "deg"),
        ("position[4]", "position", None, 4, None),
        ("q_rad[2]", "position", None, 2, "rad"),
        ("qd[2]", "velocity", None, 2, None),
        ("time", "time", None, None, None),
        ("Time [ms]", "time", None, None, "ms"),
        ("t_s", "time", None, None, "s"),
        ("timestamp", "time", None, None, None),
        ("step", "step", None, None, None),
    ],
)
def test_meanings(name, field, joint, number, unit):
    found = meaning_of(name, JOINTS)
    assert (found.field, found.joint, found.number) == (field, joint, number)
    assert (found.unit.text if found.unit else None) == unit


@pytest.mark.parametrize(
    "name", ["", "status", "A1", "tcp_x_mm", "t_deg", "velocity", "base2", "temperature_base", "data[3]", "qx", "[]"]
)
def test_what_means_nothing(name):
    assert meaning_of(name, JOINTS) is None


def test_a_joint_called_like_a_quantity_with_its_unit():
    """The joint's own name stands before what its end could mean."""
    assert meaning_of("arm_m", ("arm_m", "arm")).joint == 0
    assert meaning_of("t", ("t",)).joint == 0
