"""How far an arm gets: the extremes of its mechanical interface within the position limits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm.model import Array

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["Reach", "reach"]

SAMPLES = 4000
CLIMBERS = 24  # samples that are taken further uphill
ROUNDS = 120


@dataclass(frozen=True)
class Reach:
    """Extremes of the tool centre point (m, base frame), found by search: never beyond what is reached, and to about a
    tenth of a millimetre what is.
    """

    low: Array  # (3,) x, y, z
    high: Array  # (3,)
    from_first_axis: float | None  # farthest from the axis of the first revolute joint, None without one


def reach(arm: Arm) -> Reach:
    """The extremes of an arm's tool centre point; of the bare arm, of its mechanical interface."""
    joints = list(arm.tool_joints)
    low = np.array([np.maximum(arm.joints[i].position[0], -np.pi) for i in joints])
    high = np.array([np.minimum(arm.joints[i].position[1], np.pi) for i in joints])
    for k, i in enumerate(joints):
        if arm.joints[i].kind == "prismatic":
            low[k], high[k] = arm.search_range[i]
        elif arm.joints[i].position[0] > -np.inf:
            low[k], high[k] = arm.joints[i].position
    q = np.zeros((SAMPLES, arm.n))
    q[:, joints] = np.random.default_rng(3).uniform(low, high, (SAMPLES, len(joints)))
    points = arm.forward(q)[:, :3, 3]
    extremes = []
    for direction in np.concatenate([-np.eye(3), np.eye(3)]):
        best = q[np.argsort(-(points @ direction))[:CLIMBERS]]
        extremes.append(_climbed(arm, best, joints, low, high, direction, None))
    first = next((i for i in joints if arm.joints[i].kind == "revolute"), None)
    far = None
    if first is not None:
        far = _climbed(
            arm, q[np.argsort(-_off_axis(arm, first, q)[0])[:CLIMBERS]], joints, low, high, np.zeros(3), first
        )
    return Reach(-np.array(extremes[:3]), np.array(extremes[3:]), far)


def _off_axis(arm: Arm, joint: int, q: Array) -> tuple[Array, Array]:
    """Distance (N,) of the tool centre point from a joint's axis, and the unit vectors (N, 3) away from it."""
    frame = arm.base_from_joint(arm.joint_names[joint], q)
    axis = frame[:, :3, :3] @ arm.axes[joint]
    off = arm.forward(q)[:, :3, 3] - frame[:, :3, 3]
    off = off - axis * np.sum(axis * off, axis=1, keepdims=True)
    size = np.linalg.norm(off, axis=1)
    return size, off / np.maximum(size, 1e-12)[:, None]


def _climbed(
    arm: Arm, q: Array, joints: list[int], low: Array, high: Array, direction: Array, axis: int | None
) -> float:
    """The largest value along a direction, or away from an axis, by steps uphill that stay within the limits."""

    def value(at: Array) -> Array:
        if axis is not None:
            return _off_axis(arm, axis, at)[0]
        return np.asarray(arm.forward(at)[:, :3, 3] @ direction)

    now, step = value(q), np.full(len(q), 0.3)
    for _ in range(ROUNDS):
        uphill = _off_axis(arm, axis, q)[1] if axis is not None else np.broadcast_to(direction, (len(q), 3))
        slope = np.einsum("nij,ni->nj", arm.jacobian(q)[:, :3, joints], uphill)
        tried = q.copy()
        size = np.maximum(np.abs(slope).max(axis=1), 1e-12)
        tried[:, joints] = np.clip(q[:, joints] + step[:, None] * slope / size[:, None], low, high)
        new = value(tried)
        better = new > now
        q[better], now[better] = tried[better], new[better]
        step = np.where(better, step * 1.3, step * 0.4)
    return float(now.max())
