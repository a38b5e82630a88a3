"""The arm as data: joints, limits, links, tools, payloads. Everything SI, arrays read-only.

The kinematic model is a tree of fixed transforms and joint axes. DH rows and other files are ways to load it;
structure is recognised from the axes, never from a name.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Index = NDArray[np.intp]


def read_only(value: Any) -> Array:
    """A float copy that can't be written to."""
    array = np.array(value, dtype=float)
    array.flags.writeable = False
    return array


Kind = Literal["revolute", "prismatic"]


@dataclass(frozen=True)
class Joint:
    """One joint and its data-sheet limits (rad or m, s). A joint without position limits has (-inf, inf)."""

    name: str
    kind: Kind
    position: tuple[float, float]
    velocity: float
    acceleration: float
    jerk: float
    torque: float | None = None  # peak, N m or N
    continuous_torque: float | None = None
    gear_ratio: float = 1.0  # motor turns per joint turn; rad of the motor per m of a prismatic joint
    encoder_counts: int | None = None  # counts per turn of the motor
    torque_corner: float | None = None  # rad/s or m/s, joint side: above it the peak torque falls on a straight line
    torque_at_velocity: float | None = None  # to this, N m or N, at the velocity limit. Both or neither


@dataclass(frozen=True)
class Link:
    """The body moved by one joint, in that joint's moving frame, and the drive that moves it."""

    mass: float  # kg
    com: Array  # (3,) m
    inertia: Array  # (3, 3) kg m^2 about the centre of mass
    viscous: float = 0.0  # joint side, N m s/rad or N s/m
    coulomb: tuple[float, float] = (
        0.0,
        0.0,
    )  # joint side: (friction when moving positive, when negative), both >= 0
    rotor_inertia: float = 0.0  # motor side, kg m^2; the joint feels gear_ratio^2 times as much


@dataclass(frozen=True)
class Tool:
    """A named tool: where its tool centre point lies and what it weighs. `com` and `inertia` in the tool
    frame."""

    name: str
    flange_from_tool: Array  # (4, 4)
    mass: float = 0.0
    com: Array = field(default_factory=lambda: np.zeros(3))
    inertia: Array = field(default_factory=lambda: np.zeros((3, 3)))
    speed: float | None = None  # cap on the tool speed while it is carried, m/s
    acceleration: float | None = None  # m/s^2
    turning_speed: float | None = None  # rad/s


@dataclass(frozen=True)
class Payload:
    """A named payload held by the tool; `com` and `inertia` (about the com) in the tool frame."""

    name: str
    mass: float
    com: Array
    inertia: Array


@dataclass(frozen=True)
class Limits:
    """Named two-sided rows over joint coordinates: low <= matrix @ x <= high for position and its
    derivatives.

    The plain per-joint limits are identity rows named like the joints. A row that has no limit of some kind
    carries -inf and inf there. All arrays (R, 2) hold low, high. `kinds` says what each row counts in: "revolute"
    (rad) or "prismatic" (m), also where it couples joints of both kinds; () where nobody has said.
    """

    names: tuple[str, ...]
    matrix: Array  # (R, n)
    position: Array  # (R, 2)
    velocity: Array
    acceleration: Array
    jerk: Array
    torque: Array
    kinds: tuple[Kind, ...] = ()


PoseNames = Mapping[str, Array]  # named joint vectors of an arm, such as "home"
