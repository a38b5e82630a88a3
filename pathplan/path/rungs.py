"""Where what is free is sampled along a task: at every target, and at rungs along every line, arc and curve.

At a rung the pose is known but for the roll of the tool, and each coordinate (the held joints, then the roll) is
pinned to a value, kept from the rung before, or free.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pathplan.path.cartesian import CartesianPath, tool_frames
from pathplan.path.follower import Follower
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array
from pathplan.path.rotations import turn_about

__all__ = ["Rungs", "rolled", "rungs_of"]

SPACING = 0.15  # path parameter between rungs, about
FEWEST, MOST = 6, 60  # intervals of a segment
_Z = np.array([[0.0, 0.0, 1.0]])


@dataclass(frozen=True, eq=False)
class Rungs:
    """T rungs in order, C coordinates. `leg` is the one that leads to a rung, -1 at the start of the task."""

    follower: Follower
    leg: Index  # (T,)
    target: Index  # (T,) 0 the start, k the end of leg k - 1; -1 on the way
    s: Array  # (T,) on the leg's segment
    view: Index  # (T,)
    poses: Array  # (T, 4, 4) of the step's tool, at roll zero
    tool_from_own: Array  # (T, 4, 4)
    twist: Array  # (T,) rad that the tool is turned besides
    pinned: Array  # (T, C) NaN where it is not
    kept: Mask  # (T, C)
    given: dict[int, Array]  # rung -> its joint vector (n,), where that is given
    rolls: bool  # the last coordinate is the roll

    def __len__(self) -> int:
        return len(self.leg)

    def states(self, rung: Index, coordinates: Array) -> tuple[Array, Mask]:
        """Joint vectors (R, B, n) of every branch at rungs (R,) with coordinates (R, C), and which reach the pose."""
        held = len(self.follower.held)
        turn = self.twist[rung] + (coordinates[:, -1] if self.rolls else 0.0)
        poses = rolled(self.poses[rung], turn) @ self.tool_from_own[rung]
        q, reached = self.follower.branches(self.view[rung], poses, coordinates[:, :held])
        return q, reached.copy()


def rolled(poses: Array, angle: Array) -> Array:
    """Poses (N, 4, 4) turned about their own z axes by angles (N,)."""
    out = poses.copy()
    out[:, :3, :3] = out[:, :3, :3] @ turn_about(_Z, angle)
    return out


def rungs_of(path: CartesianPath) -> Rungs:
    """The rungs of a task in which something is free."""
    free = path.free
    assert free is not None
    frames = tool_frames(path)
    rolls = bool(free.rolling.any())
    given = {0: path.task.start}
    leg, target, at, pinned = [-1], [0], [0.0], [_pins(free.known[0], 0.0, rolls)]
    size = len(pinned[0])
    kept: list[Mask] = [np.zeros(size, dtype=bool)]
    for i, entry in enumerate(path.legs):
        ends = free.known[i], free.known[i + 1]
        length = float(path.segments.length[entry.segment]) if entry.segment >= 0 else 0.0
        count = int(np.clip(np.ceil(length / SPACING), FEWEST, MOST)) if entry.segment >= 0 else 1
        rests = np.append(free.kept[i], False) if rolls else free.kept[i]
        if entry.kind == "none":
            rests = np.ones(size, dtype=bool)
        for k in range(1, count + 1):
            share, last = k / count, k == count
            on_the_way = ends[0] + share * (ends[1] - ends[0])
            roll = np.nan if (free.roll[i + 1] if last else free.rolling[i]) else 0.0
            leg.append(i)
            target.append(i + 1 if last else -1)
            at.append(share * length)
            pinned.append(_pins(ends[1] if last else on_the_way, roll, rolls))
            kept.append(rests & np.isnan(pinned[-1]))
        joints = entry.step.target.joints if entry.step.target is not None else None
        if joints is not None:
            given[len(leg) - 1] = joints
    number, s, end = np.array(leg, dtype=np.intp), np.array(at), np.array(target, dtype=np.intp)
    twist = np.zeros(len(number))
    poses = np.array([path.legs[max(i, 0)].end for i in leg])
    segment = np.array([path.legs[i].segment for i in leg], dtype=np.intp)
    way = np.flatnonzero((end < 0) & (number >= 0))
    poses[way] = path.segments.poses(segment[way], s[way])
    twist[way] = np.array([path.legs[i].twist for i in number[way]]) * s[way] / path.segments.length[segment[way]]
    return Rungs(
        follower=path.follower,
        leg=number,
        target=end,
        s=s,
        view=np.array([path.legs[max(i, 0)].view for i in leg], dtype=np.intp),
        poses=poses,
        tool_from_own=frames[np.maximum(number, 0)],
        twist=twist,
        pinned=np.array(pinned),
        kept=np.array(kept, dtype=bool),
        given=given,
        rolls=rolls,
    )


def _pins(held: Array, roll: float, rolls: bool) -> Array:
    return np.append(held, roll) if rolls else held
