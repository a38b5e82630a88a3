"""Arms and tasks that the tests of this room draw from, and what every finished path must hold."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.arm import Arm, Joint, Tool, load_arm
from pathplan.arm.chain import DHRow, chain_from_dh
from pathplan.path import TaskPath
from pathplan.task.model import Blend, Step, Target, Task

ROBOTS = Path(__file__).parents[2] / "robots"


@lru_cache
def robot(name: str, tool: str | None = None) -> Arm:
    arm = load_arm(ROBOTS / f"{name}.toml")
    return arm if tool is None else arm.equipped(tool=tool)


def endless_six() -> Arm:
    """glazer6 whose last joint may turn without end."""
    arm = robot("glazer6")
    last = arm.joints[5]
    free = Joint(last.name, "revolute", (-np.inf, np.inf), last.velocity, last.acceleration, last.jerk)
    return Arm(
        "endless",
        (*arm.joints[:5], free),
        arm.parent_from_joint,
        arm.axes,
        arm.tip_from_flange,
        positions={"home": arm.positions["home"]},
    )


def offset_wrist() -> Arm:
    """Six axes whose last three don't meet: no closed form."""
    quarter = np.pi / 2
    rows = [
        DHRow(a=0.08, alpha=-quarter, d=0.45),
        DHRow(a=0.5, theta=-quarter),
        DHRow(a=0.03, alpha=-quarter),
        DHRow(a=0.04, alpha=quarter, d=0.46),
        DHRow(a=0.05, alpha=-quarter),
        DHRow(d=0.09),
    ]
    fixed, axes, tip, _ = chain_from_dh(rows, "standard")
    joints = tuple(Joint(f"j{i + 1}", "revolute", (-3.0, 3.0), 3.0, 15.0, 150.0) for i in range(6))
    return Arm("offset", joints, fixed, axes, tip)


def pose(x: float, y: float, z: float, roll: float = 180.0, pitch: float = 0.0, yaw: float = 0.0) -> np.ndarray:
    """mm and deg, fixed axes x, y, z."""
    out = np.eye(4)
    out[:3, :3] = Rotation.from_euler("xyz", [roll, pitch, yaw], degrees=True).as_matrix()
    out[:3, 3] = np.array([x, y, z]) / 1e3
    return out


def length(mm: float) -> Blend:
    return Blend("length", mm / 1e3, f"{mm:g} mm")


def angle(deg: float) -> Blend:
    return Blend("angle", float(np.deg2rad(deg)), f"{deg:g} deg")


def share(percent: float) -> Blend:
    return Blend("share", percent / 100, f"{percent:g} %")


def step(motion: str, target: np.ndarray | None = None, **rest) -> Step:
    """A step to a pose (4, 4) or joint vector (n,); numbered by `task`. `via` and `centre` in mm."""
    goal = None
    if target is not None:
        target = np.asarray(target, dtype=float)
        goal = Target(joints=target) if target.ndim == 1 else Target(frame_from_tool=target)
    for key in ("via", "centre"):
        if key in rest:
            rest[key] = np.array(rest[key]) / 1e3
    return Step(0, motion, "", target=goal, **rest)


def task(arm: Arm, start: np.ndarray, steps: Sequence[Step], **rest) -> Task:
    from dataclasses import replace

    numbered = tuple(replace(s, index=i, where=f"t.toml: step[{i + 1}]") for i, s in enumerate(steps))
    return Task("test", None, arm, np.asarray(start, dtype=float), numbered, 0.001, **rest)


def inverse_of(arm: Arm, target: np.ndarray) -> np.ndarray:
    """The first answer of the arm's inverse."""
    return arm.inverse(target)[0]


