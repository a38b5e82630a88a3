"""Curves: derivatives against differences, what a path along one keeps, and what is said where it can't be followed."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.errors import InputError, UnreachableError
from pathplan.path import follow_task
from pathplan.path.curve import curve_derivatives, curve_size
from pathplan.path.geometry import Segments, along_curve, line
from pathplan.task.curves import curve_through
from pathplan.task.model import Curve, Step, Target


def wavy(count: int = 25, width: float = 0.25, turn: float = 0.5, size: float = 0.6) -> Curve:
    """A wave in space, the tool turning along it; m and rad."""
    x = np.linspace(0, 1, count)
    position = np.stack([width * x, 0.04 * np.sin(5 * x), 0.02 * np.cos(4 * x)], axis=1)
    rotation = Rotation.from_rotvec(np.stack([0.3 * np.sin(3 * x), 0.2 * x, turn * x**2], axis=1)).as_matrix()
    return curve_through(position, rotation @ np.diag([1.0, -1, -1]), size)


def circle(radius: float = 0.1, count: int = 80, size: float = 0.6) -> Curve:
    a = np.linspace(0, 2 * np.pi, count)
    position = radius * np.stack([np.cos(a), np.sin(a), 0 * a], axis=1)
    return curve_through(position, np.tile(np.eye(3), (count, 1, 1)), size, normal=np.array([0.0, 0, 1]))


def curve_step(curve: Curve, frame: np.ndarray, **rest) -> Step:
    return Step(
        0,
        "curve",
        "",
        target=Target(frame_from_tool=frame @ curve.pose(end=True)),
        curve=curve,
        frame_from_curve=frame,
        **rest,
    )


def test_derivatives_against_differences():
    curve, h = wavy(), 1e-4
    s = np.linspace(5 * h, curve.breaks[-1] - 5 * h, 60)
    position, rotation, turning = curve_derivatives(curve, s, 3)
    ahead, behind = (curve_derivatives(curve, s + d, 3) for d in (h, -h))
    for order in range(3):
        slope = (ahead[0][order] - behind[0][order]) / (2 * h)
        np.testing.assert_allclose(position[order + 1], slope, atol=1e-4 * (1 + np.abs(slope).max()))
    change = Rotation.from_matrix(ahead[1] @ behind[1].transpose(0, 2, 1)).as_rotvec() / (2 * h)
    np.testing.assert_allclose(turning[0], change, atol=1e-6)
    for order in range(2):
        slope = (ahead[2][order] - behind[2][order]) / (2 * h)
        np.testing.assert_allclose(turning[order + 1], slope, atol=1e-5 * (1 + np.abs(slope).max()))
    np.testing.assert_allclose(rotation @ rotation.transpose(0, 2, 1), np.tile(np.eye(3), (60, 1, 1)), atol=1e-14)


def test_the_length_of_a_quaternion_does_not_count():
    curve = wavy()
    from dataclasses import replace

    stretched = replace(curve, quaternion=3.0 * curve.quaternion)
    s = np.linspace(0, curve.breaks[-1], 11)
    for one, other in zip(curve_derivatives(curve, s, 3)[2], curve_derivatives(stretched, s, 3)[2], strict=True):
        np.testing.assert_allclose(one, other, atol=1e-12)


def test_size_of_a_circle():
    """Circumference and a full turn, closed forms; the parameter counts both."""
    size = curve_size(circle())
    assert size.path_length == pytest.approx(0.2 * np.pi, rel=1e-6)
    assert size.angle == pytest.approx(2 * np.pi, rel=1e-5)
    assert size.speed == pytest.approx(size.path_length / circle().breaks[-1], rel=1e-3)


def test_segments_with_curves_among_them(cast):
    """A batch of lines and curves, some of them the same curve elsewhere: joined, taken, evaluated as each alone."""
    one, other = wavy(), circle()
    frames = [cast.pose(500, 100, 300), cast.pose(400, -100, 250, yaw=40)]
    parts = [
        line(frames[0], frames[1], 0.6),
        along_curve(one, frames[0], curve_size(one)),
        along_curve(other, frames[1], curve_size(other)),
        along_curve(one, frames[1], curve_size(one)),
    ]
    joined = Segments.join(parts)
    assert joined.curves == (one, other) and joined.curve.tolist() == [-1, 0, 1, 0]
    k = np.array([3, 0, 2, 1, 3])
    s = joined.length[k] * [0.1, 0.5, 0.7, 0.9, 1.0]
    rates = np.array([[0.5] * 5, [0.2] * 5, [-1.0] * 5])
    jets = joined.take(k).jets(np.arange(5), s, rates)
    poses = joined.poses(k, s)
    for row, (number, at) in enumerate(zip(k, s, strict=True)):
        alone = parts[number].jets(np.array([0]), np.array([at]), rates[:, :1])
        np.testing.assert_allclose(jets.position[:, row], alone.position[:, 0], atol=1e-12)
        np.testing.assert_allclose(jets.turning[:, row], alone.turning[:, 0], atol=1e-12)
        np.testing.assert_allclose(poses[row, :3, :3], alone.rotation[0], atol=1e-12)
        np.testing.assert_allclose(poses[row, :3, 3], alone.position[0, 0], atol=1e-12)


@pytest.mark.parametrize("kind", ["length", "angle", "share", "stop"])
def test_a_curve_between_lines_and_joint_steps(cast, kind):
    """Everything a path keeps, with a curve before and after lines and joint steps."""
    arm, curve = cast.robot("glazer6"), wavy(size=cast.robot("glazer6").length)
    frame = cast.pose(450, -100, 350, roll=0)
    blend = {"length": cast.length(12), "angle": cast.angle(4), "share": cast.share(20), "stop": None}[kind]
    start = frame @ curve.pose(end=False)
    end = frame @ curve.pose(end=True)
    above, away = start.copy(), end.copy()
    above[2, 3] += 0.06
    away[:3, 3] += [0.05, 0.06, 0.03]
    turn = Rotation.from_euler("x", 12, degrees=True).as_matrix()
    above[:3, :3], away[:3, :3] = turn @ above[:3, :3], turn @ away[:3, :3]
    steps = [
        cast.step("joint", above, blend=blend),
        cast.step("line", start, blend=blend),
        curve_step(curve, frame, speed=0.2, blend=blend),
        cast.step("line", away, blend=blend),
        cast.step("joint", above),
    ]
    path = follow_task(cast.task(arm, arm.positions["home"], steps))
    cast.check_path(path)
    assert len(path.stretches) == (5 if kind == "stop" else 1)
    poses, known = path.stretches[-3 if kind == "stop" else 0].programmed(0.0)
    assert poses.shape == (1, 4, 4) and known.shape == (1,)


def test_a_curve_straight_into_a_joint_step(cast):
    arm, curve = cast.robot("glazer6"), wavy(size=cast.robot("glazer6").length)
    frame = cast.pose(450, -100, 350, roll=0)
    steps = [
        cast.step("joint", frame @ curve.pose(end=False), blend=cast.length(15)),
        curve_step(curve, frame, blend=cast.length(20)),
        cast.step("joint", np.array(arm.positions["home"])),
    ]
    path = follow_task(cast.task(arm, arm.positions["home"], steps))
    cast.check_path(path)
    assert [corner.kind for corner in path.corners] == ["fly-by", "fly-by"]


@pytest.mark.parametrize("name", ["sorter4", "loader4"])
def test_curves_of_arms_with_four_axes(cast, name):
    """Orientations off by what a file's digits leave are served, within tolerance, and the path is exact to that."""
    arm = cast.robot(name)
    start = arm.forward(arm.positions["home"])
    a = np.linspace(0, 1.5, 30)
    position = 0.08 * np.stack([np.sin(a), 1 - np.cos(a), 0 * a], axis=1)
    rotation = Rotation.from_rotvec(np.stack([1e-6 * np.cos(7 * a), 1e-6 * np.sin(9 * a), 0.4 * a], axis=1)).as_matrix()
    curve = curve_through(position, rotation, arm.length)
    frame = start.copy()
    frame[:3, 3] += [-0.1, -0.1, -0.08]
    step = curve_step(curve, frame)
    steps = [cast.step("line", frame @ curve.pose(end=False), blend=cast.length(10)), step]
    path = follow_task(cast.task(arm, arm.positions["home"], steps))
    cast.check_path(path)
    q = path.stretches[0].path(np.linspace(*path.stretches[0].steps[1][1:], 500))
    reached = arm.forward(q)[:, :3, 3]
    asked = (frame @ np.vstack([position.T, np.ones(30)]))[:3].T
    nearest = np.linalg.norm(reached[:, None] - asked, axis=2).min(axis=0)
    assert nearest[8:].max() < 2e-4  # half the distance of the samples


