"""Modified DH rows of any chain, found from its axes at q = 0, so that one way leads to the toolbox.

Frames after Craig, "Introduction to Robotics", ch. 3: z along the axis, x along the common normal to the
next axis.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm.chain import DHRow
from pathplan.arm.geometry import zero_axes
from pathplan.arm.model import Array
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["ModifiedChain", "modified_chain"]

PARALLEL = 1e-8  # sine of the angle below which the common normal has no place of its own


@dataclass(frozen=True)
class ModifiedChain:
    """base_from_tool(q) = base @ A_1(q_1) ... A_n(q_n) @ tool, with modified DH rows A_i."""

    rows: tuple[DHRow, ...]
    base: Array  # (4, 4)
    tool: Array  # (4, 4)
    base_from_frames: Array  # (n, 4, 4) the DH frames at q = 0


def modified_chain(arm: Arm) -> ModifiedChain:
    """Modified DH rows of a single chain.

    Raises InputError for an arm that branches.
    """
    if arm.tool_joints != tuple(range(arm.n)):
        raise InputError(f"{arm.name}: expected a single chain from base to tip, the arm branches")
    points, axes, zero_pose = zero_axes(arm)
    frames = np.tile(np.eye(4), (arm.n, 1, 1))
    origin, x = points[0], _any_normal(axes[0])
    for i, axis in enumerate(axes):
        # Start from where the last common normal met this axis: of parallel axes that keeps d at zero.
        origin = points[i] + axis * float(axis @ (origin - points[i]))
        x = x - axis * float(axis @ x)
        x = x / np.linalg.norm(x) if np.linalg.norm(x) > 1e-6 else _any_normal(axis)
        if i + 1 < arm.n:
            origin, x = _common_normal(origin, axis, points[i + 1], axes[i + 1], x)
        frames[i, :3, 0], frames[i, :3, 1], frames[i, :3, 2] = x, np.cross(axis, x), axis
        frames[i, :3, 3] = origin
    rows = [DHRow()]
    for before, after in pairwise(frames):
        rows.append(_row(np.linalg.inv(before) @ after))
    return ModifiedChain(tuple(rows), frames[0], np.linalg.inv(frames[-1]) @ zero_pose, frames)


def _any_normal(axis: Array) -> Array:
    """A unit vector square to an axis."""
    normal = np.cross(axis, np.eye(3)[np.argmin(np.abs(axis))])
    return np.asarray(normal / np.linalg.norm(normal))


def _common_normal(origin: Array, axis: Array, point: Array, next_axis: Array, x: Array) -> tuple[Array, Array]:
    """Foot on this axis and unit direction of the common normal to the next axis; `x` where the two are one
    line."""
    across = np.cross(axis, next_axis)
    sine = float(np.linalg.norm(across))
    apart = point - origin
    if sine > PARALLEL:
        foot = origin + axis * float(np.cross(apart, next_axis) @ across) / sine**2
        normal = across / sine
        return foot, normal if float(normal @ apart) > -1e-12 else -normal
    apart = apart - axis * float(axis @ apart)
    distance = float(np.linalg.norm(apart))
    return origin, apart / distance if distance > 1e-9 else x


def _row(step: Array) -> DHRow:
    """The row whose Rx(alpha) Tx(a) Rz(theta) Tz(d) is a step between frames whose x is the common normal."""
    alpha = float(np.arctan2(-step[1, 2], step[2, 2]))
    theta = float(np.arctan2(-step[0, 1], step[0, 0]))
    d = float(-step[1, 3] * np.sin(alpha) + step[2, 3] * np.cos(alpha))
    return DHRow(a=float(step[0, 3]), alpha=alpha, d=d, theta=theta)
