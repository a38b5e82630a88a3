"""Whether a table passes the targets of a task: the nearest row to each, in the order of the steps.

Of all ways to give every target a row, later steps no earlier rows, the one counts whose distances are least in sum; a
distance far beyond some millimetres counts as no more than missed, so that one target that is missed does not draw its
neighbours away from theirs. Where a step ends at a stop point, rows at which the arm stands come first.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.arm.inverse import pose_errors
from pathplan.auditing.exceedances import clock
from pathplan.auditing.model import Finding
from pathplan.auditing.shares import Array
from pathplan.errors import InputError
from pathplan.path.follower import Follower, follower_of
from pathplan.path.taskpath import matched_roll
from pathplan.table import JointTable
from pathplan.units import format_quantity, joint_dimension

if TYPE_CHECKING:
    from pathplan.task import Step, Task

__all__ = ["NEAR", "Pass", "pass_findings", "passes"]

NEAR = (1e-4, math.radians(0.1))  # m, rad: as near as a target counts as passed, if nothing else is asked
MISSED = 0.005  # m, or rad times the arm's length: from about here on a target counts as missed
STANDS = 1e-5  # m, or rad times the arm's length, to one of the neighbouring rows
MOST_ROWS, MOST_WORK = 2_000_000, 2_000_000_000  # rows, and rows times targets
MOST_CANDIDATES = 4_000_000  # rows looked at for all targets together
Integers = NDArray[np.intp]


@dataclass(frozen=True)
class Pass:
    """The target of a step and the row that comes nearest to it.

    `allowed` (m, rad) is how near it must come: at a stop point what was asked for, at a fly-by point the blend more;
    None where the blend is no length, so that nothing is judged. `joint` would have to move most, by `off` (rad or m),
    to stand at the target; None where the pose is out of reach.
    """

    step: int
    name: str
    kind: Literal["stop", "fly-by"]
    row: int
    time: float  # s
    distance: float  # m
    angle: float  # rad
    joint: str | None
    off: float
    allowed: tuple[float, float] | None

    @property
    def passed(self) -> bool:
        return self.allowed is None or (self.distance <= self.allowed[0] and self.angle <= self.allowed[1])


def passes(table: JointTable, task: Task, near: tuple[float, float] = NEAR) -> tuple[Pass, ...]:
    """Every step of the task that has a target, with the nearest row of the table.

    `near`: m and rad within which a target counts as passed. Arcs by centre and angle and waits have no target. Rows
    that are not finite count as far away. Raises InputError for a table of another number of joints, or one too long
    to be compared.
    """
    arm = task.arm
    if table.n != arm.n:
        raise InputError(f"table: has {table.n} joints, {arm.name} has {arm.n}")
    steps = [step for step in task.steps if step.target is not None]
    if len(table) > MOST_ROWS or len(table) * len(steps) > MOST_WORK:
        raise InputError(f"table: {len(table)} rows are too many to be compared with {len(steps)} targets")
    good = np.asarray(np.isfinite(table.position).all(axis=1))
    position = np.where(good[:, None], table.position, 0.0)
    with np.errstate(over="ignore", invalid="ignore"):
        return _all_passes(table, task, steps, good, position, near)


def _all_passes(
    table: JointTable,
    task: Task,
    steps: Sequence[Step],
    good: NDArray[np.bool_],
    position: Array,
    near: tuple[float, float],
) -> tuple[Pass, ...]:
    """The nearest rows; `good` (N,) tells which are finite, `position` (N, n) is zero at the others."""
    seen = {(step.tool, task.carrier(step)): _follower(task, step) for step in steps}
    view = np.ones(len(position), dtype=np.intp)
    poses = {key: follower.forward(view * len(follower.carriers), position) for key, follower in seen.items()}
    moves = _moves(task.arm, position)
    costs, rows = [], []
    most = max(64, MOST_CANDIDATES // max(1, len(steps)))
    for step in steps:
        away = _away(step, task, poses[step.tool, task.carrier(step)], position)
        away[~good | np.isnan(away)] = np.inf
        at = _candidates(away, most)
        rows.append(at)
        known = np.minimum(away[at], 1e6)
        costs.append(known / (known + MISSED) + (0.5 * moves[at] if step.blend is None else 0.0))
    chosen = _in_order(rows, costs)
    return tuple(
        _pass(step, task, seen[step.tool, task.carrier(step)], table, row, near)
        for step, row in zip(steps, chosen, strict=True)
    )


def _carrying(arm: Arm, step: Step) -> Arm:
    if step.tool in ("", arm.tool.name):
        return arm
    return arm.equipped(tool=step.tool if step.tool in arm.tools else None)


def _follower(task: Task, step: Step) -> Follower:
    """The arm with the step's tool; its last view is the frame that the target is meant in."""
    carrier = task.carrier(step)
    return follower_of(_carrying(task.arm, step), () if carrier is None else (carrier,))


def _target_pose(step: Step, task: Task, arm: Arm) -> Array:
    """(4, 4) tool pose of a step's target, in the base frame or in that of the joint that carries it."""
    assert step.target is not None
    if step.target.joints is not None:
        return arm.forward(step.target.joints)
    assert step.target.frame_from_tool is not None
    return task.carrier_from_frame(step.target.frame)[1] @ step.target.frame_from_tool


def _errors(step: Step, poses: Array, target: Array) -> tuple[Array, Array]:
    """Distances and angles (N,) of poses (N, 4, 4) from a target (4, 4); the roll of the tool left out where it is
    free.
    """
    if step.roll_free:
        poses = matched_roll(poses, np.broadcast_to(target, poses.shape))
    return pose_errors(poses, target[None])


