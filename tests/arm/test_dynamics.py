"""Joint torque against pinocchio and the published Puma 560 values; the robot handed to notebooks."""

import re
from dataclasses import replace

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm, Joint, Link
from pathplan.arm.chain import translation

HEAVY = ["glazer6", "glazer6 stacking", "puma", "heavy gantry"]


def motion(arm, spread, count=60):
    r = np.random.default_rng(6)
    qd, qdd = r.uniform(-2, 2, (2, count, arm.n))
    qd[::5] = 0.0  # at rest there is no friction
    return spread(arm, count), qd, qdd


@pytest.mark.parametrize("name", HEAVY)
def test_torque_agrees_with_pinocchio(name, cast, spread, referee):
    """Rigid bodies, gravity and rotors by pinocchio; friction added by hand."""
    import pinocchio as pin

    arm = cast(name)
    model, data, _ = referee(arm)
    model.armature = np.array([j.gear_ratio**2 * k.rotor_inertia for j, k in zip(arm.joints, arm.links, strict=True)])
    q, qd, qdd = motion(arm, spread)
    viscous = np.array([link.viscous for link in arm.links])
    positive, negative = np.array([link.coulomb for link in arm.links]).T
    friction = viscous * qd + positive * (qd > 0) - negative * (qd < 0)
    expected = np.array([pin.rnea(model, data, *row) for row in zip(q, qd, qdd, strict=True)]) + friction
    np.testing.assert_allclose(arm.torque(q, qd, qdd), expected, rtol=1e-11, atol=1e-11)


def test_links_stated_on_axes_are_moved_rightly(cast, spread):
    """glazer6 written as bare axes with its links stated in base-parallel frames gives the same torques."""
    arm = cast("glazer6 stacking")
    zero = np.zeros(6)
    frames = np.array([arm.base_from_joint(name, zero) for name in arm.joint_names])
    links = [
        replace(link, com=f[:3, :3] @ link.com, inertia=f[:3, :3] @ link.inertia @ f[:3, :3].T)
        for link, f in zip(arm.links, frames, strict=True)
    ]
    flange = frames[-1] @ arm.tip_from_flange
    other = Arm.from_axes(
        "axes", arm.joints, frames[:, :3, 3], frames[:, :3, 2], flange, links=links, tool=arm.tool, payload=arm.payload
    )
    q, qd, qdd = motion(arm, spread)
    np.testing.assert_allclose(other.torque(q, qd, qdd), arm.torque(q, qd, qdd), rtol=1e-11, atol=1e-11)


# Puma 560, the toolbox's DH model, Corke & Armstrong-Helouvry parameters: values computed by
# roboticstoolbox, the rigid-link row also by pinocchio.
PUMA_Q = np.array([[0, np.pi / 4, -np.pi, 0, np.pi / 4, 0]])


def test_puma_gravity_torque(cast):
    zero = np.zeros((1, 6))
    expected = [31.6399, 6.0351, 0.0, 0.0283]
    np.testing.assert_allclose(cast("puma").torque(PUMA_Q, zero, zero)[0, 1:5], expected, atol=5e-5)


def test_puma_with_all_speeds_and_accelerations_one(cast):
    one = np.ones((1, 6))
    expected = [32.4952, 60.8670, 17.7436, 1.4545, 1.2991, 0.7138]
    np.testing.assert_allclose(cast("puma").torque(PUMA_Q, one, one)[0], expected, atol=5e-5)


def test_puma_rigid_links_only(cast):
    puma, one = cast("puma"), np.ones((1, 6))
    rigid = replace(
        puma, links=tuple(replace(k, viscous=0.0, coulomb=(0.0, 0.0), rotor_inertia=0.0) for k in puma.links)
    )
    expected = [1.1780, 35.4606, 6.0971, 0.0005, 0.0351, 0.0002]
    np.testing.assert_allclose(rigid.torque(PUMA_Q, one, one)[0], expected, atol=5e-5)


def test_a_hoist_against_its_closed_form():
    """One vertical prismatic axis: force = (m + G^2 J) a + m g + B v + Coulomb."""
    link = Link(12.0, np.array([0.1, 0, 0]), np.eye(3) * 0.1, viscous=30.0, coulomb=(8.0, 6.0), rotor_inertia=2e-4)
    lift = Joint("lift", "prismatic", (0.0, 1.0), 1.0, 2.0, 20.0, gear_ratio=150.0)
    arm = Arm.from_axes("hoist", [lift], [[0, 0, 0]], [[0, 0, 1]], translation(0, 0, 0.2), links=[link])
    speed, acceleration = np.array([0.5, -0.5, 0.0]), np.array([1.5, 1.5, -1.0])
    expected = (12.0 + 150.0**2 * 2e-4) * acceleration + 12.0 * 9.80665 + 30.0 * speed + np.array([8.0, -6.0, 0.0])
    found = arm.torque(np.full((3, 1), 0.3), speed[:, None], acceleration[:, None])
    np.testing.assert_allclose(found[:, 0], expected, rtol=1e-12)


