"""Position limits of whole arms in arm files: turns, named positions, and rows of coupled drives."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from pathplan.arm.arm import joint_rows
from pathplan.arm.load_values import LARGEST, SMALLEST, limit, ordered
from pathplan.arm.model import Array, Joint, Kind, Limits, read_only
from pathplan.errors import InputError
from pathplan.tomlfile import FARTHEST, Problems, Table
from pathplan.units import format_quantity, joint_dimension, toml_text

__all__ = ["check_joints", "limit_rows", "positions"]

MOST_TURNS = 20_000  # every answer of the inverse comes in all its turn equivalents


def check_joints(top: Table, where: Sequence[str], joints: Sequence[Joint]) -> None:
    names = [joint.name for joint in joints]
    for i, name in enumerate(names):
        if name in names[:i]:
            raise InputError.at(f"{where[i]}.name", f'"{name}" is taken already')
    turns = [
        max(1.0, (joint.position[1] - joint.position[0]) / (2.0 * np.pi))
        for joint in joints
        if joint.kind == "revolute" and np.isfinite(joint.position[0])
    ]
    if np.prod(turns) > MOST_TURNS:
        raise InputError.at(
            top.file,
            "joint",
            f"position limits allow {np.prod(turns):.3g} combinations of whole turns, at most {MOST_TURNS}; "
            'a joint that turns freely has position = "unlimited"',
        )


def positions(top: Table, joints: Sequence[Joint], problems: Problems) -> dict[str, Array]:
    """[positions]: named joint vectors inside the position limits."""
    table = top.table("positions")
    dimensions = [joint_dimension(joint.kind, "position") for joint in joints]
    found: dict[str, Array] = {}
    table.take("home")
    for key in table.data:
        with problems.gather():
            q = table.mixed_vector(key, dimensions, noun="joint positions")
            for value, joint, dimension in zip(q.tolist(), joints, dimensions, strict=True):
                low, high = np.clip(joint.position, -FARTHEST, FARTHEST).tolist()
                if not low <= value <= high:
                    raise table.error(
                        key,
                        f"{joint.name} at {format_quantity(value, dimension)} is outside its limits, "
                        f"{format_quantity(low, dimension)} to {format_quantity(high, dimension)}",
                    )
            found[key] = q
    return found


def limit_rows(top: Table, joints: Sequence[Joint], problems: Problems) -> Limits:
    """Identity rows of the joints, then the [[limit]] rows."""
    plain = joint_rows(joints)
    names, kinds = list(plain.names), list(plain.kinds)
    rows, bounds = [plain.matrix], {key: [getattr(plain, key)] for key in _BOUNDS}
    for table in top.tables("limit"):
        with problems.gather():
            name = table.text("name")
            if name in names:
                raise table.error("name", f'"{name}" is taken already')
            kind = _row_kind(table, joints)
            row = _row(table, kind, joints)
            given = {key: _row_bound(table, key, kind) for key in _BOUNDS}
            table.finish()
            if all(np.isinf(bound).all() for bound in given.values()):
                raise InputError.at(table.where, "limits nothing, expected position, velocity, acceleration or jerk")
            names.append(name)
            kinds.append(kind)
            rows.append(row[None])
            for key, bound in given.items():
                bounds[key].append(bound)
    torque = np.vstack([plain.torque, np.tile([-np.inf, np.inf], (len(names) - len(joints), 1))])
    stacked = {key: read_only(np.vstack(parts)) for key, parts in bounds.items()}
    return Limits(tuple(names), read_only(np.vstack(rows)), torque=read_only(torque), kinds=tuple(kinds), **stacked)


_BOUNDS = ("position", "velocity", "acceleration", "jerk")


def _row_kind(table: Table, joints: Sequence[Joint]) -> Kind:
    """Whether a row counts in deg or in mm: as its joints, or as it says."""
    coefficients = table.vector("row", len(joints), "number")
    kinds = {joint.kind for joint, c in zip(joints, coefficients, strict=True) if c != 0.0}
    if not kinds or np.abs(coefficients).max() > 1e6:
        raise table.error(
            "row", f"expected a coefficient for each joint, not all zero, got {toml_text(table.data['row'])}"
        )
    if table.has("kind") or len(kinds) > 1:
        kind: Kind = table.choice("kind", ("revolute", "prismatic"))
        return kind
    return kinds.pop()


def _row(table: Table, kind: str, joints: Sequence[Joint]) -> Array:
    """Coefficients in SI: a file states them in deg or mm of the row per deg or mm of the joint."""
    size = {"revolute": np.deg2rad(1.0), "prismatic": 1e-3}
    coefficients: Array = table.vector("row", len(joints), "number")
    return coefficients * size[kind] / np.array([size[joint.kind] for joint in joints])


def _row_bound(table: Table, key: Any, kind: str) -> Array:
    """(1, 2) low, high of one quantity: infinite where not given, one number is symmetric."""
    if not table.has(key):
        return np.array([[-np.inf, np.inf]])
    dimension = joint_dimension(kind, key)
    if key == "position":
        return np.array([ordered(table, key, dimension)])
    if isinstance(table.data[key], list):
        low, high = table.vector(key, 2, dimension)
        if not (-LARGEST <= low <= -SMALLEST and SMALLEST <= high <= LARGEST):
            raise table.error(key, f"expected [low below zero, high above zero], got {toml_text(table.data[key])}")
        return np.array([[low, high]])
    return np.array([[-1.0, 1.0]]) * np.array(limit(table, key, dimension))
