"""What structure the axes make, judged from their geometry at q = 0 and never from a name or the form of a
file."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Literal

import numpy as np

from pathplan.arm.kinematics import jacobian, walk
from pathplan.arm.model import Array

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["COMPONENTS", "ClosedForm", "meeting_point", "recognise", "served_components", "zero_axes"]

COMPONENTS = ("x", "y", "z", "rotation about x", "rotation about y", "rotation about z")
PARALLEL = 1e-9  # sine of the angle below which axes count as parallel: 1 nm on a metre
COINCIDE = 1e-9  # m
SHORT = 1e-6  # m: a link shorter than this makes no two-link mechanism


@dataclass(frozen=True)
class ClosedForm:
    """Constants of a closed-form inverse, all at q = 0 in the base frame."""

    structure: Literal["gantry", "scara", "spherical wrist"]
    order: tuple[int, ...]  # joints in the order the closed form speaks of them
    points: Array  # (n, 3) a point on each axis
    axes: Array  # (n, 3) unit
    zero_pose: Array  # (4, 4) base_from_tool
    centre: Array  # (3,) spherical wrist: where axes 4, 5, 6 meet; else the tool centre point
    up: Array  # (3,) unit: what the words up, left and right of the branch labels refer to


def zero_axes(arm: Arm) -> tuple[Array, Array, Array]:
    """Points (n, 3), unit axes (n, 3) and tool pose (4, 4) at q = 0 in the base frame. For a single chain."""
    axes_at: list[tuple[Array, Array]] = []
    columns, tcp = walk(arm.chain, np.zeros((1, arm.n)), axes_at)
    pose = np.eye(4)
    pose[:3, :3], pose[:3, 3] = columns[:, :, 0].T, tcp[:, 0]
    return (
        np.array([point[:, 0] for _, point in axes_at]),
        np.array([axis[:, 0] for axis, _ in axes_at]),
        pose,
    )


def recognise(arm: Arm) -> ClosedForm | None:
    """The closed form that fits the axes of an arm, or None."""
    if len(arm.chain.path) != arm.n:
        return None
    kinds = [joint.kind for joint in arm.joints]
    points, axes, zero_pose = zero_axes(arm)
    centre = zero_pose[:3, 3]
    structure: Literal["gantry", "scara", "spherical wrist"]
    revolute = [i for i, kind in enumerate(kinds) if kind == "revolute"]
    prismatic = [i for i, kind in enumerate(kinds) if kind == "prismatic"]
    if len(prismatic) == 3 and len(revolute) == 1 and abs(np.linalg.det(axes[prismatic])) > 1e-3:
        structure, order, main = "gantry", (*prismatic, *revolute), revolute[0]
    elif len(revolute) == 3 and len(prismatic) == 1 and all(_parallel(axes[0], axis) for axis in axes[1:]):
        links = [_across(points[j] - points[i], axes[0]) for i, j in pairwise(revolute)]
        if min(np.linalg.norm(link) for link in links) < SHORT:
            return None
        structure, order, main = "scara", (*revolute, *prismatic), revolute[0]
    elif kinds == ["revolute"] * 6:
        meets = _wrist_centre(points, axes)
        if meets is None:
            return None
        structure, order, main, centre = "spherical wrist", (0, 1, 2, 3, 4, 5), 0, meets
    else:
        return None
    # Up is the side of the main axis that opposes gravity; of a level main axis, its own positive side.
    against = -float(axes[main] @ arm.gravity)
    up = axes[main] * (-1.0 if against < -1e-6 else 1.0)
    return ClosedForm(structure, order, points, axes, zero_pose, centre, up)


def _wrist_centre(points: Array, axes: Array) -> Array | None:
    """Where the last three of six revolute axes meet if the arm also has parallel second and third axes,
    else None."""
    meets = meeting_point(points[3:], axes[3:])
    if meets is None or not _parallel(axes[1], axes[2]) or _parallel(axes[0], axes[1]):
        return None
    if _parallel(axes[3], axes[4]) or _parallel(axes[4], axes[5]):
        return None
    upper, lower = _across(points[2] - points[1], axes[1]), _across(meets - points[2], axes[1])
    return meets if min(np.linalg.norm(upper), np.linalg.norm(lower)) > SHORT else None


def meeting_point(points: Array, axes: Array) -> Array | None:
    """(3,) the point nearest to all axes (k, 3) through points (k, 3), None if it does not lie on each of
    them."""
    across = np.eye(3) - axes[:, :, None] * axes[:, None, :]
    moment = np.einsum("kij,kj->i", across, points)
    total = across.sum(axis=0)
    if np.linalg.cond(total) > 1e12:
        return None  # all parallel
    centre = np.asarray(np.linalg.solve(total, moment))
    distance = np.linalg.norm(np.einsum("kij,kj->ki", across, centre - points), axis=1)
    return centre if distance.max() < COINCIDE else None


def _parallel(a: Array, b: Array) -> bool:
    return bool(np.linalg.norm(np.cross(a, b)) < PARALLEL)


def _across(vector: Array, axis: Array) -> Array:
    """The part of a vector square to an axis."""
    return np.asarray(vector - axis * (axis @ vector))


def served_components(arm: Arm) -> frozenset[str]:
    """See `Arm.serves`: the twist components that lie in the range of the Jacobian at configurations in
    general position."""
    generator = np.random.default_rng(7)
    served = set(COMPONENTS)
    for jac in jacobian(arm, generator.uniform(-1.0, 1.0, (4, arm.n))):
        jac[:3] /= arm.length
        left, size, _ = np.linalg.svd(jac, full_matrices=False)
        basis = left[:, size > 1e-9 * size[0]]
        inside = np.linalg.norm(basis, axis=1) > 1.0 - 1e-9
        served &= {name for name, is_in in zip(COMPONENTS, inside, strict=True) if is_in}
    return frozenset(served)
