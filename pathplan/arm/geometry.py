"""The axes of a chain at q = 0, which is all that an inverse needs to know of an arm.

A chain of m joints is E_1(q_1) ... E_m(q_m) = G, where E_i is the motion about or along axis i as it stands at
q = 0 and G = base_from_tool times the inverse of its value at q = 0 (product of exponentials; Brockett 1984, Murray,
Li & Sastry 1994, ch. 3). Read backwards it is again such a chain: E_m(-q_m) ... E_1(-q_1) = G^-1.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.chain import chain_from_axes
from pathplan.arm.kinematics import Chain, walk
from pathplan.arm.model import Array, Kind

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["EXACT", "Geometry", "Tolerance", "across", "meeting_point", "meeting_points", "near", "zero_axes"]

SHORT = 1e-6  # m: a link shorter than this makes no two-link mechanism


@dataclass(frozen=True)
class Tolerance:
    """How far off axes may be and still count as parallel (sine of the angle) or meeting (m)."""

    angle: float
    distance: float


EXACT = Tolerance(1e-9, 1e-9)  # 1 nm on a metre


def near(length: float) -> Tolerance:
    """What measured arms and rounded files are off by: a few minutes of arc, a thousandth of the arm's length."""
    return Tolerance(2e-3, 1e-3 * length)


@dataclass(frozen=True)
class Geometry:
    """m joints in order from base to tool, all at q = 0 in the base frame. Arrays are not to be written to.

    Parts of a chain (`of`) and chains read backwards (`reversed`) have no tool: their zero pose is the identity.
    """

    kinds: tuple[Kind, ...]
    points: Array  # (m, 3) a point on each axis
    axes: Array  # (m, 3) unit
    zero_pose: Array  # (4, 4) base_from_tool
    up: Array  # (3,) unit: what the words up, left and right of branch labels refer to
    length: float  # m, characteristic
    tolerance: Tolerance = EXACT
    numbers: tuple[int, ...] = ()  # what branch labels call the joints; empty: 1 to m

    def __post_init__(self) -> None:
        if not self.numbers:
            object.__setattr__(self, "numbers", tuple(range(1, len(self.kinds) + 1)))

    @property
    def m(self) -> int:
        return len(self.kinds)

    def reversed(self) -> Geometry:
        """The chain read backwards: the same joint values give the inverse motion."""
        return self.of(range(self.m - 1, -1, -1), -1.0)

    def of(self, joints: Iterable[int], sign: float = 1.0) -> Geometry:
        """Some of the joints, in the order given, their axes turned round where `sign` is -1."""
        at = list(joints)
        kinds, numbers = tuple(self.kinds[i] for i in at), tuple(self.numbers[i] for i in at)
        points, axes = self.points[at], sign * self.axes[at]
        return Geometry(kinds, points, axes, np.eye(4), self.up, self.length, self.tolerance, numbers)

    @cached_property
    def chain(self) -> Chain:
        """Constants of the kinematic walk over these m joints to the tool."""
        fixed, axes, tip = chain_from_axes(self.points, self.axes, self.zero_pose)
        return Chain.build(self.kinds, tuple(range(-1, self.m - 1)), fixed, axes, self.m - 1, tip)

    def motion(self, poses: Array) -> tuple[Array, Array]:
        """G of tool poses (N, 4, 4), as rotations (3, 3, N), rows first, and shifts (3, N)."""
        rotation = np.ascontiguousarray((poses[:, :3, :3] @ self.zero_pose[:3, :3].T).transpose(1, 2, 0))
        return rotation, poses[:, :3, 3].T - np.einsum("ijn,j->in", rotation, self.zero_pose[:3, 3])

    def upward(self, i: int) -> float:
        """1 for an axis that points up rather than down, else -1."""
        return 1.0 if float(self.up @ self.axes[i]) >= 0.0 else -1.0

    def revolute(self, *joints: int) -> bool:
        return all(self.kinds[i] == "revolute" for i in joints)

    def parallel(self, i: int, j: int) -> bool:
        sine = float(np.linalg.norm(np.cross(self.axes[i], self.axes[j])))
        return sine <= self.tolerance.angle

    def meet(self, i: int, j: int) -> Array | None:
        """(3,) where two axes that are not parallel meet, None if they don't."""
        if self.parallel(i, j):
            return None
        return meeting_point(self.points[[i, j]], self.axes[[i, j]], self.tolerance.distance)

    def foot(self, i: int, j: int) -> Array:
        """(3,) the point of axis i that is nearest to axis j; the axes are not parallel."""
        normal = np.cross(self.axes[i], self.axes[j])
        apart = self.points[j] - self.points[i]
        along = float(np.cross(apart, self.axes[j]) @ normal) / float(normal @ normal)
        return np.asarray(self.points[i] + along * self.axes[i])

    def link(self, axis: int, start: Array, end: Array) -> float:
        """Distance between two points across an axis."""
        return float(np.linalg.norm(across(end - start, self.axes[axis])))


def zero_axes(arm: Arm, q: Any = None) -> tuple[Array, Array, Array]:
    """Points (m, 3), unit axes (m, 3) and tool pose (4, 4) at q = 0 (or at q (n,)) in the base frame, of the joints
    between base and tool in their order (`Arm.tool_joints`).
    """
    axes_at: list[tuple[Array, Array]] = []
    rows = np.zeros((1, arm.n)) if q is None else np.asarray(q, dtype=float)[None]
    columns, tcp = walk(arm.chain, rows, axes_at)
    pose = np.eye(4)
    pose[:3, :3], pose[:3, 3] = columns[:, :, 0].T, tcp[:, 0]
    return (
        np.array([point[:, 0] for _, point in axes_at]),
        np.array([axis[:, 0] for axis, _ in axes_at]),
        pose,
    )


def meeting_points(points: Array, axes: Array) -> tuple[Array, float]:
    """(3,) the point nearest to all axes (k, 3) through points (k, 3), and its largest distance from one; infinite
    for axes that are all parallel.
    """
    projector = np.eye(3) - axes[:, :, None] * axes[:, None, :]
    total = projector.sum(axis=0)
    if np.linalg.cond(total) > 1e12:
        return points.mean(axis=0), np.inf
    centre = np.asarray(np.linalg.solve(total, np.einsum("kij,kj->i", projector, points)))
    distance = np.linalg.norm(np.einsum("kij,kj->ki", projector, centre - points), axis=1)
    return centre, float(distance.max())


def meeting_point(points: Array, axes: Array, tolerance: float = EXACT.distance) -> Array | None:
    """(3,) the point on all axes (k, 3) through points (k, 3), None if there is none."""
    centre, distance = meeting_points(points, axes)
    return centre if distance <= tolerance else None


def across(vector: Array, axis: Array) -> Array:
    """The part of a vector square to a unit axis."""
    return np.asarray(vector - axis * float(axis @ vector))
