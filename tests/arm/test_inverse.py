"""Inverse kinematics: closed forms of the three structures, limits and turns, refusals in words."""

import re
from dataclasses import replace
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan import errors
from pathplan.arm import Arm, Joint
from pathplan.arm.chain import rot_x, rot_z, translation
from pathplan.arm.inverse import rigid_pose

CLOSED = ["loader4", "sorter4", "glazer6", "puma", "crooked wrist", "crane scara", "heavy gantry"]
COUNT = {"gantry": 1, "scara": 2, "spherical wrist": 8}


def apart(q, other):
    """Largest joint difference, whole turns left aside."""
    return np.abs((q - other + np.pi) % (2 * np.pi) - np.pi).max(axis=-1)


@pytest.mark.parametrize(
    ("name", "structure"),
    [
        ("loader4", "gantry"),
        ("heavy gantry", "gantry"),
        ("sorter4", "scara"),
        ("crane scara", "scara"),
        ("glazer6", "spherical wrist"),
        ("puma", "spherical wrist"),
        ("crooked wrist", "spherical wrist"),
        ("planar three", "general"),
        ("offset wrist", "three parallel axes"),
        ("oblique six", "general"),
        ("seven", "general"),
    ],
)
def test_structure_is_recognised_from_the_axes(name, structure, cast):
    assert cast(name).structure == structure


def test_structure_does_not_hang_on_the_way_the_chain_is_written(cast):
    """glazer6 written as bare axes, two of them reversed, points slid along them: same structure, same
    motion.
    """
    arm = cast("glazer6").equipped()
    zero = np.zeros(6)
    frames = np.array([arm.base_from_joint(name, zero) for name in arm.joint_names])
    signs = np.array([1, -1, 1, 1, -1, 1])
    slid = frames[:, :3, 3] + np.linspace(-0.4, 0.7, 6)[:, None] * frames[:, :3, 2]
    other = Arm.from_axes("axes", arm.joints, slid, signs[:, None] * frames[:, :3, 2], arm.forward(zero))
    assert other.structure == "spherical wrist"
    q = np.array([0.3, -0.4, 0.5, 0.6, 0.7, -0.8])
    pose = arm.forward(q)
    np.testing.assert_allclose(other.forward(signs * q), pose, atol=1e-14)
    ours, theirs = (a.inverse_batch(pose[None]) for a in (arm, other))
    for branch, label in zip(ours.q[0], ours.labels, strict=True):
        # shoulder and elbow words come from where the axes lie, so they hold for both ways of writing
        k = int(np.argmin(apart(theirs.q[0] * signs, branch)))
        assert apart(theirs.q[0, k] * signs, branch) < 1e-12
        assert theirs.labels[k]["elbow"] == label["elbow"]


@pytest.mark.parametrize("name", CLOSED)
def test_every_branch_stands_at_the_pose_and_one_is_where_it_came_from(name, cast, spread):
    arm = cast(name)
    q = spread(arm, 1500, seed=2)
    branches = arm.inverse_batch(arm.forward(q))
    assert branches.q.shape == (1500, COUNT[arm.structure], arm.n)
    assert len(branches.labels) == COUNT[arm.structure]
    assert branches.valid.any(axis=1).all()
    reached = arm.forward(branches.q)[branches.valid]
    asked = np.broadcast_to(arm.forward(q)[:, None], (*branches.valid.shape, 4, 4))[branches.valid]
    assert np.abs(reached - asked).max() < 1e-9
    revolute = np.array([j.kind == "revolute" for j in arm.joints])
    assert np.abs(branches.q[..., revolute]).max() <= np.pi
    difference = np.abs(branches.q - q[:, None])
    difference[..., revolute] = np.abs((difference[..., revolute] + np.pi) % (2 * np.pi) - np.pi)
    assert np.median(difference.max(axis=2).min(axis=1)) < 1e-13
    assert difference.max(axis=2).min(axis=1).max() < 1e-5  # near a singularity joints are ill-determined


