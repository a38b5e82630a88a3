"""Taught joint paths in a task: through their points, smooth, blended, within limits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pathplan.errors import InputError, UnreachableError
from pathplan.path import JointPath, follow_task
from pathplan.path.taught import smooth_joint_path
from pathplan.task.model import Step, Target, Taught

HOP = np.deg2rad(
    [[18, 2, 31, 0, 57, 18], [10, -8, 24, 4, 62, 12], [-4, -22, 14, 10, 70, -2], [-20, -30, 6, 12, 80, -20],
     [-38, -26, 10, 8, 78, -36], [-55, -14, 20, 3, 70, -52], [-66, 0, 30, 0, 60, -66]]
)  # fmt: skip


def taught_step(points: np.ndarray, tolerance: float = 0.0, name: str = "hop", **rest) -> Step:
    taught = Taught(name, np.asarray(points, dtype=float), tolerance)
    return Step(0, "taught", "", target=Target(joints=taught.points[-1]), taught=taught, **rest)


def test_it_is_the_smooth_path_through_the_points(cast):
    arm = cast.robot("glazer6")
    path = follow_task(cast.task(arm, HOP[0], [taught_step(HOP)]))
    cast.check_path(path)
    found, through = path.stretches[0].path, JointPath.through(HOP)
    assert found.length == pytest.approx(through.length)
    s = np.linspace(0, found.length, 301)
    np.testing.assert_allclose(found(s), through(s), atol=1e-12)
    np.testing.assert_array_equal(found([0.0])[0], HOP[0])
    np.testing.assert_allclose(found([found.length], side="left")[0], HOP[-1], atol=1e-15)


def test_a_metre_counts_by_the_arms_length(cast):
    """Of a gantry, so that the parameter means the same as that of lines and arcs."""
    arm = cast.robot("loader4")
    points = np.array([[0.2, 0.2, -0.1, 0], [0.6, 0.4, -0.2, 0.5], [1.2, 0.5, -0.1, 1.0], [1.6, 0.9, -0.4, 0.4]])
    path = follow_task(cast.task(arm, points[0], [taught_step(points)]))
    cast.check_path(path)
    weights = np.array([1 / arm.length] * 3 + [1.0])
    chords = np.linalg.norm(np.diff(points * weights, axis=0), axis=1).sum()
    assert path.stretches[0].path.length == pytest.approx(chords)
    q = path.stretches[0].path(np.linspace(0, chords, 20001))
    assert np.abs(q[:, None] - points).max(axis=2).min(axis=0).max() < 1e-4


@pytest.mark.parametrize("blend", ["length", "angle", "share"])
@pytest.mark.parametrize("count", [3, 4, 5, 7])
def test_it_blends_into_joint_steps_lines_and_other_taught_paths(cast, blend, count):
    arm, points = cast.robot("glazer6"), HOP[:count]
    size = {"length": cast.length(40), "angle": cast.angle(6), "share": cast.share(25)}[blend]
    pose = arm.forward(HOP[0])
    away = pose.copy()
    away[2, 3] += 0.12
    steps = [
        cast.step("line", pose, blend=size),
        taught_step(points, blend=size),
        taught_step(np.concatenate([points[-1:], points[:1] + 0.2, points[:1]]), blend=size),
        cast.step("joint", np.array(arm.positions["home"])),
    ]
    start = arm.inverse(away)
    q = start[np.argmin(np.abs(start - HOP[0]).max(axis=1))]
    path = follow_task(cast.task(arm, q, steps))
    cast.check_path(path)
    assert [corner.kind for corner in path.corners] == ["fly-by"] * 3
    assert len(path.stretches) == 1


def test_the_branch_before_it_is_the_one_it_starts_in(cast):
    """A joint step to a pose ends in whatever branch the taught path starts in."""
    arm = cast.robot("glazer6")
    for q in arm.inverse(arm.forward(HOP[0]))[:6]:
        points = np.stack([q, q + 0.05, q + np.array([0.1, 0, 0.1, 0, 0, 0.1])])
        points = np.clip(points, *np.array([joint.position for joint in arm.joints]).T)
        steps = [cast.step("joint", arm.forward(HOP[0])), taught_step(points)]
        path = follow_task(cast.task(arm, arm.positions["home"], steps))
        np.testing.assert_allclose(path.targets[1], q, atol=1e-9)


def test_endless_joints_go_on_counting(cast):
    arm = cast.endless_six()
    points = np.array(HOP[:3])
    points[:, 5] += 4 * np.pi
    steps = [cast.step("joint", arm.forward(HOP[0])), taught_step(points)]
    path = follow_task(cast.task(arm, HOP[0], steps))
    np.testing.assert_allclose(path.targets[1], HOP[0], atol=1e-9)
    np.testing.assert_allclose(path.targets[2], HOP[2], atol=1e-9)
    cast.check_path(path)


def test_it_starts_where_the_arm_is(cast):
    arm = cast.robot("glazer6")
    with pytest.raises(UnreachableError) as caught:
        follow_task(cast.task(arm, arm.positions["home"], [taught_step(HOP)]))
    text = "the taught path starts with joint pitch at 57 deg, the arm is at 80 deg"
    assert str(caught.value) == f't.toml: step[1]: {text}: expected a step to "hop.start" before it'
    assert caught.value.data["joint"] == "pitch"


def test_between_its_points_it_may_pass_a_limit(cast):
    arm = cast.robot("glazer6")
    top = arm.joints[0].position[1]
    points = np.zeros((5, 6)) + HOP[0]
    points[:, 0] = [top - 1, top, top - 1e-3, top, top - 1]
    with pytest.raises(UnreachableError) as caught:
        follow_task(cast.task(arm, points[0], [taught_step(points)]))
    assert str(caught.value).startswith("t.toml: step[1]: no branch can follow this taught path: the best gets to ")
    assert str(caught.value).endswith("where joint base meets its limit 170 deg")


@pytest.mark.parametrize("tolerance", [1e-2, 1e-3, 1e-4])
def test_a_tolerance_is_kept_and_told(cast, tolerance):
    """Many points with noise: the path passes each within the tolerance, and has far fewer pieces."""
    arm = cast.robot("glazer6")
    through = JointPath.through(HOP)
    points = through(np.linspace(0, through.length, 600))
    points += np.random.default_rng(0).normal(0, tolerance / 10, points.shape)
    step = taught_step(points, tolerance)
    path = follow_task(cast.task(arm, points[0], [step]))
    cast.check_path(path)
    found = path.stretches[0].path
    assert len(found.breaks) < 200
    q = found(np.linspace(0, found.length, 60001))
    nearest = [np.linalg.norm(q - point, axis=1).min() for point in points]
    assert max(nearest) <= tolerance * (1 + 1e-6)
    assert path.findings[0].text.startswith('taught path "hop" is at most ')
    assert path.findings[0].text.endswith("off its 600 points")


def test_a_smooth_path_starts_and_ends_on_its_points(cast):
    arm = cast.robot("glazer6")
    points = HOP[0] + np.linspace(0, 1, 300)[:, None] ** 2 * (HOP[-1] - HOP[0])
    points += np.random.default_rng(0).normal(0, 1e-4, points.shape)
    path, off = smooth_joint_path(points, arm, 1e-3)
    np.testing.assert_array_equal(path([0.0])[0], points[0])
    np.testing.assert_allclose(path([path.length], side="left")[0], points[-1], rtol=0, atol=4e-15)
    assert off.shape == points.shape and off[[0, -1]].max() == 0.0


def test_points_on_a_limit_are_not_overshot(cast):
    """Rows that end on a limit: the path stays inside although it may pass them by more."""
    arm = cast.robot("glazer6")
    x, top = np.linspace(0, 1, 400), arm.joints[0].position[1]
    points = np.tile(HOP[0], (400, 1))
    points[:, 0] = top - 0.3 * (1 - x) - 0.05 * np.sin(np.pi * x) ** 4
    points[:, 1] += 0.5 * x
    path, _ = smooth_joint_path(points, arm, 1e-3)
    q = path(np.linspace(0, path.length, 5001))
    assert q[:, 0].max() <= top + 1e-9


def test_noise_beyond_the_tolerance_can_not_be_met(cast):
    points = HOP[0] + np.linspace(0, 0.5, 300)[:, None] + np.random.default_rng(0).normal(0, 1e-3, (300, 6))
    with pytest.raises(InputError, match=r"^point \d+ can't be met within the tolerance: it lies .* times as far off$"):
        smooth_joint_path(points, cast.robot("glazer6"), 1e-6)


def test_what_was_left_out_is_said(cast):
    arm = cast.robot("glazer6")
    step = taught_step(HOP)
    step = replace(step, taught=replace(step.taught, note="two points left out"))
    path = follow_task(cast.task(arm, HOP[0], [step]))
    assert [finding.text for finding in path.findings] == ["two points left out"]
