"""The task as data: what is asked of an arm, step by step. Everything SI, frames resolved on request."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from pathplan.arm import Arm

Array = NDArray[np.float64]
Motion = Literal["joint", "line", "arc", "wait"]


@dataclass(frozen=True)
class Frame:
    """A workpiece frame: fixed in its parent ("base" is the root), or carried by a joint of the arm."""

    name: str
    parent: str
    parent_from_frame: Array  # (4, 4)
    joint: str | None = (
        None  # carried by this joint (a turntable): the parent is then that joint's moving frame
    )


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


@dataclass(frozen=True)
class Step:
    """One line of a task."""

    index: int  # 0-based position in the task; messages count from 1
    motion: Motion
    where: str  # 'pick.toml: step[4]', for messages
    name: str = ""
    target: Target | None = None  # None for a wait, and for an arc given by centre and angle
    via: Array | None = None  # (3,) a point of the arc in the base frame at rest (q-independent frames)
    centre: Array | None = None  # (3,) in the base frame
    axis: Array | None = None  # (3,) unit, in the base frame
    angle: float | None = None  # rad, signed, about axis
    along: bool = (
        False  # centre-and-angle arc: the tool turns with the arc (True) or keeps its orientation (False)
    )
    blend: Blend | None = None  # corner at the end of this step; None: stop point
    speed: float | None = None  # tool-speed cap, m/s: the lower of the step's own and the task's
    acceleration: float | None = None  # tool-acceleration cap, m/s^2, likewise
    wait: float = 0.0  # s, motion == "wait"
    mark: str | None = None  # named instant: when this step ends
    configuration: Mapping[str, str] = field(
        default_factory=dict
    )  # {"elbow": "up"}: asked at this step's target
    tool: str = ""  # carried during this step
    payload: str | None = None


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
    pace: float = 1.0  # 0 < pace <= 1
    sources: Mapping[str, str] = field(default_factory=dict)  # file name -> sha256 of what was read

    def base_from_frame(self, name: str, q: Array | None = None) -> Array:
        """(4, 4) pose of a frame in the base frame; `q` (n,) is needed where a joint carries the frame."""
        frame_chain = np.eye(4)
        while name != "base":
            frame = self.frames[name]
            frame_chain = frame.parent_from_frame @ frame_chain
            if frame.joint is not None:
                if q is None:
                    raise ValueError(f"frame {name} is carried by joint {frame.joint}: its pose needs q")
                return self.arm.base_from_joint(frame.joint, q) @ frame_chain
            name = frame.parent
        return frame_chain

    def pose(self, target: Target, q: Array | None = None) -> Array:
        """(4, 4) base_from_tool of a target that is given as a pose."""
        if target.frame_from_tool is None:
            raise ValueError("target is a joint vector")
        return self.base_from_frame(target.frame, q) @ target.frame_from_tool