@pytest.mark.parametrize("name", ["glazer6", "puma", "crooked wrist"])
def test_no_branch_is_missed(name, cast, spread):
    """The referee: roboticstoolbox's numeric inverse from 150 random starts finds nothing that is not
    among ours.
    """
    arm = cast(name)
    ets = (
        replace(arm, links=None, joints=tuple(replace(j, position=(-np.inf, np.inf)) for j in arm.joints))
        .toolbox()
        .ets()
    )
    starts = np.random.default_rng(1).uniform(-np.pi, np.pi, (150, 6))
    for q in spread(arm, 4, seed=8):
        pose = arm.forward(q)
        branches = arm.inverse_batch(pose[None])
        ours = branches.q[0, branches.valid[0]]
        seen = set()
        for start in starts:
            theirs = ets.ik_LM(pose, q0=start, tol=1e-24, slimit=1, joint_limits=False)
            if theirs.success:
                distance = apart(ours, theirs.q)
                assert distance.min() < 1e-6
                seen.add(int(np.argmin(distance)))
        assert len(seen) == len(ours)  # and each of ours is found by the referee


@settings(max_examples=60, deadline=None)
@given(st.lists(st.floats(-1, 1), min_size=6, max_size=6))
def test_round_trip_of_the_six_axis_arm(cast_glazer, share):
    arm = cast_glazer
    low, high = np.array([j.position for j in arm.joints]).T
    q = low + (high - low) * (np.array(share) + 1) / 2
    answers = arm.inverse(arm.forward(q))
    assert (answers >= low).all() and (answers <= high).all()
    reached, asked = arm.forward(answers), arm.forward(q)
    assert np.abs(reached - asked).max() < 3e-9


@pytest.fixture(scope="module")
def cast_glazer():
    from pathlib import Path

    from pathplan.arm import load_arm

    return load_arm(Path(__file__).parents[2] / "robots" / "glazer6.toml").equipped(tool="nozzle")


# ---- branches
# ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["glazer6", "puma"])
def test_labels_mean_what_they_say(name, cast, spread):
    """Judged from where the axes stand: left and right facing the wrist centre, up against gravity."""
    arm = cast(name)
    for pose in arm.forward(spread(arm, 25, seed=4)):
        branches = arm.inverse_batch(pose[None])
        for q, valid, label in zip(branches.q[0], branches.valid[0], branches.labels, strict=True):
            if not valid:
                continue
            frames = [arm.base_from_joint(name, q) for name in arm.joint_names]
            centre, shoulder, elbow = frames[4][:3, 3], frames[1], frames[2][:3, 3]
            facing = centre - frames[0][:3, 3]
            left = np.cross([0.0, 0.0, 1.0], facing)
            offset = shoulder[:3, 2] * (shoulder[:3, 2] @ (centre - frames[0][:3, 3]))
            if np.linalg.norm(offset) < 1e-9:
                offset = shoulder[:3, 2]
            assert (label["shoulder"] == "left") == (left @ offset > 0)
            reach = centre - shoulder[:3, 3]
            reach = reach - shoulder[:3, 2] * (shoulder[:3, 2] @ reach)
            level = facing - shoulder[:3, 2] * (shoulder[:3, 2] @ facing)
            level[2] = 0.0
            outward = np.cross(level, [0.0, 0.0, 1.0])  # normal of the arm plane
            rise = np.cross(reach, elbow - shoulder[:3, 3]) @ outward
            assert (label["elbow"] == "up") == (rise > 0)
            assert (label["wrist"] == "positive") == (np.sin(q[4]) > 0)


def test_scara_elbow_labels(cast, spread):
    for name in ("sorter4", "crane scara"):
        arm = cast(name)
        turning = [j.name for j in arm.joints if j.kind == "revolute"]
        for pose in arm.forward(spread(arm, 25, seed=4)):
            branches = arm.inverse_batch(pose[None])
            assert branches.valid.all()
            for q, label in zip(branches.q[0], branches.labels, strict=True):
                first, elbow, wrist = (arm.base_from_joint(name, q)[:2, 3] for name in turning)
                facing, side = wrist - first, elbow - first
                assert (label["elbow"] == "left") == (facing[0] * side[1] - facing[1] * side[0] > 0)


@pytest.mark.parametrize("name", ["sorter4", "glazer6", "puma", "crooked wrist", "crane scara"])
def test_the_branch_index_follows_a_path(name, cast):
    """Along a joint move away from singularities every branch moves in small steps, turns left aside."""
    arm = cast(name)
    start, end = np.full(arm.n, 0.35), np.full(arm.n, 0.75)
    if name == "puma":  # the shoulder singularity lies between the others' start and end
        start[2], end[2] = -1.2, -0.6
    for i, j in enumerate(arm.joints):
        if j.kind == "prismatic":
            start[i], end[i] = np.array(j.position) * 0.5
    q = start + np.linspace(0, 1, 400)[:, None] * (end - start)
    branches = arm.inverse_batch(arm.forward(q))
    followed = branches.valid.all(axis=0)
    assert followed.sum() >= 2
    steps = apart(branches.q[1:], branches.q[:-1])
    assert steps[:, followed].max() < 0.05
    index = np.argmin(apart(branches.q, q[:, None]), axis=1)
    assert (index == index[0]).all()


