"""Remedies by moving the workpiece: the smallest shift or turn of a frame, or of a target that stands in none."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from pathplan.errors import PathplanError
from pathplan.remedies.model import Remedy
from pathplan.remedies.smallest import smallest
from pathplan.remedies.trials import Trials
from pathplan.remedies.words import rpy_text, step_text, xyz_text
from pathplan.task.changed import ancestors, with_frame, with_step
from pathplan.task.model import Array, Task
from pathplan.tomlfile import read_only
from pathplan.units import format_value

__all__ = ["moved_workpiece"]

SHIFTS = (1e-3, 2e-3, 5e-3, 1e-2, 2e-2, 5e-2, 0.1, 0.2, 0.4, 0.8)  # m, as far as MOST_SHIFT
TURNS = tuple(np.deg2rad([0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 45.0, 90.0]))
GRAINS = {"shift": 1e-4, "turn": float(np.deg2rad(0.1))}
MOST_SHIFT = 0.5  # of the arm's characteristic length
MOST_SUBJECTS = 4
WORSE = 2.0  # times the smallest so far: other directions are not tried further
ROUNDS = 3  # of taking in further steps that a move spoils


@dataclass(frozen=True)
class _Subject:
    """What is moved: a frame, or the target of a step (0-based) that stands in no frame."""

    name: str
    frame: str  # "" for a target
    step: int
    within: Array  # (4, 4) the parent in the base frame
    pose: Array  # (4, 4) in the parent
    moved: Callable[[Array], Task]


@dataclass(frozen=True)
class _Direction:
    """One way to move: along an axis of the parent, or about the z axis of what is moved."""

    how: Literal["shift", "turn"]
    axis: int
    sign: float

    def pose(self, subject: _Subject, size: float) -> Array:
        pose = subject.pose.copy()
        if self.how == "shift":
            pose[self.axis, 3] += self.sign * size
            return pose
        c, s = np.cos(self.sign * size), np.sin(self.sign * size)
        about_z = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
        # A frame turns about its own z axis, a target on the spot about that of the base frame.
        pose[:3, :3] = pose[:3, :3] @ about_z if subject.frame else about_z @ pose[:3, :3]
        return pose


DIRECTIONS = {
    "shift": [_Direction("shift", axis, sign) for axis in range(3) for sign in (1.0, -1.0)],
    "turn": [_Direction("turn", 2, sign) for sign in (1.0, -1.0)],
}


def moved_workpiece(trials: Trials) -> Iterator[Remedy]:
    """The smallest shift along x, y or z, and the smallest turn about z, of each frame that the refused step is in."""
    for subject in _subjects(trials):
        for how, directions in DIRECTIONS.items():
            found = _smallest_move(trials, subject, sorted(directions, key=lambda d: -_promise(trials, subject, d)))
            if found is not None:
                yield found
            else:
                most = f"{1e3 * _sizes(trials, how)[-1]:g} mm" if how == "shift" else "90 deg about z"
                trials.tried.append(f"{how}s of {subject.name} up to {most}")


def _subjects(trials: Trials) -> list[_Subject]:
    """The frames of the refused step's target and of where it starts from, the innermost first."""
    task = trials.task
    steps = [trials.step]
    before = next((i for i in range(trials.step - 1, -1, -1) if task.steps[i].motion != "wait"), None)
    if task.steps[trials.step].motion != "joint" and before is not None:
        steps.append(before)
    found: dict[str, _Subject] = {}
    for index in steps:
        target = task.steps[index].target
        if target is None or target.frame_from_tool is None or target.joints is not None:
            continue
        chain = ancestors(task, target.frame)
        for name in chain:
            found.setdefault(name, _frame(task, name))
        if not chain:
            subject = _target(task, index)
            found.setdefault(subject.name, subject)
    return list(found.values())[:MOST_SUBJECTS]


def _frame(task: Task, name: str) -> _Subject:
    frame = task.frames[name]
    within = task.carrier_from_frame(frame.parent)[1]
    return _Subject(
        f"frame {name}", name, -1, within, frame.parent_from_frame, lambda pose: with_frame(task, name, pose)
    )