def rotation_angle(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Angle (N,) between rotations (N, 3, 3), by scipy."""
    return (Rotation.from_matrix(a).inv() * Rotation.from_matrix(b)).magnitude()


def check_path(path: TaskPath, dense: int = 10) -> None:
    """What every path keeps: ends meet, C2, on the programmed path, corners in their regions, limits.

    `dense`: points on each piece, off the nodes and checked points of the fit.
    """
    at = path.task.start
    for stretch in path.stretches:
        joint_path, arm = stretch.path, stretch.arm
        np.testing.assert_allclose(joint_path([0.0])[0], at, atol=1e-9)
        at = joint_path([joint_path.length])[0]
        inner = joint_path.breaks[1:-1]
        for order in range(3):
            left, right = (joint_path(inner, order, side=side) for side in ("left", "right"))
            size = np.abs(joint_path(joint_path.breaks, order)).max() + 1.0
            assert np.abs(left - right).max(initial=0.0) <= 1e-9 * size
        s = np.concatenate(
            [np.linspace(a, b, dense + 2) for a, b in zip(joint_path.breaks, joint_path.breaks[1:], strict=False)]
        )
        q = joint_path(s)
        rows = q @ arm.limits.matrix.T
        assert (rows >= arm.limits.position[:, 0] - 2e-9).all()
        assert (rows <= arm.limits.position[:, 1] + 2e-9).all()
        poses, known = stretch.programmed(s)
        if known.any():
            reached = stretch.reached(s[known], q[known])  # in the frame it is programmed in: see test_free
            assert np.linalg.norm(reached[:, :3, 3] - poses[known, :3, 3], axis=1).max() < 1e-6
            steps = [path.task.steps[part.step] for part in stretch.steps]
            tolerance = max(step.orientation_tolerance or step.tilt for step in steps)
            assert rotation_angle(reached[:, :3, :3], poses[known, :3, :3]).max() < tolerance + 1e-6
        assert stretch.steps[0].s_from == 0.0
        assert stretch.steps[-1].s_to == pytest.approx(joint_path.length, rel=1e-12)
        for before, after in zip(stretch.steps, stretch.steps[1:], strict=False):
            assert before.s_to == after.s_from
        assert stretch.caps[0].s_from == 0.0 and stretch.caps[-1].s_to == pytest.approx(joint_path.length)
    check_corners(path)


def check_corners(path: TaskPath) -> None:
    """Every fly-by corner lies within the region asked, judged from the joint path alone."""
    leg_of_step = {leg.step.index: i for i, leg in enumerate(path.cartesian.legs)}
    for corner in path.corners:
        if corner.kind == "stop":
            assert corner.used == 0.0 and corner.reason
            continue
        stretch = path.stretches[corner.stretch]
        s = np.linspace(corner.s_from, corner.s_to, 201)
        q = stretch.path(s)
        reached = stretch.arm.forward(q)
        assert 0.0 < corner.used <= corner.asked_value * (1 + 1e-9)
        if corner.region == "length":
            away = np.linalg.norm(reached[:, :3, 3] - corner.pose[:3, 3], axis=1).max()
            assert away <= corner.used * (1 + 1e-5) + 1e-6
        elif corner.region == "angle" and stretch.programmed(s[1:-1])[1].all():  # the ends may be of its neighbours
            middle = np.tile(corner.pose[:3, :3], (len(s), 1, 1))
            assert rotation_angle(reached[:, :3, :3], middle).max() <= corner.used * (1 + 1e-5) + 1e-6
        elif corner.region == "angle":
            turning = [joint.kind == "revolute" for joint in stretch.arm.joints]
            change = q - path.targets[leg_of_step[corner.after_step] + 1]
            assert np.abs(change[:, turning]).max() <= corner.used * (1 + 1e-3) + 1e-6


@pytest.fixture
def cast() -> SimpleNamespace:
    """Everything above under one name."""
    return SimpleNamespace(
        robot=robot,
        endless_six=endless_six,
        offset_wrist=offset_wrist,
        pose=pose,
        length=length,
        angle=angle,
        share=share,
        step=step,
        task=task,
        check_path=check_path,
        check_corners=check_corners,
        rotation_angle=rotation_angle,
        bare=Tool("bare", np.eye(4)),
    )
