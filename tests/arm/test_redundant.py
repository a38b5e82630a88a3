"""More axes than a pose asks for: joints held at given values, a workpiece that turns, a tool that may roll."""

import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm
from pathplan.arm.chain import rot_z
from tests.arm.structures import loaded, on_track, seven, with_turntable

TURN = 2 * np.pi


def turned_apart(q, other):
    return np.abs((q - other + np.pi) % TURN - np.pi)


def check_round_trip(arm: Arm, held: list[str], q: np.ndarray) -> None:
    """Held at the values they came from, the other joints are found again; every answer stands at its pose."""
    joints = [arm.joint_names.index(name) for name in held]
    poses = arm.forward(q)
    branches = arm.inverse_free(poses, held, q[:, None, joints])
    assert branches.q.shape[:2] == (len(q), 1)
    np.testing.assert_array_equal(
        branches.q[..., joints], np.broadcast_to(q[:, None, None, joints], branches.q[..., joints].shape)
    )
    gap = np.where(branches.valid, turned_apart(branches.q, q[:, None, None]).max(axis=-1), np.inf)
    assert gap.min(axis=2).max() < 1e-6
    reached = arm.forward(branches.q)[branches.valid]
    asked = np.broadcast_to(poses[:, None, None], (*branches.valid.shape, 4, 4))[branches.valid]
    assert np.abs(reached - asked).max() < 1e-9


@pytest.mark.parametrize("joint", ["j1", "j2", "j3", "j5", "j6", "j7"])
def test_any_joint_of_a_seven_axis_arm_may_be_held(joint):
    """But the elbow, which alone sets how far the wrist is from the shoulder."""
    arm = seven()
    q = np.random.default_rng(1).uniform(-2.5, 2.5, (12, 7))
    check_round_trip(arm, [joint], q)


def test_suggestions_and_what_they_leave():
    arm = seven()
    assert arm.free_joints == ("j3",)
    assert arm.free_solver("j3").typical.steady
    track = on_track(loaded("glazer6"))
    assert track.free_joints == ("track",)
    assert track.free_solver("track").typical.structure == "spherical wrist"
    assert loaded("glazer6").free_joints == ()
    both = on_track(seven())
    assert both.free_joints == ("track", "j3")
    q = np.random.default_rng(1).uniform(-1.2, 1.2, (6, 8))
    check_round_trip(both, ["track", "j3"], q)
    check_round_trip(both, ["j3", "track"], q)


def test_values_for_all_poses_and_for_each():
    arm = seven()
    q = np.random.default_rng(2).uniform(-2, 2, (5, 7))
    poses, values = arm.forward(q), np.linspace(-1, 1, 4)
    every = arm.inverse_free(poses, "j3", values)
    assert every.q.shape == (5, 4, 8, 7) and every.valid.shape == (5, 4, 8)
    np.testing.assert_array_equal(every.q[:, 2, :, 2], values[2])
    one = arm.inverse_free(poses, 2, values[2:3])
    np.testing.assert_allclose(one.q[:, 0], every.q[:, 2], atol=1e-12)
    each = arm.inverse_free(poses, ["j3"], np.tile(values[:, None], (5, 1, 1)))
    np.testing.assert_allclose(each.q, every.q, atol=1e-12)
    assert not every.q.flags.writeable
    assert every.labels == ({"joint 4": "positive", "joint 2": "positive", "wrist": "positive"}, *every.labels[1:])


@pytest.mark.parametrize("make", [seven, lambda: on_track(loaded("glazer6"))])
def test_for_one_value_the_branch_index_follows_the_path(make):
    arm = make()
    q = np.full(7, 0.4) + np.linspace(0, 0.5, 100)[:, None] * np.array([1, 1, 0, 1, 1, 1, 1.0])
    held = arm.free_joints
    branches = arm.inverse_free(arm.forward(q), held, [0.3])
    followed = branches.valid[:, 0].all(axis=0)
    assert followed.any()
    assert turned_apart(np.diff(branches.q[:, 0], axis=0), 0)[:, followed].max() < 0.1


def test_the_inverse_of_a_seven_axis_arm_prefers_what_its_limits_allow():
    arm = seven()
    q = np.random.default_rng(3).uniform(-1, 1, 7)
    answers = arm.inverse(arm.forward(q))
    assert 4 < len(answers)
    assert np.abs(arm.forward(answers) - arm.forward(q)).max() < 1e-9
    assert len(np.unique(answers[:, 2].round(6))) > 1


@pytest.mark.parametrize(
    ("joints", "values", "message"),
    [
        ("j9", [0.0], 'seven axes: unknown joint "j9", there is j1, j2'),
        (["j1", "j1"], [[0.0, 0.0]], "expected 1 or more joints to hold, each once"),
        ([], np.zeros((1, 0)), "expected 1 or more joints to hold, each once, got []"),
        ("j3", np.zeros((2, 2, 2)), "expected values of shape (M,), (M, 1) or (N, M, 1), got (2, 2, 2)"),
        (9, [0.0], 'joint "9" does not move the tool'),
    ],
)
def test_what_can_not_be_held_is_refused(joints, values, message):
    arm = seven()
    with pytest.raises(errors.InputError, match=re.escape(message)):
        arm.inverse_free(arm.forward(np.zeros((1, 7))), joints, values)


# ---- a workpiece that turns


