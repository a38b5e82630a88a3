"""A task with one thing of it changed, as if its file had said so: the start, a frame, a step, a payload."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.task.model import Step, Target, Task
from pathplan.tomlfile import read_only

__all__ = ["ancestors", "numbered", "with_frame", "with_inserted", "with_payload", "with_start", "with_step"]

Array = NDArray[np.float64]
RETURN = ": return"  # how `where` of the step ends that goes back to the start


def ancestors(task: Task, frame: str) -> list[str]:
    """The frame and those it stands in, the outermost last; "base" is none of them."""
    chain = []
    while frame != "base":
        chain.append(frame)
        frame = task.frames[frame].parent
    return chain


def with_start(task: Task, start: Array) -> Task:
    """The task started at other joint positions (n,), to which it also returns if it returns."""
    start = read_only(start)
    last = task.steps[-1]
    if not last.where.endswith(RETURN) or last.target is None:
        return replace(task, start=start)
    target = replace(last.target, joints=start)
    if target.frame_from_tool is not None:
        arm = task.arm if last.tool in ("", task.arm.tool.name) else task.arm.equipped(tool=last.tool)
        target = replace(target, frame_from_tool=read_only(arm.forward(start)))
    return replace(task, start=start, steps=(*task.steps[:-1], replace(last, target=target)))


def with_frame(task: Task, name: str, parent_from_frame: Array) -> Task:
    """The task with a frame moved in its parent, and with it all that was given in it or in frames that stand in it."""
    moved = replace(task.frames[name], parent_from_frame=read_only(parent_from_frame))
    changed = replace(task, frames={**task.frames, name: moved})
    steps = []
    shifts: dict[str, Array] = {}
    for step in task.steps:
        if step.point_frame != "base" and name in ancestors(task, step.point_frame):
            if step.point_frame not in shifts:
                before, after = (one.carrier_from_frame(step.point_frame)[1] for one in (task, changed))
                shifts[step.point_frame] = after @ np.linalg.inv(before)
            step = _shifted(step, shifts[step.point_frame])
        steps.append(step)
    return replace(changed, steps=tuple(steps))


def _shifted(step: Step, shift: Array) -> Step:
    """A step whose points in the base frame are moved by `shift` (4, 4)."""
    changes: dict[str, Any] = {}
    for key in ("via", "centre"):
        point = getattr(step, key)
        if point is not None:
            changes[key] = read_only(shift[:3, :3] @ point + shift[:3, 3])
    if step.axis is not None:
        changes["axis"] = read_only(shift[:3, :3] @ step.axis)
    return replace(step, **changes)


def with_step(task: Task, index: int, **changes: Any) -> Task:
    """The task with fields of one step (0-based) changed."""
    steps = list(task.steps)
    steps[index] = replace(steps[index], **changes)
    return replace(task, steps=tuple(steps))


def with_inserted(task: Task, index: int, joints: Array) -> Task:
    """The task with a joint step to `joints` (n,) before step `index` (0-based), from a stop point to a stop point."""
    following = task.steps[index]
    before = [replace(step, blend=None) if step.index == index - 1 else step for step in task.steps[:index]]
    step = Step(
        index=index,
        motion="joint",
        where=f"before {following.where}",
        target=Target(joints=read_only(joints)),
        tool=following.tool,
        payload=following.payload,
    )
    return replace(task, steps=numbered((*before, step, *task.steps[index:])))


def numbered(steps: Sequence[Step]) -> tuple[Step, ...]:
    """The steps counted anew from 0."""
    return tuple(step if step.index == i else replace(step, index=i) for i, step in enumerate(steps))


def with_payload(task: Task, name: str, share: float) -> Task:
    """The task with a payload of a share of its mass, its shape and centre of mass kept."""
    arm = task.arm

    def lighter(payload: Any) -> Any:
        return replace(payload, mass=payload.mass * share, inertia=payload.inertia * share)

    payloads = {key: lighter(value) if key == name else value for key, value in arm.payloads.items()}
    own = arm.payload if arm.payload is None or arm.payload.name != name else lighter(arm.payload)
    return replace(task, arm=replace(arm, payloads=payloads, payload=own))
