"""The joint table: what a controller plays, row by row at its cycle. SI, read-only, whole or in pieces.

Keys of `meta` that the rooms agree on (all optional, JSON values only): "arm" (name), "arm_file", "task" (title),
"task_file" (file name without folder), "versions" (name -> version), "sources" (file name -> sha256),
"breaks_limits" (True when written although the audit failed).
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pathplan.errors import InputError

__all__ = ["JointTable", "Mark", "tick_times"]

Array = NDArray[np.float64]
DERIVATIVES = ("velocity", "acceleration", "jerk")


@dataclass(frozen=True)
class Mark:
    """A named instant of the motion, such as the gripper closing."""

    name: str
    time: float  # s
    row: int  # 0-based row of the whole table, also where a piece of it carries the mark
    step: int  # 0-based step of the task


def tick_times(ticks: ArrayLike, cycle: float) -> Array:
    """Times (N,) in s of integer cycle ticks (N,): the floats nearest to tick times the cycle in decimals.

    Tick 3 of a 0.1 s cycle is 0.3 and not 0.30000000000000004, so times print cleanly, read back as the same
    float and can be compared with ==. Raises InputError for a cycle that is not positive and finite.
    """
    if not (math.isfinite(cycle) and cycle > 0):
        raise InputError(f"cycle: expected a positive time in s, got {cycle!r}")
    ticks = np.asarray(ticks, dtype=np.int64)
    rate = round(1 / cycle) if cycle < 1e6 else 0
    if rate and 1 / rate == cycle:  # 250 Hz, 300 Hz, 1 kHz: one correctly rounded division
        return ticks / rate
    numerator, denominator = Decimal(repr(float(cycle))).as_integer_ratio()
    furthest = int(np.abs(ticks).max(initial=0)) * numerator
    if furthest < 2**53 and denominator < 2**53:  # both exact as floats, so again one rounding
        return ticks * numerator / denominator
    return ticks * float(cycle)


@dataclass(frozen=True, eq=False)
class JointTable:
    """Rows of a motion. N rows, n joints; positions in rad or m by the joint's kind, all else SI.

    time (N,) s; position, velocity, acceleration, jerk (N, n); torque (N, n) N m or N; step (N,) 0-based
    step of the task; pose (N, 4, 4) base_from_tool; tool_speed (N,) m/s. A table from elsewhere may have
    only time and position: the other columns are then None, and step is all zero.
    `joint_kinds` is () where the kinds are not known; `cycle` (s) is None where the time is irregular.
    A piece of a longer table carries the marks and meta of the whole.

    Arrays are copied unless they already are read-only float arrays. Raises InputError naming the column
    whose shape or type is wrong. Values are not judged here: that is the audit's work.
    """

    time: Array
    position: Array
    velocity: Array | None = None
    acceleration: Array | None = None
    jerk: Array | None = None
    torque: Array | None = None
    step: NDArray[np.int64] = None  # type: ignore[assignment]  # None only on the way in: becomes zeros
    pose: Array | None = None
    tool_speed: Array | None = None
    joint_names: tuple[str, ...] = ()
    joint_kinds: tuple[str, ...] = ()
    cycle: float | None = None
    marks: tuple[Mark, ...] = ()
    meta: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        position = _frozen("position", self.position)
        if position.ndim != 2 or 0 in position.shape:
            expected = "expected shape (rows, joints), at least one of each"
            raise InputError.at("table", "position", f"{expected}, got {position.shape}")
        rows, joints = position.shape
        shapes = {"time": (rows,), "tool_speed": (rows,), "pose": (rows, 4, 4)}
        for name in ("time", "position", *DERIVATIVES, "torque", "pose", "tool_speed"):
            value = getattr(self, name)
            if value is None and name != "time":
                continue
            array = _frozen(name, value)
            shape = shapes.get(name, (rows, joints))
            if array.shape != shape:
                raise InputError.at("table", name, f"expected shape {shape}, got {array.shape}")
            object.__setattr__(self, name, array)
        object.__setattr__(self, "step", _frozen_steps(self.step, rows))
        self._settle_names(joints)
        if self.cycle is not None and not (math.isfinite(self.cycle) and self.cycle > 0):
            expected = "expected a positive time in s or None"
            raise InputError.at("table", "cycle", f"{expected}, got {self.cycle!r}")
        object.__setattr__(self, "marks", tuple(self.marks))
        object.__setattr__(self, "meta", MappingProxyType(dict(self.meta)))

    def _settle_names(self, joints: int) -> None:
        names = tuple(self.joint_names) or tuple(f"joint{i + 1}" for i in range(joints))
        if len(names) != joints or len(set(names)) != joints:
            expected = f"expected {joints} different names"
            raise InputError.at("table", "joint_names", f"{expected}, got {list(names)}")
        kinds = tuple(self.joint_kinds)
        if kinds and (len(kinds) != joints or not set(kinds) <= {"revolute", "prismatic"}):
            expected = f'expected {joints} times "revolute" or "prismatic"'
            raise InputError.at("table", "joint_kinds", f"{expected}, got {list(kinds)}")
        object.__setattr__(self, "joint_names", names)
        object.__setattr__(self, "joint_kinds", kinds)

    def __reduce__(self) -> tuple[Any, ...]:  # a mappingproxy can't be pickled, a dict can
        values = {f.name: getattr(self, f.name) for f in dataclasses.fields(self)}
        return _rebuilt, ({**values, "meta": dict(self.meta)},)

    def __len__(self) -> int:
        return len(self.time)

    @property
    def n(self) -> int:
        """Number of joints."""
        return self.position.shape[1]

    def part(self, start: int, stop: int) -> JointTable:
        """Rows start to stop (0-based, stop excluded), not copied, with the marks and meta of the whole."""
        cut: dict[str, Any] = {}
        for name in ("time", "position", *DERIVATIVES, "torque", "step", "pose", "tool_speed"):
            value = getattr(self, name)
            cut[name] = None if value is None else value[start:stop]
        return dataclasses.replace(self, **cut)

    def chunks(self, rows: int = 16384) -> Iterator[JointTable]:
        """The table in pieces of at most `rows` rows."""
        for start in range(0, len(self), rows):
            yield self.part(start, start + rows)


def _rebuilt(values: dict[str, Any]) -> JointTable:
    return JointTable(**values)


def _frozen(name: str, value: ArrayLike) -> Array:
    try:
        array = np.asarray(value, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError.at("table", name, f"expected an array of numbers ({error})") from None
    if array.flags.writeable:
        array = array.copy()
        array.setflags(write=False)
    return array


def _frozen_steps(value: ArrayLike | None, rows: int) -> NDArray[np.int64]:
    raw = np.zeros(rows, dtype=np.int64) if value is None else np.asarray(value)
    if raw.shape != (rows,) or raw.dtype.kind not in "iu":
        got = f"{raw.dtype} of shape {raw.shape}"
        raise InputError.at("table", "step", f"expected {rows} whole numbers, got {got}")
    step = raw.astype(np.int64, copy=raw.flags.writeable)
    if step.min() < 0:
        raise InputError.at("table", "step", f"expected 0-based step numbers, got {step.min()}")
    step.setflags(write=False)
    return step
