"""The tool in a table: its speeds and acceleration, the caps on them, and how near it comes to a singularity."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.arm.kinematics import smallest_singular_value
from pathplan.auditing.model import Singularity
from pathplan.auditing.shares import Array, Rows
from pathplan.path.caps import StepCaps, caps_of
from pathplan.path.cartesian import tool_of

__all__ = [
    "ToolCaps",
    "arms_by_step",
    "by_tool",
    "nearest_singularity",
    "step_caps",
    "tool_acceleration",
    "tool_speed",
    "tool_turning_speed",
]

Numbers = NDArray[np.intp]
TRAVEL = 0.02  # rad of joint travel, m over the arm's length, between rows at which a singular value is taken
FEW = 512  # rows that are not worth halving


class ToolCaps(NamedTuple):
    """Caps on the tool (S,) by step, inf where there is none: m/s, m/s^2, rad/s."""

    speed: Array
    acceleration: Array
    turning_speed: Array


def step_caps(arm: Arm, task: Any = None) -> ToolCaps:
    """The lowest of what step, task and tool say; (1,), of the tool, without a task. Raises nothing."""
    tool = arm.tool
    rows = [StepCaps(tool.speed, tool.acceleration, tool.turning_speed)]
    if task is not None:
        rows = [caps_of(step, task, arm) for step in task.steps]
    return ToolCaps(*np.array([[math.inf if cap is None else cap for cap in row] for row in rows]).T.copy())


def arms_by_step(arm: Arm, task: Any = None) -> tuple[Arm, ...]:
    """The arm with the tool of each step, (1,) without a task; steps with the same tool share one. No payload."""
    if task is None:
        return (arm,)
    made = {arm.tool.name: arm}
    for step in task.steps:
        tool = tool_of(arm, step.tool)
        if tool.name not in made:
            made[tool.name] = arm.equipped(tool=tool)
    return tuple(made[tool_of(arm, step.tool).name] for step in task.steps)


def by_tool(arms: Sequence[Arm], step: NDArray[np.int64]) -> Iterator[tuple[Arm, Numbers]]:
    """Each arm among those of the steps (S,) that rows of `step` (N,) are carried out with, and its rows."""
    different = list(dict.fromkeys(arms))
    if len(different) == 1:
        yield different[0], np.arange(len(step))
        return
    number = {arm: k for k, arm in enumerate(different)}
    of_step = np.array([number[arm] for arm in arms])
    mine = of_step[np.minimum(step, len(arms) - 1)]
    for k in np.unique(mine):
        yield different[k], np.flatnonzero(mine == k)


def tool_speed(arm: Arm, position: Array, velocity: Array) -> Array:
    """Speed (N,) m/s of the tool centre point for positions and velocities (N, n)."""
    return np.linalg.norm(np.einsum("nij,nj->ni", arm.jacobian(position)[:, :3], velocity), axis=1)


def tool_turning_speed(arm: Arm, position: Array, velocity: Array) -> Array:
    """Angular speed (N,) rad/s of the tool for positions and velocities (N, n)."""
    return np.linalg.norm(np.einsum("nij,nj->ni", arm.jacobian(position)[:, 3:], velocity), axis=1)


def tool_acceleration(arm: Arm, position: Array, velocity: Array, acceleration: Array) -> Array:
    """Acceleration (N,) m/s^2 of the tool centre point: J qdd + dJ/dt qd.

    dJ/dt is the central difference of J along the velocity over 1e-4 rad or m, good to 1e-8 of its size.
    """
    speed = np.linalg.norm(velocity, axis=1)
    over = np.where(speed > 0, 1e-4 / np.where(speed > 0, speed, 1.0), 0.0)  # s in which 1e-4 is travelled
    ahead = position + velocity * over[:, None]
    behind = position - velocity * over[:, None]
    change = arm.jacobian(ahead)[:, :3] - arm.jacobian(behind)[:, :3]
    rate = change / np.where(over > 0, 2 * over, 1.0)[:, None, None]
    linear = np.einsum("nij,nj->ni", arm.jacobian(position)[:, :3], acceleration)
    return np.linalg.norm(linear + np.einsum("nij,nj->ni", rate, velocity), axis=1)


def nearest_singularity(
    arm: Arm, position: Array, rows: Rows, numbers: Numbers, before: Singularity | None = None
) -> Singularity:
    """Of positions (N, n), at rows of these numbers (N,), the one with the smallest singular value.

    `before`, what earlier rows gave, counts too.

    Not every row needs its own: between two rows d apart (sum of joint travels, prismatic ones over
    `arm.length`) the value can fall below the mean of the two by at most C d / 2, since turning joint i
    moves each column of the scaled Jacobian by at most sqrt(1 + v^2), v the longest linear part of a
    column, and singular values move by no more than the matrix does (Weyl 1912). Intervals whose bound lies
    below the least value known are halved until few rows are left, and these are looked at one by one: the
    answer is that of all rows.
    """
    scale = np.array([1.0 if joint.kind == "revolute" else 1.0 / arm.length for joint in arm.joints])
    travel = np.concatenate([[0.0], np.cumsum(np.abs(np.diff(position, axis=0)) @ scale)])
    sampled = np.flatnonzero(np.diff(np.floor(travel / TRAVEL)) > 0) + 1
    sampled = np.unique(np.concatenate([[0], sampled, [len(position) - 1]]))
    value = np.full(len(position), np.inf)
    value[sampled] = smallest_singular_value(arm, position[sampled])
    least = min(float(value.min()), before.value if before else np.inf)
    low, high = sampled[:-1], sampled[1:]
    steepest = _steepest(arm, arm.jacobian(position[sampled]), scale, np.diff(travel[sampled]))
    while len(low):
        bound = (value[low] + value[high] - steepest * (travel[high] - travel[low])) / 2
        near = (bound < least) & (high - low > 1)
        low, high, steepest = low[near], high[near], steepest[near]
        few = np.sum(high - low) < FEW
        inner = [np.arange(i + 1, k) for i, k in zip(low, high, strict=True)] if few else [(low + high) // 2]
        at = np.concatenate([np.empty(0, dtype=np.intp), *inner])
        if len(at):
            value[at] = smallest_singular_value(arm, position[at])
            least = min(least, float(value[at].min()))
        if few:
            break
        low, high = np.concatenate([low, at]), np.concatenate([at, high])
        steepest = np.concatenate([steepest, steepest])
    i = int(np.argmin(value))
    if before is not None and before.value <= value[i]:
        return before
    return Singularity(float(value[i]), float(rows.time[i]), int(rows.step[i]), int(numbers[i]))


def _steepest(arm: Arm, jacobian: Array, scale: Array, apart: Array) -> Array:
    """The C of each interval (M - 1,) between the rows that have these Jacobians (M, 6, n)."""
    lengths = (np.linalg.norm(jacobian[:, :3], axis=1) / (arm.length * scale)).max(axis=1)
    # each unit of travel adds no more than the longest v, or 1 where a prismatic joint moves
    longest = np.exp(np.minimum(apart, 50.0)) * np.maximum(np.maximum(lengths[1:], lengths[:-1]), 1.0)
    return np.asarray(math.sqrt(arm.n) * np.sqrt(1 + longest**2))
