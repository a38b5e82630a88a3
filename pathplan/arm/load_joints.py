"""[[joint]] tables of arm files: DH row or axis, limits and drive of one joint."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from pathplan.arm.chain import DHRow
from pathplan.arm.load_bodies import LINK_KEYS, link
from pathplan.arm.load_values import limit, ordered
from pathplan.arm.model import Array, Joint, Link
from pathplan.arm.urdf import MovingJoint
from pathplan.errors import InputError
from pathplan.tomlfile import FARTHEST, Table, listed, nearest
from pathplan.units import format_quantity, joint_dimension, toml_text

__all__ = ["BASE", "JointRow", "drive", "joint_row", "parent_indices", "tip_index"]

BASE = "base"  # the name of what carries the first joint


@dataclass(frozen=True)
class JointRow:
    """One joint as read."""

    where: str  # file and table, for messages
    joint: Joint
    parent: str | None = None  # as given
    dh: DHRow | None = None
    origin: Array = field(default_factory=lambda: np.zeros(3))
    axis: Array = field(default_factory=lambda: np.array([0.0, 0.0, 1.0]))
    link: Link | None = None  # as stated: in the DH frame of the row
    link_keys: tuple[str, ...] = ()  # those of LINK_KEYS that are there
    moving: MovingJoint | None = None  # of a URDF file, in place of dh, origin and axis


def joint_row(table: Table, *, has_dh: bool) -> JointRow:
    """One [[joint]] table that gives its geometry, its unknown keys reported."""
    name = table.text("name")
    kind = table.choice("kind", ("revolute", "prismatic"))
    dh, origin, axis = None, np.zeros(3), np.array([0.0, 0.0, 1.0])
    parent = table.text("parent", None)
    if has_dh:
        if table.has("axis") or table.has("origin"):
            raise table.error("axis", 'given in a file of DH rows, expected "dh" instead')
        dh = dh_row(table.table("dh"))
    else:
        if table.has("dh"):
            raise table.error("dh", 'given without dh = "standard" or "modified" at the top of the file')
        origin, axis = table.position("origin"), table.vector("axis", 3, "number")
        if not 1e-6 < float(np.abs(axis).max()) < 1e6:
            raise table.error("axis", f"expected a direction [x, y, z], got {toml_text(table.data['axis'])}")
    values: dict[str, Any] = {
        quantity: limit(table, quantity, joint_dimension(kind, quantity))
        for quantity in ("velocity", "acceleration", "jerk")
    }
    values |= drive(table, kind, values["velocity"])
    joint = Joint(name, kind, position(table, joint_dimension(kind, "position")), **values)
    present = tuple(key for key in LINK_KEYS if table.has(key))
    body = link(table, kind) if "mass" in present else None
    table.finish()
    return JointRow(table.where, joint, parent, dh, origin, axis, body, present)


def drive(table: Table, kind: str, velocity: float | None, torque: float | None = None) -> dict[str, Any]:
    """Torques, gear ratio and encoder of a joint; `torque` is its peak where the table gives none."""
    return {
        **torques(table, kind, velocity, torque),
        "gear_ratio": gear_ratio(table),
        "encoder_counts": table.integer("encoder_counts", None, low=1, high=2**40),
    }


def parent_indices(rows: Sequence[JointRow]) -> tuple[int, ...]:
    """The index of each joint's parent, -1 the base."""
    names = [row.joint.name for row in rows]
    parents = []
    for i, row in enumerate(rows):
        if row.parent is None:
            parents.append(i - 1)
        elif row.parent == BASE:
            parents.append(-1)
        elif row.parent in names[:i]:
            parents.append(names.index(row.parent))
        else:
            earlier = [BASE, *names[:i]]
            hint = nearest(row.parent, earlier) or f", expected {listed(earlier)}"
            raise InputError.at(f"{row.where}.parent", f"no earlier joint {toml_text(row.parent)}{hint}")
    return tuple(parents)


def tip_index(top: Table, rows: Sequence[JointRow], parents: Sequence[int]) -> int:
    """The joint that carries the tool: the last one of a single chain, else the one that `tip` names."""
    names = [row.joint.name for row in rows]
    leaves = [name for i, name in enumerate(names) if i not in parents]
    if not top.has("tip"):
        if len(leaves) > 1:
            raise InputError.at(top.file, f'missing key "tip": joints branch, expected {listed(leaves)}')
        return len(rows) - 1
    tip = top.choice("tip", names)
    return names.index(tip)


def dh_row(table: Table) -> DHRow:
    row = DHRow(
        a=table.quantity("a", "length", 0.0),
        alpha=table.quantity("alpha", "angle", 0.0),
        d=table.quantity("d", "length", 0.0),
        theta=table.quantity("theta", "angle", 0.0),
    )
    for key, value in (("a", row.a), ("d", row.d), ("alpha", row.alpha), ("theta", row.theta)):
        if abs(value) > FARTHEST:
            raise table.error(key, f"expected at most {FARTHEST:g} m or rad, got {toml_text(table.data[key])}")
    table.finish()
    return row


def torques(table: Table, kind: str, velocity: float | None, given: float | None = None) -> dict[str, float | None]:
    """What the drive can give: peak, continuous, and how the peak falls off with speed."""
    force, speed = joint_dimension(kind, "torque"), joint_dimension(kind, "velocity")
    peak = limit(table, "torque", force, None)
    if not table.has("torque"):
        peak = given
    lasting = limit(table, "continuous_torque", force, None)
    corner = limit(table, "torque_corner_speed", speed, None)
    at_velocity = limit(table, "torque_at_velocity", force, None)
    for key, value in (("continuous_torque", lasting), ("torque_at_velocity", at_velocity)):
        if peak is not None and value is not None and value > peak:
            raise table.error(
                key, f"{format_quantity(value, force)} is above torque (its peak) {format_quantity(peak, force)}"
            )
    for key, other in (
        ("torque_corner_speed", "torque_at_velocity"),
        ("torque_at_velocity", "torque_corner_speed"),
        ("torque_corner_speed", "torque"),
    ):
        if table.has(key) and not table.has(other) and not (other == "torque" and peak is not None):
            raise InputError.at(table.where, f'missing key "{other}": "{key}" needs it')
    if corner is not None and velocity is not None and corner >= velocity:
        raise table.error(
            "torque_corner_speed",
            f"{format_quantity(corner, speed)} is not below velocity {format_quantity(velocity, speed)}",
        )
    return {
        "torque": peak,
        "continuous_torque": lasting,
        "torque_corner": corner,
        "torque_at_velocity": at_velocity,
    }


def gear_ratio(table: Table) -> float:
    ratio: float = table.quantity("gear_ratio", "number", 1.0)
    if not 1e-3 <= abs(ratio) <= 1e6:
        raise table.error("gear_ratio", f"expected a ratio such as 100, got {toml_text(table.data['gear_ratio'])}")
    return ratio


def position(table: Table, dimension: str) -> tuple[float, float]:
    if table.take("position") == "unlimited":
        return (-np.inf, np.inf)
    if not isinstance(table.data["position"], list):
        raise table.error("position", f'expected [low, high] or "unlimited", got {toml_text(table.data["position"])}')
    return ordered(table, "position", dimension)
