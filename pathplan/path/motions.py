"""The moving steps of a task once the branches are chosen: where each runs in joint space, and what
`blend` means on it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from pathplan.arm import Arm
from pathplan.path.cartesian import CartesianPath
from pathplan.path.choice import Choice, Routes
from pathplan.path.follower import Course
from pathplan.path.geometry import NO_MOTION, Index, Segments
from pathplan.path.joint import Array, JointPath
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
    segment: Index  # (M,) -1: in joint space
    length: Array  # (M,) of the path parameter
    direction: Array  # (M, n) dq/ds of a straight joint motion, zero for others
    start: Array  # (M, n) joint vectors
    end: Array
    tool_from_own: Array  # (M, 4, 4)
    bent: Index  # (M,) of a motion through taught points its path in `paths`, else -1
    course: Course  # along the segments
    paths: tuple[JointPath, ...] = ()
    crossings: tuple[tuple[int, float], ...] = ()  # motion and path parameter where it runs through a singularity

    def __len__(self) -> int:
        return len(self.leg)

    def joint_points(self, m: Index, s: Array) -> Array:
        """(N, n) exact positions on joint motions, near guesses on others."""
        q = np.array(self.start[m] + self.direction[m] * s[:, None])
        for path, rows in self.on_paths(m):
            q[rows] += path(s[rows]) - path([0.0])
        cartesian = self.segment[m] >= 0
        if cartesian.any():
            q[cartesian] = self.reference(self.segment[m[cartesian]], s[cartesian])
        return q

    def on_paths(self, m: Index) -> Iterator[tuple[JointPath, Index]]:
        """Each taught path among motions m (N,), -1 for none, and the rows that are on it."""
        if not self.paths:
            return
        number = np.where(m >= 0, self.bent[m], -1)
        for i in np.unique(number[number >= 0]):
            yield self.paths[i], np.flatnonzero(number == i)

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
    segment = choice.segment
    kind = np.array([leg.kind for leg in path.legs])
    leg = np.flatnonzero((segment >= 0) | (kind == "taught") | ((kind == "joint") & (joint_length > NO_MOTION)))
    length = joint_length[leg]
    cartesian = segment[leg] >= 0
    length[cartesian] = path.segments.length[segment[leg[cartesian]]]
    straight = kind[leg] == "joint"
    direction = np.where(straight[:, None], change[leg] / np.where(straight, length, 1.0)[:, None], 0.0)
    bent = np.full(len(leg), -1, dtype=np.intp)
    for m in np.flatnonzero(kind[leg] == "taught"):
        taught = path.legs[leg[m]].step.taught
        assert taught is not None
        bent[m] = list(path.taught).index(taught)
        length[m] = path.taught[taught].length
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
        bent=bent,
        course=path.course,
        paths=tuple(path.taught.values()),
        crossings=_crossings(choice, tracks, leg, segment[leg]),
    )


def _crossings(choice: Choice, tracks: Tracks, leg: Index, segment: Index) -> tuple[tuple[int, float], ...]:
    """Where the motions on legs (M,), along segments (M,), run through a singularity with the branches chosen."""
    motion = {(int(segment[m]), int(choice.slot[leg[m]])): m for m in np.flatnonzero(segment >= 0).tolist()}
    met = [(motion[c.segment, c.slot], c.s) for c in tracks.crossings if (c.segment, c.slot) in motion]
    return tuple(sorted(met))


def _reference(path: CartesianPath, choice: Choice, tracks: Tracks, ways: Routes, segment: Index) -> Reference:
    legs = np.flatnonzero(segment >= 0)
    if not len(legs):
        return Reference(np.array([0.0, 1.0]), np.zeros((2, path.task.arm.n)), np.ones(1))
    slot = np.zeros(len(tracks.first), dtype=np.intp)  # of what is not followed it doesn't matter
    slot[segment[legs]] = choice.slot[legs]
    shift = np.zeros((len(slot), path.task.arm.n))
    shift[segment[legs]] = choice.q[legs] - tracks.q[tracks.first[segment[legs]], choice.slot[legs]]
    revolute = path.task.arm.revolute
    shift = np.where(revolute, 2.0 * np.pi * np.round(shift / (2.0 * np.pi)), 0.0)
    q = tracks.q[np.arange(len(tracks.s)), slot[tracks.segment]] + shift[tracks.segment]
    at = 2.0 * tracks.segment + tracks.s / path.segments.length[tracks.segment]
    return Reference(at, q, path.segments.length)