def test_a_pendulum_against_its_closed_form():
    """One level revolute axis: torque = (I + m l^2) a + m g l sin q from hanging straight down."""
    link = Link(2.0, np.array([0, 0, -0.4]), np.diag([0.05, 0.06, 0.07]))
    swing = Joint("swing", "revolute", (-3.0, 3.0), 1.0, 2.0, 20.0)
    arm = Arm.from_axes("pendulum", [swing], [[0, 0, 0]], [[0, 1, 0]], translation(0, 0, -0.4), links=[link])
    q = np.linspace(-3, 3, 7)[:, None]
    expected = (0.06 + 2.0 * 0.16) * 1.3 + 2.0 * 9.80665 * 0.4 * np.sin(q)
    np.testing.assert_allclose(arm.torque(q, 0 * q, 0 * q + 1.3), expected, rtol=1e-11, atol=1e-12)


def test_a_payload_adds_its_weight(cast):
    """Level forearm: what the tile adds at the elbow is its weight times its lever."""
    q, zero = np.zeros((1, 6)), np.zeros((1, 6))
    bare, held = cast("glazer6").equipped(tool="cup"), cast("glazer6").equipped(tool="cup", payload="tile")
    added = held.torque(q, zero, zero) - bare.torque(q, zero, zero)
    lever = 0.52 + 0.085 + 0.12 + 0.0045  # forearm, mechanical interface, cup, half a tile
    assert added[0, 2] == pytest.approx(-1.2 * 9.80665 * lever, rel=1e-12)  # positive angles lower the hand


def test_the_peak_torques_hold_what_the_arm_carries(cast, spread):
    """Holding the heaviest payload anywhere stays below the continuous torque of every joint."""
    arm = cast("glazer6 stacking")
    q = spread(arm, 4000)
    holding = np.abs(arm.torque(q, 0 * q, 0 * q)).max(axis=0)
    assert (holding < [joint.continuous_torque for joint in arm.joints]).all()


@pytest.mark.parametrize("count", [0, 1, 2])
def test_few_rows_keep_their_shape(count, cast):
    q = np.full((count, 6), 0.3)
    assert cast("glazer6").torque(q, q, q).shape == (count, 6)


@pytest.mark.parametrize(
    ("arrays", "message"),
    [
        ((np.zeros(6),) * 3, "q: expected shape (N, 6), the same N for q, qd and qdd, got (6,)"),
        ((np.zeros((2, 6)), np.zeros((2, 6)), np.zeros((1, 6))), "qdd: expected shape (N, 6), the same N"),
        ((np.zeros((2, 6)), np.full((2, 6), np.nan), np.zeros((2, 6))), "qd: expected finite numbers"),
    ],
)
def test_rows_that_do_not_fit_are_refused(arrays, message, cast):
    with pytest.raises(errors.InputError, match=re.escape(message)):
        cast("glazer6").torque(*arrays)


def test_an_arm_without_masses_has_no_torque(cast):
    q = np.zeros((1, 4))
    with pytest.raises(errors.InputError, match="sorter4: no dynamics: the arm file gives no link masses"):
        cast("sorter4").torque(q, q, q)


def test_the_toolbox_robot_stands_where_the_arm_stands(arm, spread):
    robot = arm.toolbox()
    q = spread(arm, 20)
    for row, pose, jac in zip(q, arm.forward(q), arm.jacobian(q), strict=True):
        np.testing.assert_allclose(robot.fkine(row).A, pose, rtol=0, atol=1e-12)
        np.testing.assert_allclose(robot.jacob0(row), jac, rtol=0, atol=1e-11)
    np.testing.assert_allclose(robot.qlim.T, [joint.position for joint in arm.joints])


@pytest.mark.parametrize("name", ["glazer6 stacking", "puma"])
def test_the_toolbox_robot_carries_the_dynamics(name, cast, spread):
    arm = cast(name)
    q, qd, qdd = motion(arm, spread, 10)
    np.testing.assert_allclose(arm.toolbox().rne(q, qd, qdd), arm.torque(q, qd, qdd), rtol=1e-11, atol=1e-11)


def test_the_toolbox_robot_is_the_users_own(cast):
    """Changing it does not touch what the arm computes with."""
    arm = cast("glazer6").equipped()
    q = np.full((1, 6), 0.2)
    before = arm.torque(q, q, q)
    robot = arm.toolbox()
    robot.links[2].m = 100.0
    np.testing.assert_array_equal(arm.torque(q, q, q), before)
