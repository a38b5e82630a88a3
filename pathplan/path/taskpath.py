"""What a task has become once it is a path: stretches of joint motion between stop points, waits,
corners, findings.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pathplan.arm import Arm
from pathplan.path.cartesian import CartesianPath, Finding
from pathplan.path.geometry import poses_of
from pathplan.path.joint import Array, JointPath
from pathplan.path.rungs import rolled
from pathplan.path.spans import Spans
from pathplan.path.tool_motion import tool_derivatives
from pathplan.task.model import Task

__all__ = ["Cap", "Corner", "StepPart", "Stretch", "TaskPath", "Wait"]


class StepPart(NamedTuple):
    """A step's part of a stretch, from corner middle to corner middle. A step without motion has s_from
    = s_to.
    """

    step: int  # 0-based index in the task
    s_from: float
    s_to: float


class Cap(NamedTuple):
    """Tool speed (m/s), acceleration (m/s^2) and turning speed (rad/s) not to be exceeded from s_from to s_to; None:
    no cap.

    The lower of what step, tool and task ask; in a corner the lower of both its steps.
    """

    s_from: float
    s_to: float
    speed: float | None
    acceleration: float | None
    turning_speed: float | None
    held: bool = False  # whether a step is to hold its tool speed there


@dataclass(frozen=True, eq=False)
class Stretch:
    """Motion from rest to rest: a joint path, who carries it out, and what it was programmed to be."""

    path: JointPath
    arm: Arm  # carrying the tool and payload of these steps
    steps: tuple[StepPart, ...]
    caps: tuple[Cap, ...]
    spans: Spans  # of the whole task
    span: NDArray[np.intp]  # which of them make up this stretch
    span_start: Array  # where each begins on this stretch

    def programmed(self, s: ArrayLike) -> tuple[Array, NDArray[np.bool_]]:
        """Programmed tool poses (N, 4, 4) at s (N,), and where there is one (N,).

        None is programmed (NaN, False) where the motion is straight in joint space, and in a corner with
        such a step.
        """
        return self._poses(self.spans.unbent, s)

    def followed(self, s: ArrayLike) -> tuple[Array, NDArray[np.bool_]]:
        """The same, the tool turned aside within the tolerance of its step where it is."""
        return self._poses(self.spans, s)

    def _poses(self, spans: Spans, s: ArrayLike) -> tuple[Array, NDArray[np.bool_]]:
        at = np.clip(np.atleast_1d(np.asarray(s, dtype=float)), 0.0, self.path.length)
        place = np.clip(np.searchsorted(self.span_start, at, side="right") - 1, 0, len(self.span) - 1)
        i = self.span[place]
        known = spans.programmed()[i]
        poses = np.full((len(at), 4, 4), np.nan)
        if known.any():
            rows = i[known]
            jets = spans.tool_jets(rows, np.minimum(at - self.span_start[place], spans.length[i])[known])
            poses[known] = poses_of(jets.position[0], jets.rotation)
        return poses, known

    def has_tool_path(self, s: ArrayLike) -> NDArray[np.bool_]:
        """(N,) whether a tool pose is programmed at s (N,)."""
        place = np.clip(np.searchsorted(self.span_start, np.asarray(s), side="right") - 1, 0, len(self.span) - 1)
        return np.asarray(self.spans.programmed()[self.span[place]])

    def reached(self, s: ArrayLike, q: Array) -> Array:
        """Tool poses (N, 4, 4) at joint vectors q (N, n) that belong to s (N,), to be compared with what is programmed:
        in the frame it is programmed in, and turned about the tool's axis to match where the roll of the tool is free.
        """
        at = np.clip(np.atleast_1d(np.asarray(s, dtype=float)), 0.0, self.path.length)
        place = np.clip(np.searchsorted(self.span_start, at, side="right") - 1, 0, len(self.span) - 1)
        i = self.span[place]
        known = self.spans.programmed()[i]
        course = self.spans.motions.course
        poses = self.arm.forward(q)
        turning = np.flatnonzero(known)[course.view[self.spans.motions.segment[self.spans.before[i[known]]]] > 0]
        if len(turning):
            follower = course.follower.carrying(self.arm)
            poses[turning] = follower.forward(self.spans.view(i[turning]), q[turning])
        free = np.flatnonzero(known & self.spans.rolling()[i])
        if len(free):
            programmed = self.programmed(at[free])[0]
            poses[free] = matched_roll(poses[free], programmed)
        return poses

    def tool_derivatives(self, s: ArrayLike) -> tuple[Array, Array]:
        """dx/ds and d2x/ds2 (N, 3) of the tool centre point along the joint path, m per path parameter
        (squared).
        """
        q, q1, q2 = self.path.derivatives(np.atleast_1d(np.asarray(s, dtype=float)), 2)
        return tool_derivatives(self.arm, q, q1, q2)


def matched_roll(poses: Array, programmed: Array) -> Array:
    """Poses (N, 4, 4) turned about their own z axes as near as that brings them to others (N, 4, 4)."""
    between = np.swapaxes(programmed[:, :3, :3], 1, 2) @ poses[:, :3, :3]
    angle = np.arctan2(between[:, 1, 0] - between[:, 0, 1], between[:, 0, 0] + between[:, 1, 1])
    return rolled(poses, -angle)


@dataclass(frozen=True)
class Wait:
    """The arm rests. 0 s for a step without motion at a stop point: its mark still has an instant."""

    step: int
    seconds: float


@dataclass(frozen=True, eq=False)
class Corner:
    """What happens between two moving steps.

    `used` is the size in use in the unit `asked` has (m, rad, share): how far before the corner the path
    is left or after it joined. `region` names that unit. A stop has used 0 and lies at the end of its
    stretch.
    """

    after_step: int
    kind: Literal["fly-by", "stop"]
    reason: str  # of a stop
    asked: str  # as written in the task, "" for none
    asked_value: float
    used: float
    region: Literal["length", "angle", "share", ""]
    stretch: int  # index in TaskPath.stretches
    s_from: float
    s_to: float
    pose: Array  # (4, 4) the corner point's tool pose


@dataclass(frozen=True, eq=False)
class TaskPath:
    """A task as joint motion: everything that timing, table and audit need to know of it."""

    task: Task
    cartesian: CartesianPath
    sequence: tuple[Stretch | Wait, ...]
    corners: tuple[Corner, ...]
    findings: tuple[Finding, ...]
    targets: Array  # (m + 1, n) joint vectors at the start and after each moving step

    @property
    def stretches(self) -> tuple[Stretch, ...]:
        return tuple(part for part in self.sequence if isinstance(part, Stretch))

    @property
    def starts(self) -> tuple[Array, ...]:
        """Joint vector (n,) at which each stretch starts."""
        return tuple(stretch.path([0.0])[0] for stretch in self.stretches)
