"""The columns of a table with one number a cell: their names with units, and their factors from SI."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.units import toml_text

Array = NDArray[np.float64]

__all__ = [
    "AS_ON_SCREENS",
    "DEGREES",
    "JOINT_FIELDS",
    "MILLIMETRES",
    "Group",
    "Units",
    "fitting",
    "groups",
    "units_from",
    "units_text",
]

DEGREES = 180.0 / math.pi  # deg per rad. One multiplication by it, so that a written row carries one rounding
MILLIMETRES = 1000.0
JOINT_FIELDS = ("position", "velocity", "acceleration", "jerk", "torque")

_TAILS = {"position": "", "velocity": "_s", "acceleration": "_s2", "jerk": "_s3"}
_FACTORS = {"deg": DEGREES, "rad": 1.0, "mm": MILLIMETRES, "m": 1.0}
_TORQUE_UNITS = {"revolute": "Nm", "prismatic": "N"}


@dataclass(frozen=True)
class Units:
    """The units of angles and lengths in a file."""

    angle: Literal["deg", "rad"] = "deg"
    length: Literal["mm", "m"] = "mm"

    @classmethod
    def parse(cls, text: str, where: str) -> Units:
        """From words such as "rad, m"; what is not named stays deg or mm. Raises InputError at `where`."""
        chosen: dict[str, str] = {}
        for word in text.replace(",", " ").split():
            kind = "angle" if word in ("deg", "rad") else "length" if word in ("mm", "m") else ""
            if not kind or kind in chosen:
                expected = 'expected deg or rad, and mm or m, such as "rad, m"'
                raise InputError.at(where, f"{expected}, got {toml_text(text)}")
            chosen[kind] = word
        if not chosen:
            raise InputError.at(where, 'expected units such as "rad, m", got none')
        return cls(**chosen)  # type: ignore[arg-type]

    def of(self, kind: str) -> tuple[str, float]:
        """Unit of a joint of this kind, and its factor from SI."""
        unit = self.angle if kind == "revolute" else self.length
        return unit, _FACTORS[unit]


AS_ON_SCREENS = Units()


@dataclass(frozen=True)
class Group:
    """The columns that hold one field of a table, side by side: value in file = SI value times factor."""

    field: str
    columns: tuple[str, ...]
    factors: tuple[float, ...]
    required: bool = False


def units_text(units: Units) -> str:
    """The units in words, for headers."""
    named = f"s, {units.length}, {units.angle}, N m (revolute), N (prismatic)"
    return f"{named}; tcp: pose of the tool centre point in the base frame"


def groups(names: Sequence[str], kinds: Sequence[str], units: Units = AS_ON_SCREENS) -> tuple[Group, ...]:
    """Every group a table of these joints may have, in file order.

    Raises InputError if the kinds are not known, or if two columns would get the same name.
    """
    if not kinds:
        raise InputError.at("table", "joint_kinds", "not known, so mm or deg can't be told: state them or write NPZ")
    found = [Group("time", ("time_s",), (1.0,), required=True)]
    of_joints = [units.of(kind) for kind in kinds]
    for field, tail in _TAILS.items():
        columns = tuple(f"{name}_{unit}{tail}" for name, (unit, _) in zip(names, of_joints, strict=True))
        factors = tuple(factor for _, factor in of_joints)
        found.append(Group(field, columns, factors, required=field == "position"))
    torques = tuple(f"{name}_{_TORQUE_UNITS[kind]}" for name, kind in zip(names, kinds, strict=True))
    found.append(Group("torque", torques, (1.0,) * len(torques)))
    unit, factor = units.of("prismatic")
    pose = (*(f"tcp_{axis}_{unit}" for axis in "xyz"), *(f"tcp_q{part}" for part in "wxyz"))
    found.append(Group("pose", pose, (factor,) * 3 + (1.0,) * 4))
    found.append(Group("tool_speed", (f"tool_speed_{unit}_s",), (factor,)))
    found.append(Group("step", ("step",), (1.0,), required=True))
    counts = Counter(column for group in found for column in group.columns)
    for column, count in counts.items():
        if count > 1:
            raise InputError.at("table", "joint_names", f"two columns would be called {column}")
    return tuple(found)


def units_from(text: object, where: str) -> Units:
    """The units that `units_text` put into words. Raises InputError at `where`."""
    for units in (Units(angle, length) for angle in ("deg", "rad") for length in ("mm", "m")):
        if text == units_text(units):
            return units
    raise InputError.at(where, "units", f"expected {units_text(AS_ON_SCREENS)!r} or the like, got {str(text)[:40]!r}")


def fitting(
    names: Sequence[str], kinds: Sequence[str], columns: Sequence[str], units: Units, where: str
) -> tuple[Group, ...]:
    """The groups that a file with these columns has. Raises InputError at `where`."""
    if not kinds:
        raise InputError.at(where, "joints", "the kinds of the joints are missing")
    known = groups(names, kinds, units)
    all_known = {column for group in known for column in group.columns}
    for index, name in enumerate(columns[: len(all_known) + 1]):
        if name not in all_known:
            raise InputError.at(where, f"column {name[:60]!r}: unknown for these joints")
        if name in columns[:index]:
            raise InputError.at(where, f"column {name}: is there twice")
    present = tuple(group for group in known if group.required or any(name in columns for name in group.columns))
    for group in present:
        for column in group.columns:
            if column not in columns:
                raise InputError.at(where, f"column {column}: missing")
    return present
