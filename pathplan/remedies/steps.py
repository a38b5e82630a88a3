"""Remedies in the refused step itself: a joint step in its place, a tolerance of its orientation, a smaller blend, a
pose the arm serves, less load.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from pathplan.arm import Arm
from pathplan.errors import UnreachableError
from pathplan.path.cartesian import tool_of
from pathplan.remedies.model import Remedy
from pathplan.remedies.smallest import smallest
from pathplan.remedies.trials import Trials
from pathplan.remedies.words import rpy_text, step_text, xyz_text
from pathplan.task.changed import with_payload, with_step
from pathplan.task.model import Array, Blend, Task
from pathplan.task.steps import takes_tolerance
from pathplan.tomlfile import read_only
from pathplan.units import format_quantity

__all__ = ["joint_step", "less_load", "orientation_tolerance", "served_pose", "smaller_blend"]

TOLERANCES = (0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0)  # deg
SHARES = 0.5 ** np.arange(1, 7)  # of a blend, tried in turn
FARTHEST = 0.5  # of the arm's characteristic length: a pose further off is another one
MOST_TILT = np.pi / 4  # rad
LEAST_LOAD = 0.05  # share of a payload's mass below which it is another payload


def joint_step(trials: Trials) -> Iterator[Remedy]:
    """A joint step in place of the line or arc."""
    task, step = trials.task, trials.task.steps[trials.step]
    if step.motion not in ("line", "arc") or step.target is None or trials.corner:
        return
    changed = with_step(
        task, trials.step, motion="joint", via=None, centre=None, axis=None, angle=None, along=False, point_frame="base"
    )
    what = f"a joint step in place of the {step.motion}"
    if trials.promises(changed, trials.step) and trials.follows(changed, trials.step):
        found = trials.proven(
            "motion", f"{step_text(task, trials.step)}: {what}", changed, {"motion": "joint"}, trials.step
        )
        if isinstance(found, Remedy):
            yield found
            return
        what += f" (then {found})"
    trials.tried.append(what)


def orientation_tolerance(trials: Trials) -> Iterator[Remedy]:
    """The least orientation tolerance with which a line, arc or curve runs through a singularity, not past it."""
    task, step = trials.task, trials.task.steps[trials.step]
    if step.motion not in ("line", "arc", "curve") or trials.corner or trials.held:
        return
    if step.roll_free or step.tilt or task.carrier(step) is not None or not takes_tolerance(task.arm):
        return

    def tolerant(angle: float) -> Task:
        return with_step(task, trials.step, orientation_tolerance=float(np.deg2rad(angle)))

    def promises(angle: float) -> bool:
        return trials.promises(tolerant(angle), trials.step)

    def works(angle: float) -> bool:
        return trials.follows(tolerant(angle), trials.step)

    sizes = [angle for angle in TOLERANCES if np.deg2rad(angle) > step.orientation_tolerance]
    angle = smallest(promises, works, sizes, TOLERANCES[0])
    if angle is not None:
        text = f'{step_text(task, trials.step)}: orientation_tolerance = "{angle:g} deg"'
        value = {"orientation_tolerance": float(np.deg2rad(angle))}
        found = trials.proven("orientation_tolerance", text, tolerant(angle), value, trials.step)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(f"{step_text(task, trials.step)}: an orientation_tolerance up to {TOLERANCES[-1]:g} deg")


def smaller_blend(trials: Trials) -> Iterator[Remedy]:
    """The largest half, quarter, ... of a blend whose corner can be followed, else a stop."""
    task, step = trials.task, trials.task.steps[trials.step]
    if not trials.corner or step.blend is None:
        return
    for share in (*SHARES, 0.0):
        blend = _blend(step.blend, float(share))
        changed = with_step(task, trials.step, blend=blend)
        if not trials.follows(changed, trials.step):
            continue
        text = f"{step_text(task, trials.step)}: " + (f'blend = "{blend.text}"' if blend else "no blend: a stop point")
        value = None if blend is None else blend.value
        found = trials.proven("blend", text, changed, {"blend": value, "kind": step.blend.kind}, trials.step)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(f"{step_text(task, trials.step)}: smaller blends, and none")


def _blend(blend: Blend, share: float) -> Blend | None:
    if share == 0.0:
        return None
    dimension = {"length": "length", "angle": "angle", "share": "ratio"}[blend.kind]
    return replace(blend, value=blend.value * share, text=format_quantity(blend.value * share, dimension))


def served_pose(trials: Trials) -> Iterator[Remedy]:
    """The nearest pose that the arm does serve, in place of a target tilted or turned as it can't be."""
    task, data, step = trials.task, trials.error.data, trials.task.steps[trials.step]
    if "angle_error" not in data or len(task.arm.tool_joints) >= 6 or step.target is None:
        return
    if step.target.frame_from_tool is None or step.curve is not None or task.carrier(step) is not None:
        return
    what = f"{step_text(task, trials.step)}: the nearest pose that {task.arm.name} serves"
    swap = np.linalg.solve(task.arm.tool.flange_from_tool, tool_of(task.arm, step.tool).flange_from_tool)
    for own in _served_poses(task.arm, data):
        target = replace(step.target, frame_from_tool=_in_frame(task, step.target.frame, own @ swap))
        changed = with_step(task, trials.step, target=target)
        if not trials.follows(changed, trials.step):
            continue
        pose = target.frame_from_tool
        assert pose is not None
        text = f"{what}, {xyz_text(pose)}, {rpy_text(pose)} in frame {target.frame}"
        found = trials.proven("target", text, changed, {"pose": pose, "frame": target.frame}, trials.step)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(what)


