"""Every branch that reaches the targets of a task, with the room it has: what there was to choose from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.redundant import value_range
from pathplan.path.cartesian import CartesianPath, cartesian_path, tool_frames
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array
from pathplan.path.states import LIMIT_SLACK, SAME_STATE, endless_joints, expand
from pathplan.path.taskpath import TaskPath
from pathplan.path.tracking import turns_between
from pathplan.task.model import Task

__all__ = ["TargetBranches", "target_branches"]


@dataclass(frozen=True, eq=False)
class TargetBranches:
    """B branches of the inverse at the L targets of a task that are poses.

    A branch has turn equivalents where a joint may turn further than once; q, margin and limit are those of the one
    that is used, else of the one with most room.
    """

    step: Index  # (L,) counted from 0
    labels: tuple[Mapping[str, str], ...]  # of length B, as those of `Arm.inverse_batch`
    reached: Mask  # (L, B) the tool stands at the pose, position limits left aside
    within: Mask  # (L, B) and inside the position limits
    used: Index  # (L,) the branch that the plan takes, -1 without a plan
    q: Array  # (L, B, n)
    margin: Array  # (L, B) rad or m to the position limit nearest to it, below 0 beyond it; inf where there is none
    limit: Index  # (L, B) the row of the arm's limits that has this margin
    singular: Array  # (L, B) smallest singular value, see `pathplan.arm.kinematics.smallest_singular_value`


def target_branches(task: Task, path: TaskPath | None = None) -> TargetBranches:
    """All branches at all targets of a task given as poses, in one batch; with its path, which of them it uses.

    Of several limits the nearest is told, a metre counting as one over the arm's length. What a pose leaves free (a
    track, a turntable) stands where the path has it; without a path where the task says, else in the middle of its
    travel. Raises what `cartesian_path` raises.
    """
    arm = task.arm
    cartesian = cartesian_path(task) if path is None else path.cartesian
    posed = np.array([i for i, leg in enumerate(cartesian.legs) if _is_pose(cartesian, i)], dtype=np.intp)
    step = np.array([cartesian.legs[i].step.index for i in posed], dtype=np.intp)
    poses = np.array([cartesian.legs[i].end for i in posed]).reshape(-1, 4, 4) @ tool_frames(cartesian)[posed]
    view, follower = np.array([cartesian.legs[i].view for i in posed], dtype=np.intp), cartesian.follower
    held, columns = _held(cartesian)[posed + 1], list(follower.held)
    q, reached = follower.branches(view, poses, held)
    singular = np.full(reached.shape, np.nan)
    if reached.any():
        every = np.broadcast_to(view[:, None], reached.shape)
        singular[reached] = follower.singular(every[reached], q[reached])
    q, reached = np.nan_to_num(q[:, :, : arm.n]), reached.copy()  # without a virtual roll
    q -= _turns_to_the_middle(arm, q)
    q[:, :, columns] = held[:, None]
    within = _roomiest(arm, reached, q)
    used = np.full(len(posed), -1, dtype=np.intp)
    if path is not None:
        taken = path.targets[posed + 1]
        revolute = arm.revolute
        moving = np.zeros(arm.n, dtype=bool)
        moving[list(arm.tool_joints)] = True
        change = q - taken[:, None]
        away = np.abs((change - turns_between(change, revolute))[:, :, moving]).max(axis=2, initial=0.0)
        away[~reached] = np.inf
        nearest = away.argmin(axis=1)
        found = away[np.arange(len(posed)), nearest] < SAME_STATE
        used[found] = nearest[found]
        q[found, nearest[found]] = taken[found]
        within[found, nearest[found]] = True
    margin, limit = _margins(arm, q)
    labels = max((follower.labels(number) for number in {*view.tolist(), 0}), key=len)
    return TargetBranches(step, labels, reached, within, used, q, margin, limit, singular)


def _held(path: CartesianPath) -> Array:
    """(m + 1, H) where the held joints stand at the start and after each leg."""
    if path.free is None or path.held.shape == path.free.known.shape:
        return path.held
    middle = value_range(path.task.arm, path.follower.held).mean(axis=1)
    return np.where(np.isnan(path.free.known), middle, path.free.known)


def _is_pose(path: CartesianPath, leg: int) -> bool:
    target = path.legs[leg].step.target
    return target is None or target.joints is None


def _turns_to_the_middle(arm: Arm, q: Array) -> Array:
    """Whole turns to take off q (..., n) so that each joint is as near as it can be to the middle of its travel."""
    turns = np.zeros_like(q)
    endless = endless_joints(arm)
    for j, joint in enumerate(arm.joints):
        if joint.kind == "revolute" and not endless[j]:
            turns[..., j] = 2.0 * np.pi * np.round((q[..., j] - sum(joint.position) / 2.0) / (2.0 * np.pi))
    return turns


def _margins(arm: Arm, q: Array) -> tuple[Array, Index]:
    """How far q (..., n) is from the nearest position limit, and which row of the limits that is."""
    low, high = arm.limits.position.T
    rows = q @ arm.limits.matrix.T
    margins = np.minimum(rows - low, high - rows)
    scale = np.array([1.0 / arm.length if kind == "prismatic" else 1.0 for kind in arm.limit_kinds])
    nearest = (margins * scale).argmin(axis=-1)
    return np.take_along_axis(margins, nearest[..., None], axis=-1)[..., 0], nearest.astype(np.intp)


def _roomiest(arm: Arm, reached: Mask, q: Array) -> Mask:
    """(L, B) which branches have a turn equivalent within the limits; the one with most room is put into q."""
    margin, _ = _margins(arm, q)
    within = reached & (margin >= -LIMIT_SLACK)
    if len(arm.limits.names) == arm.n:
        return within  # every row is a joint of its own: nearest to the middle is roomiest
    k, b = np.nonzero(reached)
    place = np.arange(len(k))
    source, _, turned = expand(arm, place, b, q[k, b])
    room, _ = _margins(arm, turned)
    best = np.full(len(k), -np.inf)
    np.maximum.at(best, source, room)
    for row in np.flatnonzero(room == best[source]):
        q[k[source[row]], b[source[row]]] = turned[row]
    within[:] = False
    within[k[source], b[source]] = True
    return within