def test_tilt_beyond_tolerance_is_refused(cast):
    arm = cast.robot("sorter4")
    start = arm.forward(arm.positions["home"])
    x = np.linspace(0, 0.1, 8)
    rotation = Rotation.from_rotvec(np.stack([x, 0 * x, 0 * x], axis=1)).as_matrix()
    curve = curve_through(np.stack([x, 0 * x, 0 * x], axis=1), rotation, arm.length)
    frame = start.copy()
    frame[:3, 3] += [-0.1, -0.1, -0.08]
    steps = [cast.step("line", frame), curve_step(curve, frame)]
    with pytest.raises(UnreachableError, match=r"t.toml: step\[2\]: .*tilted"):
        follow_task(cast.task(arm, arm.positions["home"], steps))


def test_a_curve_that_starts_elsewhere(cast):
    arm, curve = cast.robot("glazer6"), wavy()
    frame = cast.pose(450, -100, 350, roll=0)
    away = frame @ curve.pose(end=False)
    away[0, 3] += 0.012
    steps = [cast.step("line", away), curve_step(curve, frame)]
    with pytest.raises(InputError) as caught:
        follow_task(cast.task(arm, arm.positions["home"], steps))
    text = "the curve starts 12 mm and 0 deg from where the tool is, expected a step to its start before it"
    assert str(caught.value) == f"t.toml: step[2]: {text}"