def _target(task: Task, index: int) -> _Subject:
    target = task.steps[index].target
    assert target is not None and target.frame_from_tool is not None

    def moved(pose: Array) -> Task:
        return with_step(task, index, target=replace(target, frame_from_tool=read_only(pose)))

    return _Subject(f"the target of {step_text(task, index)}", "", index, np.eye(4), target.frame_from_tool, moved)


def _sizes(trials: Trials, how: str) -> list[float]:
    if how == "turn":
        return list(TURNS)
    return [size for size in SHIFTS if size <= MOST_SHIFT * trials.task.arm.length]


def _smallest_move(trials: Trials, subject: _Subject, directions: list[_Direction]) -> Remedy | None:
    """The smallest move in any of the directions with which the whole task can be planned."""
    steps: list[int] = [trials.step]
    for _ in range(ROUNDS):
        best: tuple[float, _Direction] | None = None
        for direction in directions:
            sizes = _sizes(trials, direction.how)
            if best is not None:
                nearer = [size for size in sizes if size < WORSE * best[0]]
                sizes = nearer or sizes[:1]
            size = _smallest_in(trials, subject, direction, sizes, steps)
            if size is not None and (best is None or size < best[0]):
                best = size, direction
        if best is None:
            return None
        found = _proven(trials, subject, best[1], best[0])
        if isinstance(found, Remedy):
            return found
        spoilt = found.data.get("step")
        if spoilt is None or spoilt in steps:
            return None
        steps.append(int(spoilt))
    return None


def _smallest_in(
    trials: Trials, subject: _Subject, direction: _Direction, sizes: list[float], steps: list[int]
) -> float | None:
    def changed(size: float) -> Task:
        return subject.moved(direction.pose(subject, size))

    return smallest(
        lambda size: trials.promises(changed(size), *steps),
        lambda size: trials.follows(changed(size), *steps),
        sizes,
        GRAINS[direction.how],
    )


def _proven(trials: Trials, subject: _Subject, direction: _Direction, size: float) -> Remedy | PathplanError:
    pose = direction.pose(subject, size)
    signed = direction.sign * size
    changes = {
        "frame": subject.frame or None,
        "axis": "xyz"[direction.axis],
        direction.how: signed,
        "pose": read_only(pose),
    }
    axis = ("-" if signed < 0 else "") + "xyz"[direction.axis]
    if direction.how == "shift":
        text = f"move {subject.name} by {format_value(1e3 * size)} mm along {axis}: {xyz_text(pose)}"
    else:
        about = "its z" if subject.frame else "z"
        text = f"turn {subject.name} by {format_value(np.rad2deg(signed))} deg about {about}: {rpy_text(pose)}"
    step = None if subject.frame else subject.step
    return trials.proven("frame" if subject.frame else "target", text, subject.moved(pose), changes, step)


def _promise(trials: Trials, subject: _Subject, direction: _Direction) -> float:
    """How far a small move in a direction leads away from what stops the arm: only the order of trials hangs on it."""
    data, arm = trials.error.data, trials.task.arm
    pose, best = data.get("pose"), data.get("best")
    if pose is None or best is None or not np.isfinite(best).all():
        return 0.0
    twist = np.zeros(6)
    if direction.how == "shift":
        twist[:3] = direction.sign * subject.within[:3, direction.axis]
    else:
        base_from_subject = subject.within @ subject.pose
        axis = base_from_subject[:3, 2] if subject.frame else np.array([0.0, 0.0, 1.0])
        away = pose[:3, 3] - base_from_subject[:3, 3] if subject.frame else np.zeros(3)
        twist[:3], twist[3:] = direction.sign * np.cross(axis, away), direction.sign * axis
    if "position_error" in data:
        return float(twist[:3] @ (arm.forward(best)[:3, 3] - pose[:3, 3]))
    if data.get("joint") in arm.limits.names and "limit" in data:
        row = arm.limits.names.index(data["joint"])
        low, high = arm.limits.position[row]
        inwards = 1.0 if abs(data["limit"] - low) < abs(data["limit"] - high) else -1.0
        scale = np.repeat([1.0 / arm.length, 1.0], 3)[:, None]
        change = np.linalg.pinv(arm.jacobian(best) * scale, rcond=1e-3) @ (twist * scale[:, 0])
        return float(inwards * (arm.limits.matrix[row] @ change))
    return 0.0
