"""The columns of a text table: their names with units, and their factors from SI."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError

Array = NDArray[np.float64]

__all__ = ["DEGREES", "MILLIMETRES", "POSE_COLUMNS", "UNITS_TEXT", "Group", "groups"]

DEGREES = 180.0 / math.pi  # deg per rad. One multiplication by it, so that a written row carries one rounding
MILLIMETRES = 1000.0
POSE_COLUMNS = ("tcp_x_mm", "tcp_y_mm", "tcp_z_mm", "tcp_qw", "tcp_qx", "tcp_qy", "tcp_qz")
UNITS_TEXT = "s, mm, deg, N m (revolute), N (prismatic); tcp: pose of the tool centre point in the base frame"

_TAILS = {"position": "", "velocity": "_s", "acceleration": "_s2", "jerk": "_s3"}
_JOINT_UNITS = {"revolute": ("deg", DEGREES), "prismatic": ("mm", MILLIMETRES)}
_TORQUE_UNITS = {"revolute": "Nm", "prismatic": "N"}


@dataclass(frozen=True)
class Group:
    """The columns that hold one field of a table, side by side: value in file = SI value times factor."""

    field: str
    columns: tuple[str, ...]
    factors: tuple[float, ...]
    required: bool = False


def groups(names: Sequence[str], kinds: Sequence[str]) -> tuple[Group, ...]:
    """Every group a table of these joints may have, in file order.

    Raises InputError if the kinds are not known, or if two columns would get the same name.
    """
    if not kinds:
        raise InputError.at(
            "table", "joint_kinds", "not known, so mm or deg can't be told: state them or write NPZ"
        )
    found = [Group("time", ("time_s",), (1.0,), required=True)]
    for field, tail in _TAILS.items():
        columns = tuple(
            f"{name}_{_JOINT_UNITS[kind][0]}{tail}" for name, kind in zip(names, kinds, strict=True)
        )
        factors = tuple(_JOINT_UNITS[kind][1] for kind in kinds)
        found.append(Group(field, columns, factors, required=field == "position"))
    torques = tuple(f"{name}_{_TORQUE_UNITS[kind]}" for name, kind in zip(names, kinds, strict=True))
    found.append(Group("torque", torques, (1.0,) * len(torques)))
    found.append(Group("pose", POSE_COLUMNS, (MILLIMETRES,) * 3 + (1.0,) * 4))
    found.append(Group("tool_speed", ("tool_speed_mm_s",), (MILLIMETRES,)))
    found.append(Group("step", ("step",), (1.0,), required=True))
    counts = Counter(column for group in found for column in group.columns)
    for column, count in counts.items():
        if count > 1:
            raise InputError.at("table", "joint_names", f"two columns would be called {column}")
    return tuple(found)