def _away(step: Step, task: Task, poses: Array, position: Array) -> Array:
    """How far each row (N,) is from a step's target, m; angles times the arm's length."""
    assert step.target is not None
    arm = task.arm
    if step.target.joints is not None:
        scale = np.array([arm.length if joint.kind == "revolute" else 1.0 for joint in arm.joints])
        return np.asarray((np.abs(position - step.target.joints) * scale).max(axis=1))
    distance, angle = _errors(step, poses, _target_pose(step, task, arm))
    return np.asarray(distance + arm.length * angle)


def _moves(arm: Arm, position: Array) -> NDArray[np.bool_]:
    """Rows (N,) at which the arm neither came to stand nor stands."""
    scale = np.array([arm.length if joint.kind == "revolute" else 1.0 for joint in arm.joints])
    ways = (np.abs(np.diff(position, axis=0)) * scale).max(axis=1, initial=0.0)
    moving = np.concatenate([[False], ways > STANDS, [False]])  # before the first row and after the last it rests
    return moving[:-1] & moving[1:]


def _candidates(away: Array, most: int) -> Integers:
    """Rows where a distance (N,) is least in its neighbourhood, and both ends; of too many the nearest ones."""
    falling = np.concatenate([[True], away[1:] < away[:-1]])
    not_rising_after = np.concatenate([away[:-1] <= away[1:], [True]])
    at = np.flatnonzero(falling & not_rising_after)
    if len(at) > most:
        at = np.sort(at[np.argsort(away[at], kind="stable")[:most]])
    return np.unique(np.concatenate([[0], at, [len(away) - 1]]))


def _in_order(rows: Sequence[Integers], costs: Sequence[Array]) -> list[int]:
    """A row for each target, none before that of the target before, of least cost in sum (dynamic programming)."""
    came: list[Integers] = []
    total: Array = np.zeros(0)
    for k, (at, cost) in enumerate(zip(rows, costs, strict=True)):
        if k == 0:
            total = cost
            continue
        best = np.minimum.accumulate(total)
        first = np.concatenate([[True], total[1:] < best[:-1]])
        leading = np.maximum.accumulate(np.where(first, np.arange(len(total)), 0))
        upto = np.searchsorted(rows[k - 1], at, side="right") - 1  # row 0 is a candidate of every target
        came.append(leading[upto])
        total = cost + best[upto]
    chosen = [int(np.argmin(total))] if len(rows) else []
    for back in reversed(came):
        chosen.append(int(back[chosen[-1]]))
    return [int(at[i]) for at, i in zip(rows, reversed(chosen), strict=True)]


def _pass(step: Step, task: Task, follower: Follower, table: JointTable, row: int, near: tuple[float, float]) -> Pass:
    assert step.target is not None
    q, target = table.position[row], _target_pose(step, task, follower.arm)
    view = np.array([len(follower.carriers)], dtype=np.intp)
    distance, angle = (float(value[0]) for value in _errors(step, follower.forward(view, q[None]), target))
    joint, off = _joint_off(follower, q, target, step.target.joints)
    allowed: tuple[float, float] | None = near
    if step.blend is not None:
        allowed = (near[0] + step.blend.value, math.pi) if step.blend.kind == "length" else None
    kind: Literal["stop", "fly-by"] = "stop" if step.blend is None else "fly-by"
    return Pass(step.index, step.name, kind, row, float(table.time[row]), distance, angle, joint, off, allowed)


def _joint_off(follower: Follower, q: Array, target: Array, joints: Array | None) -> tuple[str | None, float]:
    """The joint that would have to move most to stand at the target, and by how much; those that a pose leaves free
    stay.
    """
    arm = follower.arm
    scale = np.array([arm.length if joint.kind == "revolute" else 1.0 for joint in arm.joints])
    if joints is None:
        view = np.array([len(follower.carriers)], dtype=np.intp)
        found, valid = follower.branches(view, target[None], q[None, list(follower.held)])
        answers = found[0][valid[0]]
        if not len(answers):
            return None, 0.0
        turning = arm.revolute
        moves = answers - q
        moves = np.where(turning, np.remainder(moves + np.pi, 2 * np.pi) - np.pi, moves)
        move = moves[np.argmin(np.abs(moves * scale).max(axis=1))]
    else:
        move = joints - q
    k = int(np.argmax(np.abs(move * scale)))
    return arm.joints[k].name, float(move[k])


def pass_findings(found: Sequence[Pass], arm: Arm) -> list[Finding]:
    """What to know of targets that are not passed, one exceedance each."""
    findings = []
    kinds = {joint.name: joint.kind for joint in arm.joints}
    for target in found:
        if target.passed:
            continue
        assert target.allowed is not None
        name = f" ({target.name})" if target.name else ""
        near = format_quantity(target.distance, "length", 3), format_quantity(target.angle, "angle", 3)
        text = f"step {target.step + 1}{name}: its target is not passed: nearest is row {target.row + 1} at "
        text += f"{clock(target.time)}, {near[0]} and {near[1]} away"
        if target.joint is not None:
            off = format_quantity(target.off, joint_dimension(kinds[target.joint], "position"), 3)
            text += f", {target.joint} by {off}"
        where = (target.time, target.step, target.joint, "target")
        findings.append(Finding("exceedance", text, *where, row=target.row))
    return findings
