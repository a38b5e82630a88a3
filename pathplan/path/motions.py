"""The moving steps of a task once the branches are chosen: where each runs in joint space, and what
`blend` means on it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pathplan.arm import Arm
from pathplan.path.cartesian import CartesianPath
from pathplan.path.choice import Choice, Routes
from pathplan.path.geometry import NO_MOTION, Index, Segments
from pathplan.path.joint import Array
from pathplan.path.newton import joint_weights
from pathplan.path.tracking import Tracks

__all__ = ["Motions", "Reference", "motions_of"]


@dataclass(frozen=True, eq=False)
class Reference:
    """The tracks of the chosen branches, joined: a guess (good to the square of the sample spacing)
    anywhere on a segment.
    """

    at: Array  # (T,) twice the segment index plus the share of the segment: increasing
    q: Array  # (T, n)
    length: Array  # (K,)

    def __call__(self, segment: Index, s: Array) -> Array:
        """(N, n) guesses at s (N,) of segments (N,)."""
        at = 2.0 * segment + np.clip(s / self.length[segment], 0.0, 1.0)
        after = np.clip(np.searchsorted(self.at, at, side="right"), 1, len(self.at) - 1)
        low, high = self.at[after - 1], self.at[after]
        part = np.clip((at - low) / (high - low), 0.0, 1.0)[:, None]
        return np.asarray((1.0 - part) * self.q[after - 1] + part * self.q[after])


@dataclass(frozen=True, eq=False)
class Motions:
    """M steps that truly move, in order. Steps to where the arm already is are not among them."""

    arm: Arm  # the task's arm, carrying its own tool
    segments: Segments
    reference: Reference
    leg: Index  # (M,)
    segment: Index  # (M,) -1: straight in joint space
    length: Array  # (M,) of the path parameter
    direction: Array  # (M, n) dq/ds of a joint motion, zero for others
    start: Array  # (M, n) joint vectors
    end: Array
    tool_from_own: Array  # (M, 4, 4)

    def __len__(self) -> int:
        return len(self.leg)

    def joint_points(self, m: Index, s: Array) -> Array:
        """(N, n) exact positions on joint motions, near guesses on others."""
        q = np.array(self.start[m] + self.direction[m] * s[:, None])
        cartesian = self.segment[m] >= 0
        if cartesian.any():
            q[cartesian] = self.reference(self.segment[m[cartesian]], s[cartesian])
        return q

    def tool_points(self, m: Index, q: Array) -> Array:
        """(N, 3) tool centre points of joint positions (N, n) with the tools of motions m (N,)."""
        frame = self.arm.forward(q)
        # own_from_tool is the inverse of tool_from_own; only its translation is needed.
        swap = self.tool_from_own[m]
        offset = -np.einsum("nji,nj->ni", swap[:, :3, :3], swap[:, :3, 3])
        return np.asarray(frame[:, :3, 3] + np.einsum("nij,nj->ni", frame[:, :3, :3], offset))


def motions_of(path: CartesianPath, choice: Choice, tracks: Tracks, ways: Routes, frames: Array) -> Motions:
    """Put the chosen branches onto the steps."""
    arm = path.task.arm
    weights = joint_weights(arm)
    change = np.diff(choice.q, axis=0)
    joint_length = np.linalg.norm(change * weights, axis=1)
    segment = np.array([leg.segment for leg in path.legs], dtype=np.intp)
    is_joint = np.array([leg.kind == "joint" for leg in path.legs])
    moves = (segment >= 0) | (is_joint & (joint_length > NO_MOTION))
    leg = np.flatnonzero(moves)
    length = joint_length[leg]
    cartesian = segment[leg] >= 0
    length[cartesian] = path.segments.length[segment[leg[cartesian]]]
    direction = np.where(cartesian[:, None], 0.0, change[leg] / length[:, None])
    return Motions(
        arm=arm,
        segments=path.segments,
        reference=_reference(path, choice, tracks, ways, segment),
        leg=leg,
        segment=segment[leg],
        length=length,
        direction=direction,
        start=choice.q[leg],
        end=choice.q[leg + 1],
        tool_from_own=frames[leg],
    )


def _reference(path: CartesianPath, choice: Choice, tracks: Tracks, ways: Routes, segment: Index) -> Reference:
    legs = np.flatnonzero(segment >= 0)
    if not len(legs):
        return Reference(np.array([0.0, 1.0]), np.zeros((2, path.task.arm.n)), np.ones(1))
    slot = choice.slot[legs]
    # Legs with segments stand in the order of their segments.
    shift = choice.q[legs] - tracks.q[tracks.first, slot]
    revolute = np.array([joint.kind == "revolute" for joint in path.task.arm.joints])
    shift = np.where(revolute, 2.0 * np.pi * np.round(shift / (2.0 * np.pi)), 0.0)
    q = tracks.q[np.arange(len(tracks.s)), slot[tracks.segment]] + shift[tracks.segment]
    at = 2.0 * tracks.segment + tracks.s / path.segments.length[tracks.segment]
    return Reference(at, q, path.segments.length)