def test_wrist_in_line_leaves_joint_four_at_zero(cast):
    arm = cast("glazer6")
    q = np.array([0.3, -0.2, 0.4, 0.5, 0.0, 0.6])
    branches = arm.inverse_batch(arm.forward(q)[None])
    straight = np.abs(branches.q[0, :, 4]) < 1e-7
    assert straight.any()
    assert branches.valid[0, straight].all()
    np.testing.assert_allclose(branches.q[0, straight, 3], 0.0, atol=1e-12)
    np.testing.assert_allclose(branches.q[0, straight, 5], 1.1, atol=1e-7)


@pytest.mark.parametrize("bend", [1e-3, -1e-6, 1e-8, -2e-9, 1e-9, 1e-10, -1e-11, 1e-12, 0.0])
def test_a_nearly_straight_wrist_keeps_its_accuracy(bend, cast):
    """Both sides of the small-angle switch: the answer verifies to 1e-12 however little the wrist is bent."""
    arm = cast("glazer6")
    pose = arm.forward([0.3, -0.2, 0.4, 0.5, bend, 0.6])
    branches = arm.inverse_batch(pose[None])
    near = np.abs(branches.q[0, :, 4]) < 2e-3
    assert near.sum() == 2
    assert branches.angle_error[0, near].max() < 1e-10
    assert branches.position_error[0, near].max() < 1e-10


# ---- the edge of the reach
# ---------------------------------------------------------------------------------------


def test_a_pose_exactly_at_the_reach_limit_is_reached(cast):
    arm = cast("glazer6").equipped()
    # frame 3: the wrist centre lies 60 mm along x and 520 mm along y; in line with the upper arm at this q3
    q = np.array([0.2, 0.6, -np.arctan2(0.52, 0.06), 0.3, 0.7, -0.4])
    wrist = arm.base_from_joint("pitch", q)[:3, 3]
    shoulder = arm.base_from_joint("shoulder", q)[:3, 3]
    span = 0.5 + np.hypot(0.52, 0.06)
    assert np.linalg.norm(wrist - shoulder) == pytest.approx(span, abs=1e-12)
    outward = (wrist - shoulder) / span
    pose = arm.forward(q)
    for beyond in (0.0, 1e-16, -1e-16, 1e-12, 1e-10):
        moved = pose.copy()
        moved[:3, 3] += beyond * outward
        branches = arm.inverse_batch(moved[None])
        assert branches.valid[0].any()
        assert apart(branches.q[0, branches.valid[0]], q).min() < 1e-4
    moved[:3, 3] = pose[:3, 3] + 1e-6 * outward
    beyond_reach = arm.inverse_batch(moved[None])
    near = np.argmin(beyond_reach.position_error[0])
    assert not beyond_reach.valid[0, near]
    assert beyond_reach.position_error[0, near] == pytest.approx(1e-6, rel=1e-6)
    assert beyond_reach.angle_error[0, near] < 1e-12  # the nearest answer still has the right orientation


def test_scara_at_the_reach_limit_and_beyond(cast):
    arm = cast("sorter4").equipped()
    pose = arm.forward([0.3, 0.0, -0.1, 0.2])
    assert arm.inverse(pose).shape[1] == 4
    pose[:2, 3] *= (0.65 + 0.0123) / 0.65
    message = "sorter4: the pose is out of reach: the nearest answer is off by 12.3 mm"
    with pytest.raises(errors.UnreachableError, match=re.escape(message)) as caught:
        arm.inverse(pose)
    assert caught.value.data["position_error"] == pytest.approx(0.0123)


# ---- limits, turns, refusals
# -------------------------------------------------------------------------------------


def test_turn_equivalents_within_the_limits(cast):
    arm = cast("sorter4")  # wrist -360 to 360 deg
    q = np.array([0.4, 0.9, -0.05, 0.3])
    answers = arm.inverse(arm.forward(q))
    mine = answers[np.abs(answers[:, 1] - 0.9) < 1e-9]
    np.testing.assert_allclose(sorted(mine[:, 3]), [0.3 - 2 * np.pi, 0.3], atol=1e-12)
    assert len(np.unique(answers.round(9), axis=0)) == len(answers)


