"""Ways to write a chain of joints: DH rows (standard or modified) and axes in the base frame.

Denavit & Hartenberg 1955 (standard rows, as in Spong) and Craig, "Introduction to Robotics", ch. 3
(modified rows):
    standard   A_i = Rz(theta_i) Tz(d_i) Tx(a_i) Rx(alpha_i)
    modified   A_i = Rx(alpha_i) Tx(a_i) Rz(theta_i) Tz(d_i)      (alpha and a of the row's own joint)
The joint value adds to theta (revolute) or d (prismatic).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from pathplan.arm.model import Array, Link
from pathplan.errors import InputError

__all__ = ["DHRow", "chain_from_axes", "chain_from_dh", "moved_link", "rot_x", "rot_z", "translation"]


@dataclass(frozen=True)
class DHRow:
    """One DH row, rad and m; theta (revolute) or d (prismatic) is what the joint value is added to."""

    a: float = 0.0
    alpha: float = 0.0
    d: float = 0.0
    theta: float = 0.0


def _quarter(angle: float) -> tuple[float, float]:
    """Sine and cosine, exact at multiples of 90 degrees: there cos(pi/2) = 6e-17 would leave axes crooked."""
    turns = angle / (np.pi / 2)
    nearest = round(turns)
    if abs(turns - nearest) < 1e-14:
        return ((0.0, 1.0), (1.0, 0.0), (0.0, -1.0), (-1.0, 0.0))[nearest % 4]
    return float(np.sin(angle)), float(np.cos(angle))


def rot_x(angle: float) -> Array:
    """(4, 4) rotation about x."""
    s, c = _quarter(angle)
    return np.array([[1.0, 0, 0, 0], [0, c, -s, 0], [0, s, c, 0], [0, 0, 0, 1]])


def rot_z(angle: float) -> Array:
    """(4, 4) rotation about z."""
    s, c = _quarter(angle)
    return np.array([[c, -s, 0.0, 0], [s, c, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]])


def translation(x: float, y: float, z: float) -> Array:
    """(4, 4) translation."""
    moved = np.eye(4)
    moved[:3, 3] = x, y, z
    return moved


def chain_from_dh(
    rows: Sequence[DHRow],
    convention: Literal["standard", "modified"],
    parents: Sequence[int] | None = None,
    tip: int = -1,
) -> tuple[Array, Array, Array, Array]:
    """parent_from_joint (n, 4, 4), axes (n, 3), tip_from_last (4, 4), joint_from_link (n, 4, 4).

    Every joint moves about or along its own z. `tip_from_last` leads to the DH frame of row `tip`;
    `joint_from_link` from a joint's moving frame to the DH frame of the same row, in which link data are
    stated. `parents`: the row that each row follows, -1 the base; default: the one before.
    """
    n = len(rows)
    fixed, joint_from_link = np.empty((n, 4, 4)), np.empty((n, 4, 4))
    for i, row in enumerate(rows):
        parent = i - 1 if parents is None else parents[i]
        if convention == "modified":
            fixed[i] = rot_x(row.alpha) @ translation(row.a, 0, 0) @ rot_z(row.theta) @ translation(0, 0, row.d)
            joint_from_link[i] = np.eye(4)
        else:
            fixed[i] = joint_from_link[parent] if parent >= 0 else np.eye(4)
            joint_from_link[i] = rot_z(row.theta) @ translation(row.a, 0, row.d) @ rot_x(row.alpha)
    return fixed, np.tile([0.0, 0.0, 1.0], (n, 1)), joint_from_link[tip].copy(), joint_from_link


def chain_from_axes(
    origins: Any, axes: Any, base_from_flange: Any, parents: Sequence[int] | None = None, tip: int = -1
) -> tuple[Array, Array, Array]:
    """parent_from_joint (n, 4, 4), axes (n, 3), tip_from_flange (4, 4) from axes in the base frame at q = 0.

    `parents`: the joint that each joint stands on, -1 the base; default: the one before. `tip` carries the flange.
    """
    origins, axes = np.asarray(origins, dtype=float), np.asarray(axes, dtype=float)
    if axes.ndim != 2 or axes.shape[1] != 3 or origins.shape != axes.shape:
        raise InputError(f"expected origins and axes of one shape (n, 3), got {origins.shape} and {axes.shape}")
    lengths = np.linalg.norm(axes, axis=1)
    if not (lengths > 1e-12).all():
        raise InputError("expected axes that are not zero")
    before = np.arange(-1, len(origins) - 1) if parents is None else np.asarray(parents)
    fixed = np.tile(np.eye(4), (len(origins), 1, 1))
    fixed[:, :3, 3] = origins - np.where(before[:, None] >= 0, origins[before], 0.0)
    tip_from_flange = np.array(base_from_flange, dtype=float)
    tip_from_flange[:3, 3] -= origins[tip]
    return fixed, axes / lengths[:, None], tip_from_flange


def moved_link(link: Link, joint_from_link: Array) -> Link:
    """A link stated in another frame, in the joint's moving frame."""
    rotation = joint_from_link[:3, :3]
    com = rotation @ link.com + joint_from_link[:3, 3]
    inertia = rotation @ link.inertia @ rotation.T
    return Link(link.mass, com, inertia, link.viscous, link.coulomb, link.rotor_inertia)