def test_a_curve_that_leaves_the_reach(cast):
    arm = cast.robot("glazer6")
    curve = wavy(width=1.5, turn=0.0, size=arm.length)
    frame = cast.pose(450, -100, 350, roll=0)
    steps = [cast.step("joint", frame @ curve.pose(end=False)), curve_step(curve, frame)]
    with pytest.raises(UnreachableError) as caught:
        follow_task(cast.task(arm, arm.positions["home"], steps))
    assert str(caught.value).startswith("t.toml: step[2]: glazer6: the pose is out of reach: ")


def test_a_blend_longer_than_the_curve(cast):
    arm, curve = cast.robot("glazer6"), wavy(width=0.01, turn=0.0)
    frame = cast.pose(450, -100, 350, roll=0)
    steps = [
        cast.step("joint", frame @ curve.pose(end=False)),
        curve_step(curve, frame, blend=cast.length(500)),
        cast.step("joint", np.array(arm.positions["home"])),
    ]
    with pytest.raises(InputError, match="blend 500 mm is longer than its curve of"):
        follow_task(cast.task(arm, arm.positions["home"], steps))


def test_what_there_is_to_say_of_a_curve_is_said_once(cast):
    from dataclasses import replace

    arm = cast.robot("glazer6")
    curve = replace(wavy(size=arm.length), note="wavy it is")
    frame = cast.pose(450, -100, 350, roll=0)
    steps = [cast.step("joint", frame @ curve.pose(end=False)), curve_step(curve, frame)] * 2
    path = follow_task(cast.task(arm, arm.positions["home"], steps))
    assert [(f.step, f.text) for f in path.findings] == [(1, "wavy it is")]
