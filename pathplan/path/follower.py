"""Who follows a programmed path: the arm in each frame that something is programmed in, with some joints held.

An arm with as many axes as a pose asks for follows by itself. Where it has more (a seventh axis, a track), or where a
joint carries the workpiece (a turntable), the course of those joints is given along the path: they are *held*, the pose
decides the others. A path on a workpiece that a joint carries is programmed, followed and judged in that joint's moving
frame, through the arm as it is seen from there.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.kinematics import joint_derivatives, smallest_singular_value
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array, JointPath
from pathplan.path.newton import solve_near
from pathplan.path.states import endless_joints

__all__ = ["Course", "Follower", "follower_of"]


@dataclass(frozen=True, eq=False)
class Follower:
    """An arm, the joints that carry workpieces (view 0 is the base frame, view k the frame of `carriers[k - 1]`), and
    the joints whose course is given. Arrays of views (N,), poses (N, 4, 4) in those views, joint vectors (N, n).
    """

    arm: Arm
    carriers: tuple[str, ...] = ()
    held: tuple[int, ...] = ()

    @cached_property
    def views(self) -> tuple[Arm, ...]:
        return (self.arm, *(self.arm.seen_from(joint) for joint in self.carriers))

    def view_of(self, carrier: str | None) -> int:
        return 0 if carrier is None else 1 + self.carriers.index(carrier)

    def carrying(self, arm: Arm) -> Follower:
        """The same with the arm carrying something else."""
        return self if arm is self.arm else Follower(arm, self.carriers, self.held)

    @cached_property
    def steady(self) -> bool:
        """The branch index follows a path by itself in every view."""
        if not self.held:
            return self.arm.steady_branches
        return all(self._steady(view) for view in range(len(self.views)))

    def _steady(self, view: int) -> bool:
        arm, held = self.views[view], self._held_in(view)
        return arm.free_solver(held).typical.steady if held else arm.steady_branches

    def _held_in(self, view: int) -> tuple[int, ...]:
        return tuple(i for i in self.held if i in self.views[view].tool_joints)

    def labels(self, view: int) -> tuple[Mapping[str, str], ...]:
        """Words for the branches of a view."""
        arm, held = self.views[view], self._held_in(view)
        return arm.free_solver(held).typical.labels if held else arm.solver.labels

    @cached_property
    def endless(self) -> Mask:
        """(n,) joints that may turn without end and whose turns are not given."""
        endless = endless_joints(self.arm)
        endless[list(self.held)] = False
        return endless

    def branches(self, view: Index, poses: Array, held: Array) -> tuple[Array, Mask]:
        """Joint vectors (N, B, n) of every branch with the held joints at (N, H), and which reach their pose (N, B)."""
        if not self.held and not self.carriers:
            found = self.arm.inverse_batch(poses)
            return found.q, np.asarray(found.valid)
        parts = []
        for number, rows in self._by_view(view):
            own = self._held_in(number)
            arm = self.views[number]
            if own:
                given = held[rows][:, [self.held.index(i) for i in own]]
                free = arm.inverse_free(poses[rows], own, given[:, None])
                q, valid = free.q[:, 0].copy(), np.array(free.valid[:, 0])
            else:
                found = arm.inverse_batch(poses[rows])
                q, valid = found.q.copy(), np.array(found.valid)
            q[:, :, list(self.held)] = held[rows][:, None]
            parts.append((rows, q, valid))
        most = max((q.shape[1] for _, q, _ in parts), default=1)
        every = np.zeros((len(poses), most, self.arm.n))
        reached = np.zeros((len(poses), most), dtype=bool)
        for rows, q, valid in parts:
            every[rows[:, None], np.arange(q.shape[1])] = q
            reached[rows[:, None], np.arange(q.shape[1])] = valid & np.isfinite(q).all(axis=2)
        return every, reached

    def near(self, view: Index, poses: Array, guess: Array) -> tuple[Array, Mask]:
        """Joint vectors near guesses, the held joints where the guess has them, and which of them reach their pose."""
        if len(self.views) == 1:
            return solve_near(self.arm, poses, guess, self.held)
        q, met = np.empty_like(guess), np.zeros(len(guess), dtype=bool)
        for number, rows in self._by_view(view):
            q[rows], met[rows] = solve_near(self.views[number], poses[rows], guess[rows], self.held)
        return q, met

    def derivatives(self, view: Index, q: Array, twists: Array, rates: Array) -> Array:
        """q', q'', q''' (N, 3, n) that follow twists (N, 3, 6) while the held joints move by rates (N, 3, H)."""
        if not self.held and not self.carriers:
            return joint_derivatives(self.arm, q, twists)[0]
        found = np.empty((len(q), 3, self.arm.n))
        for number, rows in self._by_view(view):
            found[rows] = joint_derivatives(self.views[number], q[rows], twists[rows], self.held, rates[rows])[0]
        return found

    def singular(self, view: Index, q: Array) -> Array:
        """(N,) smallest singular value of the joints that follow."""
        if not self.held and not self.carriers:
            return smallest_singular_value(self.arm, q)
        value = np.empty(len(q))
        for number, rows in self._by_view(view):
            value[rows] = smallest_singular_value(self.views[number], q[rows], self.held)
        return value

    def forward(self, view: Index, q: Array) -> Array:
        """Tool poses (N, 4, 4) in the views."""
        if len(self.views) == 1:
            return self.arm.forward(q)
        poses = np.empty((len(q), 4, 4))
        for number, rows in self._by_view(view):
            poses[rows] = self.views[number].forward(q[rows])
        return poses

    def base_from_view(self, view: int, q: Array) -> Array:
        """(4, 4) where the frame of a view stands at q (n,)."""
        return np.eye(4) if view == 0 else self.arm.base_from_joint(self.carriers[view - 1], q)

    def _by_view(self, view: Index) -> Iterator[tuple[int, Index]]:
        for number in np.unique(view):
            yield int(number), np.flatnonzero(view == number)


@dataclass(frozen=True, eq=False)
class Course:
    """In which view each of K segments is programmed, and how the held joints move along it.

    `laws`: their positions over the path parameter of each segment; () where nothing is held.
    """

    follower: Follower
    view: Index  # (K,)
    laws: tuple[JointPath, ...] = ()

    def take(self, k: Index) -> Course:
        """The rows k as a course of their own."""
        return Course(self.follower, self.view[k], tuple(self.laws[i] for i in k) if self.laws else ())

    def held(self, k: Index, s: Array) -> Array:
        """(N, H) held joints at s (N,) of segments k (N,)."""
        return self.derivatives(k, s, 0)[0]

    def derivatives(self, k: Index, s: Array, highest: int = 3) -> Array:
        """(highest + 1, N, H) held joints and their derivatives at s (N,) of segments k (N,)."""
        found = np.zeros((highest + 1, len(s), len(self.follower.held)))
        if self.laws:
            for i in np.unique(k):
                rows = np.flatnonzero(k == i)
                found[:, rows] = self.laws[i].derivatives(s[rows], highest)
        return found


def follower_of(arm: Arm, carriers: tuple[str, ...]) -> Follower:
    """The follower of a task on workpieces that joints carry: held are the joints that don't move the tool, and as many
    others as the arm has more than six.
    """
    outside = [i for i in range(arm.n) if i not in arm.tool_joints]
    spare = [arm.joint_names.index(name) for name in arm.free_joints]
    return Follower(arm, carriers, tuple(sorted({*outside, *spare})))
