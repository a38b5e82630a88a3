"""Remedies in words: the keys of a task file as they would have to be written."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from pathplan.arm import Arm
from pathplan.path.refusals import rpy_of
from pathplan.task.model import Array, Task
from pathplan.units import format_value, joint_dimension, to_screen

__all__ = ["configuration_text", "joints_text", "rpy_text", "step_text", "xyz_text"]


def step_text(task: Task, index: int) -> str:
    """What a step (0-based) is called: its number and its name."""
    step = task.steps[index]
    return f"step {index + 1}" + (f" ({step.name})" if step.name else "")


def joints_text(arm: Arm, q: Array) -> str:
    """Joint positions as a list of a task file, to 0.0001 mm or deg."""
    values = [to_screen(float(v), joint_dimension(j.kind, "position")) for j, v in zip(arm.joints, q, strict=True)]
    return _listed(np.round(values, 4))


def configuration_text(words: Mapping[str, str]) -> str:
    """A configuration as people say it."""
    return ", ".join(f"{part} {word}" for part, word in words.items())


def xyz_text(pose: Array) -> str:
    """The key xyz of a pose (4, 4)."""
    return f"xyz = {_listed(1e3 * pose[:3, 3])}"


def rpy_text(pose: Array) -> str:
    """The key rpy of a pose (4, 4)."""
    return f"rpy = {_listed(np.rad2deg(rpy_of(pose)))}"


def _listed(values: Array) -> str:
    return f"[{', '.join(format_value(round(float(value), 6) + 0.0, 9) for value in values)}]"