def test_all_answers_are_the_branches_times_the_turns_in_the_limits(cast, spread):
    arm = cast("glazer6")
    low, high = np.array([j.position for j in arm.joints]).T
    for q in spread(arm, 10, seed=12):
        pose = arm.forward(q)
        branches = arm.inverse_batch(pose[None])
        expected = [
            turned
            for branch in branches.q[0, branches.valid[0]]
            for turned in (branch + 2 * np.pi * np.array(k) for k in product((-1, 0, 1), repeat=6))
            if (turned >= low).all() and (turned <= high).all()
        ]
        answers = arm.inverse(pose)
        assert len(answers) == len(expected)
        for row in expected:
            assert np.abs(answers - row).max(axis=1).min() < 1e-12


def test_a_joint_without_limits_answers_within_one_turn(cast):
    arm = cast("sorter4")
    free = replace(arm.joints[3], position=(-np.inf, np.inf))
    arm = replace(arm, joints=(*arm.joints[:3], free), limits=None)
    answers = arm.inverse(arm.forward([0.4, 0.9, -0.05, 5.0]))
    assert (np.abs(answers[:, 3]) <= np.pi).all()
    assert np.abs(answers - [0.4, 0.9, -0.05, 5.0 - 2 * np.pi]).max(axis=1).min() < 1e-12


def test_a_position_exactly_at_its_limits_is_an_answer(cast):
    arm = cast("glazer6")
    for corner in (0, 1):
        q = np.array([j.position[corner] for j in arm.joints])
        answers = arm.inverse(arm.forward(q))
        assert np.abs(answers - q).max(axis=1).min() < 1e-9


def test_extra_limit_rows_exclude_answers(cast):
    from pathplan.arm import Limits

    arm = cast("sorter4")
    plain = arm.limits
    none = np.array([[-np.inf, np.inf]])
    rows = Limits(
        (*plain.names, "arm sum"),
        np.vstack([plain.matrix, [1.0, 1.0, 0.0, 0.0]]),
        np.vstack([plain.position, [1.0, 1.4]]),
        *(np.vstack([bound, none]) for bound in (plain.velocity, plain.acceleration, plain.jerk, plain.torque)),
    )
    pose = arm.forward([0.4, 0.9, -0.05, 0.3])
    assert {round(q[1], 6) for q in arm.inverse(pose)} == {0.9, -0.9}
    coupled = replace(arm, limits=rows)
    assert {round(q[1], 6) for q in coupled.inverse(pose)} == {0.9}
    folded = replace(coupled, limits=replace(rows, position=np.vstack([plain.position, [-0.5, -0.4]])))
    with pytest.raises(
        errors.UnreachableError, match=r"elbow right: arm sum at 74\.48 deg, limit -22\.92 deg"
    ) as caught:
        folded.inverse(pose)
    assert caught.value.data["joint"] == "arm sum"


def test_limits_that_exclude_every_branch_are_named(cast):
    pose = cast("sorter4").equipped().forward([0.4, 0.9, -0.05, 0.3])
    pose[2, 3] += 0.1
    message = (
        "sorter4: every branch that reaches the pose breaks a position limit: "
        "elbow left: screw at 50 mm, limit 0 mm; elbow right: screw at 50 mm, limit 0 mm"
    )
    with pytest.raises(errors.UnreachableError, match=re.escape(message)) as caught:
        cast("sorter4").equipped().inverse(pose)
    assert caught.value.data["joint"] == "screw"
    assert caught.value.data["beyond"] == pytest.approx(0.05)


def test_a_gantry_names_the_one_limit(cast):
    arm = cast("loader4").equipped()
    pose = arm.forward([2.0, 0.3, -0.1, 0.0])
    pose[0, 3] += 0.25
    with pytest.raises(errors.UnreachableError, match=re.escape("loader4: the pose needs x at 2250 mm, limit 2000 mm")):
        arm.inverse(pose)