def test_a_turntable_moves_no_tool():
    arm = with_turntable(loaded("stacker6"))
    assert arm.tool_joints == (0, 1, 2, 3, 4, 5)
    assert arm.structure == "three parallel axes"
    q = np.random.default_rng(1).uniform(-1, 1, (4, 7))
    assert (arm.jacobian(q)[:, :, 6] == 0).all()
    branches = arm.inverse_batch(arm.forward(q))
    assert np.isnan(branches.q[..., 6]).all() and branches.valid.any(axis=1).all()
    placed = arm.inverse_batch(arm.forward(q), outside=q)
    np.testing.assert_array_equal(placed.q[..., 6], np.broadcast_to(q[:, None, 6], placed.q[..., 6].shape))
    answers = arm.inverse(arm.forward(q[0]), outside=q[0])
    assert np.abs(answers - q[0]).max(axis=1).min() < 1e-9
    assert np.isnan(arm.inverse(arm.forward(q[0]))[:, 6]).all()


def test_seen_from_the_workpiece_the_table_moves_the_tool():
    arm = with_turntable(loaded("glazer6"))
    seen = arm.seen_from("table")
    assert seen.joint_names == arm.joint_names and seen.tool_joints == (6, 0, 1, 2, 3, 4, 5)
    assert seen.free_joints == ("table",)
    assert seen.length == arm.length
    q = np.random.default_rng(4).uniform(-1.5, 1.5, (10, 7))
    base_from_table, base_from_tool = arm.base_from_joint("table", q), arm.forward(q)
    np.testing.assert_allclose(seen.forward(q), np.linalg.inv(base_from_table) @ base_from_tool, atol=1e-14)
    check_round_trip(seen, ["table"], q)
    step = 1e-6  # the Jacobian against differences of the relative pose
    for k in range(7):
        ahead, behind = q.copy(), q.copy()
        ahead[:, k] += step
        behind[:, k] -= step
        speed = (seen.forward(ahead)[:, :3, 3] - seen.forward(behind)[:, :3, 3]) / (2 * step)
        np.testing.assert_allclose(seen.jacobian(q)[:, :3, k], speed, atol=1e-8)


def test_turning_the_table_turns_what_is_seen():
    arm = with_turntable(loaded("glazer6"))
    seen = arm.seen_from("table")
    q = np.full(7, 0.2)
    later = q.copy()
    later[6] += 0.7
    np.testing.assert_allclose(seen.forward(later), rot_z(-0.7) @ seen.forward(q), atol=1e-14)


def test_a_track_under_arm_and_workpiece_does_not_count():
    """A table that rides on the arm's own track: seen from it only table and arm move."""
    arm = on_track(loaded("glazer6"))
    from dataclasses import replace

    from pathplan.arm import Joint

    table = Joint("table", "revolute", (-np.inf, np.inf), 1.0, 1.0, 1.0)
    riding = replace(
        arm,
        joints=(*arm.joints, table),
        parent_from_joint=np.concatenate([arm.parent_from_joint, np.eye(4)[None]]),
        axes=np.concatenate([arm.axes, [[0, 0, 1.0]]]),
        parents=(*arm.parents, 0),
        limits=None,
        positions={},
    )
    seen = riding.seen_from("table")
    assert seen.tool_joints == (7, 1, 2, 3, 4, 5, 6)
    q = np.random.default_rng(5).uniform(-1, 1, (5, 8))
    expected = np.linalg.inv(riding.base_from_joint("table", q)) @ riding.forward(q)
    np.testing.assert_allclose(seen.forward(q), expected, atol=1e-14)


def test_only_what_does_not_carry_the_tool_can_be_seen_from():
    arm = with_turntable(loaded("glazer6"))
    with pytest.raises(
        errors.InputError, match='joint "elbow" carries the tool, expected one that carries a workpiece'
    ):
        arm.seen_from("elbow")
    with pytest.raises(errors.InputError, match='unknown joint "wheel"'):
        arm.seen_from("wheel")
    with pytest.raises(errors.InputError, match=re.escape('to plan in its frame use arm.seen_from("table")')):
        arm.inverse_free(np.eye(4)[None], "table", [0.0])


# ---- a tool that may roll


def test_a_roll_is_one_more_joint():
    arm = loaded("glazer6").equipped(tool="nozzle")
    rolling = arm.with_tool_roll()
    assert rolling.joint_names[-1] == "tool roll" and rolling.free_joints == ("tool roll",)
    q = np.random.default_rng(6).uniform(-1, 1, (8, 7))
    roll = np.array([rot_z(value) for value in q[:, 6]])
    np.testing.assert_allclose(rolling.forward(q), arm.forward(q[:, :6]) @ roll, atol=1e-14)
    check_round_trip(rolling, ["tool roll"], q)
    assert np.isinf(rolling.limits.velocity[6]).all() and rolling.limits.matrix.shape == (7, 7)


def test_five_axes_and_a_roll_serve_any_direction():
    from tests.arm.test_five import gantry_with_two_turns

    arm = gantry_with_two_turns()
    assert arm.serves_pointing and len(arm.serves) < 6
    rolling = arm.with_tool_roll()
    assert rolling.structure == "three slides"
    q = np.random.default_rng(7).uniform(-1, 1, (6, 6))
    pose = rolling.forward(q) @ rot_z(0.9)
    branches = rolling.inverse_batch(pose)
    assert branches.valid.any(axis=1).all()
