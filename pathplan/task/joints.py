"""Joint vectors of a task, judged against the position limits of the arm."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.tomlfile import Table
from pathplan.units import format_quantity, joint_dimension

__all__ = ["check_positions", "joint_vector", "outside"]

Array = NDArray[np.float64]


def joint_vector(table: Table, key: str, arm: Arm) -> Array:
    """(n,) joint vector under a key, deg and mm in the file, SI here; refused outside the position limits."""
    dimensions = [joint_dimension(joint.kind, "position") for joint in arm.joints]
    joints: Array = table.mixed_vector(key, dimensions, noun="joint positions")
    check_positions(joints, arm, table.at(key))
    return joints


def outside(joints: Array, arm: Arm) -> NDArray[np.bool_]:
    """(..., R) which rows of the arm's limits joint vectors (..., n) break; a limit itself, converted from deg, is
    inside."""
    rows = joints @ arm.limits.matrix.T
    slack = 1e-12 * np.maximum(1.0, np.abs(rows))
    return np.asarray((rows < arm.limits.position[:, 0] - slack) | (rows > arm.limits.position[:, 1] + slack))


def check_positions(joints: Array, arm: Arm, where: str) -> None:
    """Refuse a joint vector (n,) outside the position limits, naming row, value and limits."""
    for row in np.flatnonzero(outside(joints, arm)):
        kind = arm.limit_kinds[row]
        dimension = joint_dimension(kind, "position") if kind else "number"
        low, high = arm.limits.position[row].tolist()
        reached = float(arm.limits.matrix[row] @ joints)
        value, *limits = (format_quantity(v, dimension, 6) for v in (reached, low, high))
        name = arm.limits.names[row]
        raise InputError.at(
            where,
            f"joint {name} at {value}, expected from {limits[0]} to {limits[1]}",
            data={"joint": name, "value": reached, "limit": (low, high)},
        )