@pytest.mark.parametrize(
    ("name", "tilted", "words"),
    [
        ("sorter4", rot_x(np.deg2rad(3.2)), "tilted 3.2 deg about x"),
        ("loader4", rot_x(np.deg2rad(-0.01)), "tilted 0.01 deg about x"),
        ("sorter4", rot_z(np.pi / 2) @ rot_x(0.5) @ rot_z(-np.pi / 2), "tilted 28.65 deg about y"),
        ("sorter4", rot_x(np.pi), "tilted 180 deg about x or y"),
    ],
)
def test_a_tilt_that_four_axes_cannot_serve_is_named(name, tilted, words, cast):
    arm = cast(name)
    pose = arm.forward(arm.positions["home"])
    pose[:3, :3] = tilted[:3, :3] @ pose[:3, :3]
    with pytest.raises(errors.UnreachableError) as caught:
        arm.inverse(pose)
    assert f"{name}: the pose is {words}" in str(caught.value)
    assert str(caught.value).endswith(f"; {name} serves x, y, z and rotation about z; tolerance 0.001 deg")


def test_a_tilt_within_the_tolerance_is_served(cast):
    arm = cast("sorter4")
    pose = arm.forward(arm.positions["home"])
    pose[:3, :3] = rot_x(np.deg2rad(0.0009))[:3, :3] @ pose[:3, :3]
    assert len(arm.inverse(pose)) > 0
    branches = arm.inverse_batch(pose[None])
    assert branches.angle_error[0, 0] == pytest.approx(np.deg2rad(0.0009))
    assert branches.position_error[0, 0] < 1e-14


def test_a_scara_on_a_slant_serves_its_own_turning_axis():
    frame = rot_x(0.3)
    axes = np.tile([0, 0, 1.0], (4, 1)) @ frame[:3, :3].T
    origins = np.array([[0, 0, 0], [0.3, 0, 0], [0.5, 0, 0], [0.5, 0, 0]]) @ frame[:3, :3].T
    joints = [
        Joint(n, k, (-2.0, 2.0), 1, 1, 1)
        for n, k in (("a", "revolute"), ("b", "revolute"), ("c", "revolute"), ("z", "prismatic"))
    ]
    arm = Arm.from_axes("slant", joints, origins, axes, frame @ translation(0.5, 0, 0))
    assert arm.serves == {"x", "y", "z"}
    pose = arm.forward([0.2, 0.3, 0.4, 0.1])
    assert np.abs(arm.inverse(pose) - [0.2, 0.3, 0.4, 0.1]).max(axis=1).min() < 1e-12
    pose[:3, :3] = rot_x(0.2)[:3, :3] @ pose[:3, :3]
    with pytest.raises(errors.UnreachableError, match="slant serves x, y, z and rotation about its turning axis"):
        arm.inverse(pose)


def test_poses_may_be_spatialmath(cast):
    from spatialmath import SE3

    arm = cast("glazer6")
    pose = arm.forward(arm.positions["home"])
    np.testing.assert_allclose(arm.inverse(SE3(pose, check=False)), arm.inverse(pose), atol=1e-14)


@pytest.mark.parametrize(
    ("pose", "message"),
    [
        (np.eye(3), "pose: expected a 4x4 rigid transform, got shape (3, 3)"),
        (np.full((4, 4), np.nan), "pose: expected finite numbers, got NaN or infinity"),
        (np.diag([1.0, 1, 1, 2]), "pose: expected the last row 0 0 0 1, got 0 0 0 2"),
        (np.diag([1.0, 1, 1.001, 1]), "pose: expected a rotation, its columns are not unit length and square"),
        (np.diag([1.0, 1, -1, 1]), "pose: expected a right-handed rotation, got a mirror image"),
    ],
)
def test_what_is_no_pose_is_refused(pose, message, cast):
    with pytest.raises(errors.InputError, match=re.escape(message)):
        cast("glazer6").inverse(pose)


def test_a_slightly_rounded_rotation_is_made_exact():
    pose = translation(0.1, 0.2, 0.3) @ rot_x(0.4)
    np.testing.assert_allclose(rigid_pose(pose.round(8)), pose, atol=1e-8)
    exact = rigid_pose(pose.round(8))[:3, :3]
    np.testing.assert_allclose(exact @ exact.T, np.eye(3), atol=1e-15)


def test_a_batch_of_a_wrong_shape_is_refused(cast):
    with pytest.raises(errors.InputError, match=re.escape("expected poses of shape (N, 4, 4), got (4, 4)")):
        cast("glazer6").inverse_batch(np.eye(4))


def test_an_empty_batch_is_served(cast):
    for name in ("loader4", "sorter4", "glazer6", "planar three"):
        branches = cast(name).inverse_batch(np.zeros((0, 4, 4)))
        assert branches.q.shape[0] == 0
