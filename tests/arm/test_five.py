"""Five axes: solved as six of which one stays at zero, or by search; what they serve."""

import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm
from pathplan.arm.chain import DHRow, rot_x, translation
from tests.arm.structures import from_lines, from_rows

Q = np.pi / 2


def arm_with_roll() -> Arm:
    """Turning base, three parallel axes, roll."""
    rows = [DHRow(0.05, Q, 0.3), DHRow(0.4), DHRow(0.35), DHRow(0, Q), DHRow(0, 0, 0.15)]
    return from_rows("five", rows, kinds="RRRRR")


def gantry_with_two_turns() -> Arm:
    points = [[0, 0, 2], [0, 0, 2], [0, 0, 1.8], [0, 0, 1.5], [0, 0, 1.4]]
    axes = [[1, 0, 0], [0, 1, 0], [0, 0, 1], [0, 0, 1], [0, 1, 0]]
    return from_lines("gantry with two turns", points, axes, translation(0.1, 0, 1.2), "PPPRR")


def skew_five() -> Arm:
    rows = [DHRow(0.05, 1.2, 0.3), DHRow(0.4, 0.3), DHRow(0.35, -0.7, 0.1), DHRow(0.1, Q, 0.2), DHRow(0.07, 0.3, 0.15)]
    return from_rows("skew five", rows, kinds="RRRRR")


@pytest.mark.parametrize(
    ("make", "structure", "branches"),
    [
        (arm_with_roll, "spherical wrist", {2, 4}),
        (gantry_with_two_turns, "spherical wrist", {1}),
        (skew_five, "general", {1}),
    ],
)
def test_poses_that_five_axes_reach(make, structure, branches):
    arm = make()
    assert arm.structure == structure
    q = np.random.default_rng(1).uniform(-2, 2, (20, 5)) * [1 if j.kind == "revolute" else 0.2 for j in arm.joints]
    found = arm.inverse_batch(arm.forward(q))
    gap = np.abs(found.q - q[:, None])
    turning = [joint.kind == "revolute" for joint in arm.joints]
    gap[..., turning] = np.abs((gap[..., turning] + np.pi) % (2 * np.pi) - np.pi)
    assert np.where(found.valid, gap.max(axis=2), np.inf).min(axis=1).max() < 1e-6
    assert set(found.valid.sum(axis=1)) <= branches
    assert found.position_error[found.valid].max() < 1e-9


@pytest.mark.parametrize("make", [arm_with_roll, gantry_with_two_turns])
def test_a_tilt_within_the_tolerance_does_not_move_the_tool(make):
    arm = make()
    pose = arm.forward(np.array([0.3, 0.4, -0.2, 0.5, 0.6]) * 0.4)
    pose[:3, :3] = pose[:3, :3] @ rot_x(np.deg2rad(0.0009))[:3, :3]
    found = arm.inverse_batch(pose[None])
    assert found.valid.any()
    assert found.position_error[found.valid].max() < 1e-10
    assert found.angle_error[found.valid].max() < np.deg2rad(0.001)


def test_what_five_axes_can_not_serve_is_refused_with_what_they_do():
    arm = gantry_with_two_turns()
    pose = arm.forward(np.full(5, 0.1))
    pose[:3, :3] = pose[:3, :3] @ rot_x(0.2)[:3, :3]
    message = (
        "gantry with two turns: the pose is out of reach (an arm with 5 axes can't serve every pose; it serves "
        "places and directions of the tool's z axis, with a roll that follows): the nearest answer is off by "
    )
    with pytest.raises(errors.UnreachableError, match=re.escape(message)):
        arm.inverse(pose)
    assert not arm_with_roll().serves_pointing  # its roll turns about the tool's own axis
    message = "it serves z): the nearest answer is off by"
    pose = arm_with_roll().forward(np.full(5, 0.3))
    pose[:3, :3] = rot_x(0.2)[:3, :3] @ pose[:3, :3]
    with pytest.raises(errors.UnreachableError, match=re.escape(message)):
        arm_with_roll().inverse(pose)
