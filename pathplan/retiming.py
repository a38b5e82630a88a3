"""A joint table from anywhere, timed anew: its own path, our limits.

The positions of the table make a path in joint space. Where the table rests for a while the arm stops and waits as
long; where its path turns sharply it stops. Everything between is followed along a smooth path that passes the rows
within a tolerance, as fast as the arm's limits allow. Times and velocities of the table count for nothing else.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.table import JointTable
from pathplan.task.model import Step, Target, Task, Taught

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.planning import Plan, Progress

__all__ = ["REST", "TOLERANCE", "retime", "task_along"]

Array = NDArray[np.float64]
Index = NDArray[np.intp]
TOLERANCE = 1e-4  # rad, or arm lengths: how far the path may pass the rows unless something else is said
REST = 0.05  # s without motion from which on the table rests on purpose
_STILL = 1e-9  # rad, or arm lengths, between rows that count as one
_SHARP = 0.5  # rad between chords at which the path turns too sharply to be followed without a stop
_NEAR_A_STOP = 5  # rows that a mark may stand off a stop that it is said to be at
_CHORD = 5.0  # tolerances, and
_ROUNDED = 20.0  # smallest steps of the table, that such a chord is long at least


def retime(
    table: JointTable,
    arm: Arm,
    *,
    tolerance: float = TOLERANCE,
    cycle: float | None = None,
    rest: float = REST,
    progress: Progress | None = None,
) -> Plan:
    """The plan that follows the path of a joint table as fast as the arm's limits allow.

    Parameters
    ----------
    table : JointTable
        Positions and times of any source; nothing else of it is used but its marks.
    arm : Arm
        Carrying the tool and payload meant.
    tolerance
        How far the path may pass the rows, rad, or m over the arm's length. The largest deviation is among the findings
        of the plan's path.
    cycle
        Of the new table, s; that of the given one if None.
    rest
        Where the table does not move for at least so long, s, the arm waits as long.

    Raises
    ------
    InputError
        Joints that are not the arm's, positions that are not finite or outside the limits, no motion, no cycle.
    UnreachableError, LimitError
        The path can't be followed within the limits; the message names the rows.
    """
    from pathplan.planning import plan

    return plan(task_along(table, arm, tolerance=tolerance, cycle=cycle, rest=rest), progress=progress)


def task_along(
    table: JointTable,
    arm: Arm,
    *,
    tolerance: float = TOLERANCE,
    cycle: float | None = None,
    rest: float = REST,
    file: Path | None = None,
) -> Task:
    """The task that follows the path of a joint table: taught paths, and waits. See `retime`.

    `file`: which the table was read from, for messages and the record of sources.
    """
    if not tolerance > 0.0:
        raise InputError(f"tolerance: expected an angle above zero, got {tolerance}")
    name = file.name if file is not None else "table"
    _check(table, arm, name)
    period = cycle if cycle is not None else table.cycle
    if period is None:
        from pathplan.auditing.stamps import found_cycle

        period = found_cycle(table.time)
    if period is None:
        raise InputError(f"{name}: its times lie on no regular grid: say the cycle of the new table")
    weights = np.array([1.0 if joint.kind == "revolute" else 1.0 / arm.length for joint in arm.joints])
    parts = _parts(table.time, table.position * weights, tolerance, rest)
    if not any(part.moves for part in parts):
        raise InputError(f"{name}: nothing moves in it")
    steps = [_step(part, table, arm, i, name, tolerance) for i, part in enumerate(parts)]
    sources = dict(arm.sources)
    if file is not None:
        with open(file, "rb") as stream:
            sources[name] = hashlib.file_digest(stream, "sha256").hexdigest()
    start = np.array(table.position[0])
    start.flags.writeable = False
    return Task(
        title=str(table.meta.get("task") or name),
        file=file,
        arm=arm,
        start=start,
        steps=tuple(_marked(steps, parts, table)),
        cycle=period,
        sources=sources,
    )


def _check(table: JointTable, arm: Arm, name: str) -> None:
    from pathplan.task.joints import check_positions, outside

    if table.n != arm.n:
        raise InputError(f"{name}: has {table.n} joints, {arm.name} has {arm.n}")
    for joint_name, kind, joint in zip(table.joint_names, table.joint_kinds, arm.joints, strict=False):
        if kind != joint.kind:
            raise InputError(f"{name}: joint {joint_name} is {kind}, {joint.name} of {arm.name} is {joint.kind}")
    bad = np.argwhere(~np.isfinite(table.position))
    if len(bad):
        row, j = bad[0]
        raise InputError(f"{name}: row {row + 1}: position of {arm.joints[j].name} is not a finite number")
    if not np.isfinite(table.time).all() or np.any(np.diff(table.time) < 0):
        row = int(np.argmax(~np.isfinite(table.time) | (np.diff(table.time, prepend=table.time[0]) < 0)))
        raise InputError(f"{name}: row {row + 1}: its time is not a finite number, or before the row above")
    for row in np.flatnonzero(outside(table.position, arm).any(axis=1))[:1]:
        check_positions(table.position[row], arm, f"{name}: row {row + 1}")


@dataclass(frozen=True)
class _Part:
    """Rows `first` to `last` of a table: a motion from stop to stop, or a rest."""

    first: int
    last: int
    moves: bool
    seconds: float = 0.0  # of a rest


def _parts(time: Array, q: Array, tolerance: float, rest: float) -> list[_Part]:
    """Motions and rests in order; q (N, n) scaled so that a rad counts 1."""
    size = np.linalg.norm(np.diff(q, axis=0), axis=1)
    still = size <= _STILL
    edges = np.flatnonzero(np.diff(np.concatenate([[False], still, [False]]).astype(int)))
    parts: list[_Part] = []
    before = 0
    for begin, end in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        seconds = float(time[end] - time[begin])
        if seconds < rest:
            continue
        if not still[before:begin].all():
            parts.append(_Part(before, begin, True))
        parts.append(_Part(begin, end, False, seconds))
        before = end
    if not still[before:].all():
        parts.append(_Part(before, len(q) - 1, True))
    steps = np.abs(np.diff(q, axis=0))
    chord = max(_CHORD * tolerance, _ROUNDED * float(steps[steps > _STILL].min(initial=np.inf)))
    out: list[_Part] = []
    for part in parts:
        cuts = _sharp(q[part.first : part.last + 1], chord) + part.first if part.moves else np.zeros(0, dtype=np.intp)
        borders = [part.first, *cuts.tolist(), part.last]
        out += [_Part(a, b, True) for a, b in pairwise(borders)] if part.moves else [part]
    return out


def _sharp(q: Array, chord: float) -> Index:
    """Rows of q (N, n) at which the path turns sharply, seen over chords of this length."""
    travelled = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(q, axis=0), axis=1))])
    at = np.flatnonzero(np.diff(np.floor(travelled / chord)) > 0) + 1
    at = np.unique(np.concatenate([[0], at, [len(q) - 1]]))
    step = np.diff(q[at], axis=0)
    long = np.linalg.norm(step, axis=1) > chord / 4  # of a path that goes to and fro within a chord nothing is seen
    at, step = np.append(at[0], at[1:][long]), step[long]
    step = step / np.linalg.norm(step, axis=1, keepdims=True)
    turn = 2.0 * np.arctan2(np.linalg.norm(step[1:] - step[:-1], axis=1), np.linalg.norm(step[1:] + step[:-1], axis=1))
    found: list[int] = []
    for k in np.flatnonzero(turn > _SHARP):
        low, high = int(at[k]), int(at[k + 2])
        rows = q[low : high + 1]
        away = np.linalg.norm(rows - q[low], axis=1) + np.linalg.norm(rows - q[high], axis=1)
        row = low + int(np.argmax(away))
        if 0 < row < len(q) - 1 and (not found or travelled[row] - travelled[found[-1]] > chord):
            found.append(row)
    return np.array(found, dtype=np.intp)


def _step(part: _Part, table: JointTable, arm: Arm, index: int, name: str, tolerance: float) -> Step:
    rows = f"rows {part.first + 1} to {part.last + 1}"
    step = Step(
        index=index,
        motion="taught" if part.moves else "wait",
        where=f"{name}: {rows}",
        name=rows,
        wait=part.seconds,
        tool=arm.tool.name,
        payload=arm.payload.name if arm.payload is not None else None,
    )
    if not part.moves:
        return step
    points = np.array(table.position[part.first : part.last + 1])
    points = points[np.append(True, np.abs(np.diff(points, axis=0)).max(axis=1) > 0.0)]
    points.flags.writeable = False
    goal = np.array(table.position[part.last])
    goal.flags.writeable = False
    return replace(step, target=Target(joints=goal), taught=Taught(rows, points, tolerance))


def _marked(steps: list[Step], parts: list[_Part], table: JointTable) -> list[Step]:
    """The steps with the marks of the table, each at the stop nearest to it; what that changes is noted."""
    ends = np.array([part.last for part in parts])
    for mark in table.marks:
        k = int(np.argmin(np.abs(ends - mark.row)))
        if steps[k].mark is None:
            steps[k] = replace(steps[k], mark=mark.name)
            if abs(int(ends[k]) - mark.row) <= _NEAR_A_STOP:
                continue
            note = f'mark "{mark.name}" of row {mark.row + 1} is given at the stop of row {ends[k] + 1}'
        else:
            note = f'mark "{mark.name}" of row {mark.row + 1} is left out'
        moving = [i for i in range(len(steps)) if steps[i].taught is not None]
        i = min(moving, key=lambda i: abs(i - k))
        taught = steps[i].taught
        assert taught is not None
        joined = f"{taught.note}; {note}" if taught.note else note
        steps[i] = replace(steps[i], taught=replace(taught, note=joined))
    return steps
