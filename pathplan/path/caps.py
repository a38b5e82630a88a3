"""What caps the tool on a step: the lowest of what the step, its tool and the task say."""

from __future__ import annotations

from typing import NamedTuple

from pathplan.arm import Arm
from pathplan.path.cartesian import tool_of
from pathplan.task.model import Step, Task

__all__ = ["StepCaps", "caps_of", "lower"]


class StepCaps(NamedTuple):
    """Caps on the tool: speed (m/s), acceleration (m/s^2), turning speed (rad/s); None: no cap."""

    speed: float | None
    acceleration: float | None
    turning_speed: float | None


def caps_of(step: Step, task: Task, arm: Arm) -> StepCaps:
    """The caps of one step of a task. A speed that is to be held caps the tool as well."""
    tool = tool_of(arm, step.tool)
    return StepCaps(
        lower(step.speed, step.held_speed, tool.speed, task.speed),
        lower(step.acceleration, tool.acceleration),
        lower(step.turning_speed, tool.turning_speed, task.turning_speed),
    )


def lower(*values: float | None) -> float | None:
    """The lowest of the values that there are."""
    return min((value for value in values if value is not None), default=None)
