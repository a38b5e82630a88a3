"""The task as data: what is asked of an arm, step by step. Everything SI, frames resolved on request."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from pathplan.tomlfile import read_only, rotation_from_quaternion

if TYPE_CHECKING:
    from pathplan.arm import Arm

Array = NDArray[np.float64]
Motion = Literal["joint", "line", "arc", "curve", "taught", "wait"]


@dataclass(frozen=True)
class Frame:
    """A workpiece frame: fixed in its parent ("base" is the root), or carried by a joint of the arm."""

    name: str
    parent: str
    parent_from_frame: Array  # (4, 4)
    joint: str | None = None  # carried by this joint (a turntable): the parent is then that joint's moving frame


@dataclass(frozen=True)
class Target:
    """Where a step ends: a joint vector, or a tool pose in a frame (offsets already applied).

    A line or arc to a joint vector has both: the joints, and the pose (in the base frame) that they mean.
    """

    joints: Array | None = None  # (n,)
    frame: str = "base"
    frame_from_tool: Array | None = None  # (4, 4)


@dataclass(frozen=True)
class Blend:
    """The size of a corner region as asked: metres, radians, or a share (0..0.5) of the steps beside it."""

    kind: Literal["length", "angle", "share"]
    value: float
    text: str  # as written, for messages: "20 mm"


@dataclass(frozen=True, eq=False)
class Curve:
    """A smooth tool path through points of a file, in the frame that the file means: piecewise polynomials, C4.

    The parameter counts arm lengths travelled and rad turned, about evenly; pieces are local power series, highest
    power first, like scipy's PPoly. The quaternion (w, x, y, z) is not of unit length: only its direction counts.
    """

    name: str
    frame: str  # as written: the points' frame
    breaks: Array  # (M + 1,) from 0
    position: Array  # (6, M, 3) m
    quaternion: Array  # (6, M, 4)
    note: str = ""  # how far it passes the points, for people
    deviation: float = 0.0  # m, largest distance of a point from the curve
    turned: float = 0.0  # rad, largest angle between the orientation at a point and that of the curve

    def pose(self, *, end: bool) -> Array:
        """(4, 4) tool pose in the curve's frame at its start or end."""
        piece = -1 if end else 0
        local = self.breaks[-1] - self.breaks[-2] if end else 0.0
        position, quaternion = (np.zeros(size) for size in (3, 4))
        for row in range(len(self.position)):
            position = position * local + self.position[row, piece]
            quaternion = quaternion * local + self.quaternion[row, piece]
        pose = np.eye(4)
        pose[:3, :3] = rotation_from_quaternion(quaternion / np.linalg.norm(quaternion))
        pose[:3, 3] = position
        return read_only(pose)


@dataclass(frozen=True, eq=False)
class Taught:
    """A joint path through taught points: smooth, and passing each within `tolerance`.

    Distances in joint space count a rad as 1 and a metre as 1 over the arm's length.
    """

    name: str
    points: Array  # (m, n) rad or m; neighbours differ
    tolerance: float = 0.0  # rad, or arm lengths; 0: through every point
    note: str = ""  # what was left out when it was read, for people