def _served_poses(arm: Arm, data: Mapping[str, Any]) -> list[Array]:
    """Poses of the arm's own tool near the one refused: the same but for the roll, the least rolled first; the nearest
    answer of the inverse, unless it is too far off to be meant.
    """
    poses: list[Array] = []
    if arm.serves_pointing:
        try:
            poses = list(arm.forward(arm.with_tool_roll().inverse(data["pose"])[:, : arm.n]))
        except UnreachableError:
            poses = []
        poses.sort(key=lambda pose: -float(np.trace(pose[:3, :3].T @ data["pose"][:3, :3])))
    if data["position_error"] <= FARTHEST * arm.length and data["angle_error"] <= MOST_TILT:
        poses.append(arm.forward(np.nan_to_num(data["best"])))
    return poses


def _in_frame(task: Task, frame: str, base_from_tool: Array) -> Array:
    return read_only(np.asarray(np.linalg.solve(task.base_from_frame(frame), base_from_tool), dtype=float))


def less_load(trials: Trials) -> Iterator[Remedy]:
    """A lighter payload, where a pose can't be held with the one that is carried."""
    task, name = trials.task, trials.task.steps[trials.step].payload
    if not trials.held or name is None:
        return
    carried = task.arm.payloads.get(name, task.arm.payload)
    if carried is None or carried.mass <= 0.0:
        return

    def lighter(less: float) -> Task:
        return with_payload(task, name, 1.0 - less)

    def works(less: float) -> bool:
        return less < 1.0 and trials.follows(lighter(less), trials.step)

    most = 1.0 - LEAST_LOAD
    less = smallest(works, works, [0.05, 0.1, 0.2, 0.4, 0.6, 0.8, most], 0.01)
    if less is not None and less <= most:
        mass = carried.mass * (1.0 - less)
        now, then = format_quantity(carried.mass, "mass"), format_quantity(mass, "mass", 3)
        text = f"payload {name} of {then} in place of {now}"
        found = trials.proven("payload", text, lighter(less), {"payload": name, "mass": mass})
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(f"payload {name} down to {LEAST_LOAD:.0%} of its mass")
