"""Lines that start or end in a singularity. Referees: pinocchio for poses, finite differences for derivatives."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.arm.kinematics import smallest_singular_value
from pathplan.errors import UnreachableError
from pathplan.path import follow_task
from pathplan.task.model import Target
from tests.arm.conftest import pinocchio_model
from tests.path.conftest import robot, step, task

IN_LINE = np.radians([-30.0, 20.0, 70.0, 0.0, 0.0, 0.0])  # axes 4 and 6 of glazer6, the tool down
WAYS = {"down": [0.0, 0.0, -0.08], "aside": [0.0, 0.08, 0.0], "askew": [0.05, -0.03, 0.04]}


def beyond(way: str) -> np.ndarray:
    pose = robot("glazer6").forward(IN_LINE).copy()
    pose[:3, 3] += WAYS[way]
    return pose


def off_the_line(q: np.ndarray, way: str) -> float:
    """m, and rad as m, that the tool leaves the line at joint positions (N, 6), by pinocchio."""
    import pinocchio as pin

    model, data, frame = pinocchio_model(robot("glazer6"))
    start, along = robot("glazer6").forward(IN_LINE), np.array(WAYS[way]) / np.linalg.norm(WAYS[way])
    worst = 0.0
    for row in q:
        pin.framesForwardKinematics(model, data, row)
        pose = data.oMf[frame].homogeneous
        off = pose[:3, 3] - start[:3, 3]
        turned = Rotation.from_matrix(pose[:3, :3] @ start[:3, :3].T).magnitude()
        worst = max(worst, float(np.linalg.norm(off - (off @ along) * along)), float(turned))
    return worst


def with_roll(angle: float) -> np.ndarray:
    """The same pose with axis 4 turned, and axis 6 back."""
    return IN_LINE + angle * np.array([0.0, 0.0, 0.0, 1.0, 0.0, -1.0])


def roll_of(way: str) -> float:
    """Axis 4 just after the start: the branch there that is nearest to zero."""
    there = robot("glazer6").forward(IN_LINE).copy()
    there[:3, 3] += 1e-4 * np.array(WAYS[way])
    answers = robot("glazer6").inverse(there)
    near = answers[np.abs(answers[:, :3] - IN_LINE[:3]).max(axis=1) < 1e-2]
    return float(near[np.abs(near[:, 3]).argmin(), 3])


@pytest.mark.parametrize("way", WAYS)
def test_an_arm_that_stands_as_the_line_asks_starts_from_a_singularity(way: str) -> None:
    arm, start = robot("glazer6"), with_roll(roll_of(way))
    assert smallest_singular_value(arm, start[None])[0] < 1e-9
    path = follow_task(task(arm, start, [step("line", beyond(way))])).stretches[0].path
    assert np.abs(path([0.0])[0] - start).max() < 1e-6
    s = np.linspace(0.0, path.length, 201)
    assert off_the_line(path(s), way) < 1e-6
    h = 1e-3 * path.length
    for order in (0, 1, 2):  # one-sided differences of third order
        value = path([0.0, h, 2 * h, 3 * h], order)
        slope = (-11 * value[0] + 18 * value[1] - 9 * value[2] + 2 * value[3]) / (6 * h)
        assert np.allclose(path([0.0], order + 1)[0], slope, atol=1e-4 * (1 + np.abs(slope).max()))


@pytest.mark.parametrize("way", WAYS)
def test_a_line_may_end_in_a_singularity_and_go_on_from_there(way: str) -> None:
    """There and back: what the line runs into is where the next one starts."""
    arm = robot("glazer6")
    start = arm.inverse(beyond(way))
    start = start[np.abs(start[:, :3] - IN_LINE[:3]).max(axis=1).argmin()]
    steps = [step("line", arm.forward(IN_LINE)), step("line", beyond(way))]
    path = follow_task(task(arm, start, steps))
    assert smallest_singular_value(arm, path.targets[1:2])[0] < 1e-6
    for stretch in path.stretches:
        assert off_the_line(stretch.path(np.linspace(0.0, stretch.path.length, 201)), way) < 1e-6


def test_a_joint_step_goes_where_the_line_after_it_starts() -> None:
    arm = robot("glazer6")
    away = replace(step("joint"), target=Target(joints=with_roll(0.4)))
    steps = [away, step("joint", arm.forward(IN_LINE)), step("line", beyond("askew"))]
    path = follow_task(task(arm, arm.positions["home"], steps))
    assert off_the_line(path.stretches[2].path(np.linspace(0.0, path.stretches[2].path.length, 201)), "askew") < 1e-6


def test_an_arm_that_stands_otherwise_is_refused_with_the_singularity_named() -> None:
    words = r"starts in a wrist singularity .* and goes on only with roll at 0 deg and flange at 0 deg"
    with pytest.raises(UnreachableError, match=words):
        follow_task(task(robot("glazer6"), with_roll(0.35), [step("line", beyond("down"))]))