@dataclass(frozen=True)
class Step:
    """One line of a task."""

    index: int  # 0-based position in the task; messages count from 1
    motion: Motion
    where: str  # 'pick.toml: step[4]', for messages
    name: str = ""
    target: Target | None = None  # None for a wait, and for an arc given by centre and angle
    via: Array | None = None  # (3,) a point of the arc, in the base frame or in that of the joint that carries it
    centre: Array | None = None  # (3,) likewise
    point_frame: str = "base"  # the frame in which via, or centre and axis, were given
    axis: Array | None = None  # (3,) unit, in the base frame or in that of the joint that carries it
    angle: float | None = None  # rad, signed, about axis
    along: bool = False  # centre-and-angle arc: the tool turns with the arc (True) or keeps its orientation (False)
    blend: Blend | None = None  # corner at the end of this step; None: stop point
    speed: float | None = None  # tool-speed cap, m/s: the lower of the step's own and the task's
    acceleration: float | None = None  # tool-acceleration cap, m/s^2, likewise
    turning_speed: float | None = None  # cap on the tool's angular speed, rad/s, likewise
    held_speed: float | None = None  # tool speed to be held constant, m/s; caps the tool too
    wait: float = 0.0  # s, motion == "wait"
    mark: str | None = None  # named instant: when this step ends
    configuration: Mapping[str, str] = field(default_factory=dict)  # {"elbow": "up"}: asked at this step's target
    tool: str = ""  # carried during this step and on; "none" is the bare mechanical interface
    payload: str | None = None
    curve: Curve | None = None  # motion == "curve"; the target is where it ends
    frame_from_curve: Array | None = None  # (4, 4) in the target's frame
    taught: Taught | None = None  # motion == "taught"; the target is its last point
    axes: Mapping[str, float] = field(default_factory=dict)  # where joints that are free otherwise stand at its end
    roll_free: bool = False  # the turn of the tool about its own z axis is not asked
    orientation_tolerance: float = 0.0  # rad that the tool may leave its orientation near singularities
    tilt: float = 0.0  # the same, of its z axis alone: the tool doesn't turn about it


@dataclass(frozen=True)
class Task:
    """A whole task: the arm, where it starts, the steps, and what caps all of them."""

    title: str
    file: Path | None
    arm: Arm  # carrying the first step's tool and payload
    start: Array  # (n,) joint vector
    steps: tuple[Step, ...]
    cycle: float  # s
    frames: Mapping[str, Frame] = field(default_factory=dict)
    speed: float | None = None  # task-wide tool-speed cap, m/s; the file's own is in every step's cap already
    turning_speed: float | None = None  # task-wide cap on the tool's angular speed, rad/s, likewise
    pace: float = 1.0  # 0 < pace <= 1
    sources: Mapping[str, str] = field(default_factory=dict)  # file name -> sha256 of what was read

    @property
    def tools(self) -> tuple[str, ...]:
        """Names of the tools carried, in the order in which they are first used."""
        return tuple(dict.fromkeys(step.tool or self.arm.tool.name for step in self.steps))

    @property
    def payloads(self) -> tuple[str, ...]:
        """Names of the payloads carried at any time, in that order."""
        return tuple(dict.fromkeys(step.payload for step in self.steps if step.payload is not None))

    def carrier(self, step: Step) -> str | None:
        """The joint in whose moving frame a step's tool path is meant; None: the base frame."""
        return self.carrier_from_frame(step.point_frame if step.target is None else step.target.frame)[0]

    def carrier_from_frame(self, name: str) -> tuple[str | None, Array]:
        """The joint that carries a frame and (4, 4) the frame in that joint's moving frame; None and the base frame
        where no joint does.
        """
        chain = np.eye(4)
        while name != "base":
            frame = self.frames[name]
            chain = frame.parent_from_frame @ chain
            if frame.joint is not None:
                return frame.joint, chain
            name = frame.parent
        return None, chain

    def base_from_frame(self, name: str, q: Array | None = None) -> Array:
        """(4, 4) pose of a frame in the base frame; `q` (n,) is needed where a joint carries the frame."""
        joint, carrier_from_frame = self.carrier_from_frame(name)
        if joint is None:
            return carrier_from_frame
        if q is None:
            raise ValueError(f"frame {name} is carried by joint {joint}: its pose needs q")
        return np.asarray(self.arm.base_from_joint(joint, q) @ carrier_from_frame)

    def pose(self, target: Target, q: Array | None = None) -> Array:
        """(4, 4) base_from_tool of a target that is given as a pose."""
        if target.frame_from_tool is None:
            raise ValueError("target is a joint vector")
        return self.base_from_frame(target.frame, q) @ target.frame_from_tool
