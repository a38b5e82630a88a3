"""Five axes with a free roll: planned as six, the sixth a turn about the tool's own axis that nothing limits.

Five axes decide by themselves how the tool is turned about its axis, so a free roll leaves nothing to choose. With the
virtual joint every pose has its answers, and lines and corners are followed like those of six axes; in the finished
path that joint is left out.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.path.joint import Array
from pathplan.task.model import Step, Task, Taught

__all__ = ["decides_roll", "with_virtual_roll"]


def decides_roll(arm: Arm) -> bool:
    """Whether position and axis of the tool decide its roll: five axes that serve them."""
    return len(arm.tool_joints) == 5 and arm.serves_pointing


def with_virtual_roll(task: Task) -> Task:
    """The task for its arm with a virtual roll joint, after all others. Raises InputError for steps that ask for a
    roll, or another tool.
    """
    arm = task.arm
    steps = [_with_roll(task, step) for step in task.steps]
    return replace(task, arm=arm.with_tool_roll(), start=np.append(task.start, 0.0), steps=tuple(steps))


def _with_roll(task: Task, step: Step) -> Step:
    name = task.arm.name
    if step.tool not in ("", task.arm.tool.name):
        raise InputError(f"{step.where}: tool: {name} has five axes, and with a free roll expected one tool throughout")
    target, taught = step.target, step.taught
    asks = step.motion not in ("wait", "taught") and not step.roll_free
    if asks and not (step.motion == "joint" and target is not None and target.joints is not None):
        hint = 'expected roll = "free" here too, as in other steps'
        raise InputError(f"{step.where}: roll: {name} has five axes, which decide how the tool is turned: {hint}")
    if target is not None and target.joints is not None:
        target = replace(target, joints=_extended(target.joints))
    if taught is not None:
        taught = Taught(taught.name, _extended(taught.points), taught.tolerance, taught.note)
    return replace(step, target=target, taught=taught)


def _extended(joints: Array) -> Array:
    """Joint vectors (..., n) with the virtual joint at zero."""
    return np.concatenate([joints, np.zeros((*joints.shape[:-1], 1))], axis=-1)
