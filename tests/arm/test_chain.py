"""Ways to write a chain: DH rows of both kinds, axes, and modified DH rows found again from the axes."""

import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm, Joint
from pathplan.arm.chain import DHRow, chain_from_axes, chain_from_dh, rot_x, rot_z, translation
from pathplan.arm.mdh import modified_chain

ROWS = [
    DHRow(0.1, 0.3, 0.2, 0.4),
    DHRow(-0.2, -1.2, 0.3, -0.5),
    DHRow(0.4, np.pi / 2, 0.05, 0.6),
    DHRow(0, 2.0, 0.1, 0),
]
KINDS = "RPRR"


@pytest.mark.parametrize("convention", ["standard", "modified"])
def test_dh_rows_agree_with_the_toolbox(convention):
    import roboticstoolbox as rtb

    words = {"R": "revolute", "P": "prismatic"}
    fixed, axes, tip, joint_from_link = chain_from_dh(ROWS, convention)
    joints = tuple(Joint(f"j{i}", words[k], (-2, 2), 1, 1, 1) for i, k in enumerate(KINDS))
    arm = Arm("rows", joints, fixed, axes, tip)
    turning = rtb.RevoluteDH if convention == "standard" else rtb.RevoluteMDH
    sliding = rtb.PrismaticDH if convention == "standard" else rtb.PrismaticMDH
    links = [
        turning(a=r.a, alpha=r.alpha, d=r.d, offset=r.theta)
        if k == "R"
        else sliding(a=r.a, alpha=r.alpha, theta=r.theta, offset=r.d)
        for r, k in zip(ROWS, KINDS, strict=True)
    ]
    robot = rtb.DHRobot(links)
    for q in np.random.default_rng(0).uniform(-1, 1, (20, 4)):
        np.testing.assert_allclose(arm.forward(q), robot.fkine(q).A, atol=1e-14)
        for i, frame in enumerate(robot.fkine_all(q)[1:]):
            ours = arm.base_from_joint(f"j{i}", q) @ joint_from_link[i]
            np.testing.assert_allclose(ours, frame.A, atol=1e-14)


def test_quarter_turns_are_exact():
    for turn in (rot_x, rot_z):
        for k in range(-4, 5):
            assert set(np.abs(turn(k * np.pi / 2)).ravel()) == {0.0, 1.0}


def test_modified_rows_are_found_again_for_every_arm(arm, spread):
    """base @ A_1(q_1) ... A_n(q_n) @ tool, multiplied out here, is the arm's own forward kinematics."""
    chain = modified_chain(arm)
    for q in spread(arm, 10):
        pose = chain.base
        for row, joint, value in zip(chain.rows, arm.joints, q, strict=True):
            theta, d = (row.theta + value, row.d) if joint.kind == "revolute" else (row.theta, row.d + value)
            pose = pose @ rot_x(row.alpha) @ translation(row.a, 0, 0) @ rot_z(theta) @ translation(0, 0, d)
        np.testing.assert_allclose(pose @ chain.tool, arm.forward(q), rtol=0, atol=1e-12)


@pytest.mark.parametrize("angle", [1e-3, 1e-6, 1e-7, 1e-9])
def test_modified_rows_of_nearly_parallel_axes(angle):
    """The common normal of nearly parallel axes lies far away: below 1e-8 they count as parallel."""
    axes = [[0, 0, 1], [0, np.sin(angle), np.cos(angle)]]
    joints = [Joint("a", "revolute", (-2, 2), 1, 1, 1), Joint("b", "revolute", (-2, 2), 1, 1, 1)]
    arm = Arm.from_axes("near", joints, [[0, 0, 0], [0, 0.5, 0]], axes, translation(0, 1, 0))
    chain = modified_chain(arm)
    q = [0.4, 0.7]
    pose = chain.base
    for row, value in zip(chain.rows, q, strict=True):
        pose = pose @ rot_x(row.alpha) @ translation(row.a, 0, 0) @ rot_z(row.theta + value) @ translation(0, 0, row.d)
    np.testing.assert_allclose(pose @ chain.tool, arm.forward(q), rtol=0, atol=3e-8)


def test_a_chain_from_axes_stands_where_it_was_told():
    flange = translation(0.5, 0.2, 0.3) @ rot_x(0.4)
    arm = Arm.from_axes(
        "two",
        [Joint(n, "revolute", (-1, 1), 1, 1, 1) for n in "ab"],
        [[0, 0, 1], [0.2, 0, 1]],
        [[0, 0, 2], [0, 3, 4]],
        flange,
    )
    np.testing.assert_allclose(arm.forward([0, 0]), flange, atol=1e-15)
    np.testing.assert_allclose(arm.axes[1], [0, 0.6, 0.8], atol=1e-15)


def test_a_tree_moves_only_with_the_joints_below_its_tip(spread):
    """A turntable beside a two-joint arm: its own frame turns, the tool does not care."""
    joints = tuple(Joint(n, "revolute", (-2, 2), 1, 1, 1) for n in ("table", "a", "b"))
    fixed = np.array([translation(2, 0, 0), np.eye(4), translation(0.5, 0, 0)])
    arm = Arm("tree", joints, fixed, np.tile([0, 0, 1.0], (3, 1)), translation(0.4, 0, 0), parents=(-1, -1, 1), tip=2)
    q = np.array([0.7, 0.2, 0.3])
    assert (arm.jacobian(q)[:, 0] == 0).all()
    assert arm.forward(q)[0, 3] == pytest.approx(0.5 * np.cos(0.2) + 0.4 * np.cos(0.5))
    np.testing.assert_allclose(arm.base_from_joint("table", q), translation(2, 0, 0) @ rot_z(0.7), atol=1e-15)
    assert arm.structure == "general"
    with pytest.raises(errors.InputError, match="tree: expected a single chain from base to tip, the arm branches"):
        arm.toolbox()


@pytest.mark.parametrize(
    ("origins", "axes", "message"),
    [
        (np.zeros((2, 3)), np.zeros((3, 3)), "expected origins and axes of one shape (n, 3), got (2, 3) and (3, 3)"),
        (np.zeros((1, 3)), np.zeros((1, 3)), "expected axes that are not zero"),
    ],
)
def test_axes_that_are_none(origins, axes, message):
    with pytest.raises(errors.InputError, match=re.escape(message)):
        chain_from_axes(origins, axes, np.eye(4))
