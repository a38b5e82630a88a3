"""From a task to its plan: path, timing, table and audit in one value."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property, partial
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError, LimitError
from pathplan.table import JointTable, Mark, tick_times
from pathplan.task.model import Task

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.auditing import Audit, Evidence
    from pathplan.auditing.passes import Pass
    from pathplan.path.taskpath import Stretch, TaskPath
    from pathplan.savings import Saving
    from pathplan.timeline import Part
    from pathplan.timing.clock import Clock
    from pathplan.timing.motion import Motion
    from pathplan.timing.stretch import StretchTiming
    from pathplan.timing.torque import TorqueLimits

Array = NDArray[np.float64]
Progress = Callable[[str, int, int], None]  # what is being done, how many are done, of how many

_CHUNK = 16384
_NO_LIMIT = 1e6  # a row without a limit of some kind gets this many times the arm's largest


@dataclass(frozen=True, eq=False)
class Plan:
    """A planned task. Made by `plan`; everything SI.

    `timings` are the near time-optimal timings of the stretches in order, at the task's pace, not rounded to ticks;
    `bounds` (S,) what no motion along the same stretches under the same limits can beat, at full pace.
    """

    task: Task
    path: TaskPath
    timings: tuple[StretchTiming, ...]
    bounds: Array
    parts: tuple[Part, ...] = field(repr=False)

    @property
    def ticks(self) -> int:
        """Number of cycles from the first row to the last."""
        return self.parts[-1].last if self.parts else 0

    @property
    def duration(self) -> float:
        """s from the first row to the last, waits included, in whole ticks."""
        return float(tick_times(self.ticks, self.task.cycle))

    @property
    def motion_time(self) -> float:
        """s in motion, not rounded to ticks."""
        return float(sum(timing.duration for timing in self.timings))

    @property
    def waiting_time(self) -> float:
        """s of waits, in whole ticks."""
        ticks = sum(part.last - part.first for part in self.parts if part.wait is not None)
        return float(tick_times(ticks, self.task.cycle))

    @property
    def bound(self) -> float:
        """s: no motion along this path under these limits is faster, waits included. See `pathplan.timing.bound`."""
        return float(self.bounds.sum()) + self.waiting_time

    @property
    def arm(self) -> Arm:
        """The arm as it starts."""
        return self.task.arm

    @cached_property
    def marks(self) -> tuple[Mark, ...]:
        """Named instants, on ticks."""
        from pathplan.timeline import marks_of

        return marks_of(self.parts, [step.mark for step in self.task.steps], self.task.cycle)

    @cached_property
    def meta(self) -> dict[str, Any]:
        """What the table's header says of where it comes from."""
        task = self.task
        return {
            "arm": task.arm.name,
            "arm_file": task.arm.file.name if task.arm.file is not None else "",
            "task": task.title,
            "task_file": task.file.name if task.file is not None else "",
            "tool": task.arm.tool.name,
            "payload": task.arm.payload.name if task.arm.payload is not None else "",
            "versions": versions(torque=task.arm.links is not None),
            "sources": {**task.arm.sources, **task.sources},
            "pace": task.pace,
        }

    @cached_property
    def table(self) -> JointTable:
        """The whole joint table. For hours of motion use `rows`."""
        return self._rows(np.arange(self.ticks + 1))

    def rows(self, chunk: int = _CHUNK) -> Iterator[JointTable]:
        """The table in pieces of at most `chunk` rows, evaluated as they are asked for."""
        if chunk < 1:
            raise InputError(f"rows: expected a positive number of rows a chunk, got {chunk}")
        for first in range(0, self.ticks + 1, chunk):
            yield self._rows(np.arange(first, min(first + chunk, self.ticks + 1)))

    @cached_property
    def audit(self) -> Audit:
        """The audit of the whole table with this plan behind it."""
        return self._judged(_silent)

    def judge(self, *, progress: Progress | None = None, jobs: int = 1) -> Audit:
        """The `audit`, telling how far it has come, found by up to `jobs` processes."""
        from pathplan.evidence import gather_evidence

        if "audit" not in self.__dict__:
            say = progress or _silent
            self.__dict__["evidence"] = gather_evidence(self, say, jobs)
            self.__dict__["audit"] = self._judged(say)
        return self.audit

    def _judged(self, say: Progress) -> Audit:
        from pathplan.auditing import audit

        table = self.__dict__.get("table")
        return audit(self._told(say) if table is None else table, self.task.arm, plan=self)

    def _told(self, say: Progress) -> Iterator[JointTable]:
        """The rows as the audit takes them, which is the second half of its work."""
        done, total = 0, self.ticks + 1
        for piece in self.rows():
            say("audit", total + done, 2 * total)
            yield piece
            done += len(piece)

    @cached_property
    def passes(self) -> tuple[Pass, ...]:
        """Where the tool path comes near a singularity, and what that costs: see `pathplan.passing`."""
        from pathplan.passing import passes_of

        return passes_of(self.parts, self.task.cycle)

    def savings(self, *, top: int = 5) -> tuple[Saving, ...]:
        """What would buy time: see `pathplan.savings.find_savings`. Times again what every change concerns."""
        from pathplan.savings import find_savings

        return find_savings(self, top=top)

    def _repr_html_(self) -> str:
        """For notebooks: a summary and a picture."""
        from pathplan.report.notebook import plan_html

        return plan_html(self)

    def _rows(self, ticks: NDArray[np.int64]) -> JointTable:
        from pathplan.path.tool_motion import tool_derivatives
        from pathplan.timeline import evaluate, in_parts

        arm, count = self.task.arm, len(ticks)
        n = len(arm.joints)
        columns = np.empty((4, count, n))
        step, pose, speed = np.empty(count, dtype=np.int64), np.empty((count, 4, 4)), np.empty(count)
        torque = np.empty((count, n)) if arm.links is not None else None

        def visit(part: Part, rows: NDArray[np.intp], local: NDArray[np.int64]) -> None:
            values = evaluate(part, np.asarray(tick_times(local, self.task.cycle)), n)
            carrying = self.carrying(part)
            q, qd, qdd = values.position, values.velocity, values.acceleration
            columns[:, rows] = q, qd, qdd, values.jerk
            step[rows] = values.step
            pose[rows] = carrying.forward(q)
            speed[rows] = np.linalg.norm(tool_derivatives(carrying, q, qd, qdd)[0], axis=1)
            if torque is not None:
                torque[rows] = carrying.torque(q, qd, qdd)

        in_parts(self.parts, ticks, visit)
        return JointTable(
            np.asarray(tick_times(ticks, self.task.cycle)),
            columns[0],
            columns[1],
            columns[2],
            columns[3],
            torque=torque,
            step=step,
            pose=pose,
            tool_speed=speed,
            joint_names=tuple(joint.name for joint in arm.joints),
            joint_kinds=tuple(joint.kind for joint in arm.joints),
            cycle=self.task.cycle,
            marks=self.marks,
            meta=self.meta,
        )

    @cached_property
    def evidence(self) -> Evidence:
        """Path deviation at the rows and midway between them, and the trajectory's peaks 20 times denser."""
        from pathplan.evidence import gather_evidence

        return gather_evidence(self, _silent, 1)

    @cached_property
    def _arms(self) -> dict[tuple[str, str | None], Arm]:
        """The arm by tool and payload, as the stretches carry them."""
        return {load_of(stretch.arm): stretch.arm for stretch in self.path.stretches}

    def carrying(self, part: Part) -> Arm:
        """The arm with what it carries in a part; in a wait, what the waiting step says."""
        from pathplan.path.cartesian import tool_of

        if part.stretch is not None:
            return part.stretch.arm
        assert part.wait is not None
        step = self.task.steps[part.wait.step]
        tool = tool_of(self.task.arm, step.tool)
        load = (tool.name, step.payload)
        if load == load_of(self.task.arm):
            return self.task.arm
        if load not in self._arms:
            self._arms[load] = self.task.arm.equipped(tool=tool, payload=step.payload)
        return self._arms[load]


def plan(task: Task, *, progress: Progress | None = None, jobs: int = 1) -> Plan:
    """Plan a task: path, branches, near time-optimal timing, rows on the controller's cycle.

    Parameters
    ----------
    task : Task
        As `load_task` gives it. `task.speed` and `task.turning_speed` cap the tool everywhere, `task.pace` slows the
        whole trajectory.
    progress
        Called with what is being done, how many parts of it are done, and of how many.
    jobs
        Processes that may time stretches at once; the plan is the same with any number. They are forked, so leave
        it at one in a process with threads of its own that compute.

    Raises
    ------
    UnreachableError
        A pose can't be reached or a step not followed: step, share, pose, joint or singularity.
    LimitError, InputError
        The task can't be planned as it stands; the message says which step and why.

    Notes
    -----
    Limits of velocity, acceleration, jerk and torque, and caps on the tool, are planned for; continuous torque is
    audited.
    """
    from pathplan.timeline import lay_on_ticks
    from pathplan.timing.solve import BATCH
    from pathplan.timing.stretch import StretchTiming
    from pathplan.workers import work_through

    if not 0 < task.pace <= 1:
        raise InputError(f"pace: expected more than 0 and at most 1, got {task.pace}")
    say = progress or _silent
    path, motions = follow_and_hold(task, say)
    borders = np.linspace(0, len(motions), -(-len(motions) // BATCH) + 1).round().astype(int)
    batches = [motions[low:high] for low, high in pairwise(borders)]
    say("timing", 0, len(motions))
    timed = work_through(_timed, batches, jobs, lambda done: say("timing", int(borders[done]), len(motions)))
    parts = [found for batch in timed for found in batch]
    timings = [
        StretchTiming(motion, clock, tau, b, slope)
        for motion, (clock, tau, b, slope, _) in zip(motions, parts, strict=True)
    ]
    bounds = np.array([found[-1] for found in parts], dtype=np.float64)
    paced = tuple(timing if task.pace == 1 else timing.slowed(task.pace) for timing in timings)
    return Plan(task, path, paced, bounds, lay_on_ticks(path.sequence, paced, task.start, task.cycle))


def _timed(motions: Sequence[Motion]) -> list[tuple[Clock, Array, Array, Array, float]]:
    """Clock, nodes, values and slopes of each timing, and its bound: all of it but the motion, which needs no copy."""
    from pathplan.timing.batch import time_batch

    return [
        (one.timing.clock, one.timing.tau, one.timing.b, one.timing.slope, one.bound) for one in time_batch(motions)
    ]


def _silent(what: str, done: int, total: int) -> None:
    """No progress is told."""


def follow_and_hold(task: Task, progress: Progress | None = None) -> tuple[TaskPath, list[Motion]]:
    """The path of a task and what limits its stretches. Raises as `plan` does, all but what timing may."""
    from pathplan.path import follow_task

    path = follow_task(task, progress)
    motions = [motion_of(stretch) for stretch in path.stretches]
    for stretch, motion in zip(path.stretches, motions, strict=True):
        _check_held(task, stretch, motion)
    return path, motions


def _check_held(task: Task, stretch: Stretch, motion: Motion) -> None:
    """Refuse a stretch on which some joint has no torque left to move with."""
    from pathplan.timeline import step_at
    from pathplan.units import format_quantity

    unheld = motion.unheld()
    if unheld is None:
        return
    step = task.steps[int(step_at(stretch, np.array([unheld.s]))[0])]
    joint = task.arm.joints[unheld.joint]
    dimension = "torque" if joint.kind == "revolute" else "force"
    needed, limit = (format_quantity(abs(value), dimension) for value in (unheld.needed, unheld.limit))
    what = "to move slowly" if unheld.moving else "just to hold the pose"
    raise LimitError(
        f"{step.where}: joint {joint.name} needs {needed} {what} on this step, and its peak torque is {limit}",
        data={
            "step": step.index,
            "joint": joint.name,
            "quantity": "torque",
            "value": unheld.needed,
            "limit": unheld.limit,
        },
    )


def motion_of(stretch: Stretch) -> Motion:
    """What limits a stretch: the arm's limit rows, its torque, and the caps on the tool."""
    from pathplan.path.tool_motion import tool_derivatives, tool_turning
    from pathplan.timing.motion import Cap, Motion

    limits = stretch.arm.limits
    used = [np.isfinite(rows).any(axis=1) for rows in (limits.velocity, limits.acceleration, limits.jerk)]
    kept = np.any(used, axis=0)
    velocity, acceleration, jerk = (_finite(rows[kept]) for rows in (limits.velocity, limits.acceleration, limits.jerk))
    caps = tuple(Cap(*cap) for cap in stretch.caps if any(value is not None for value in cap[2:5]))
    tool, turning = partial(tool_derivatives, stretch.arm), partial(tool_turning, stretch.arm)
    torque = torque_limits(stretch.arm)
    return Motion(stretch.path, limits.matrix[kept], velocity, acceleration, jerk, caps, tool, torque, turning)


def torque_limits(arm: Arm) -> TorqueLimits | None:
    """The arm's torque limits for the timing; None without link masses or without any limit."""
    from pathplan.arm.path_torque import path_torque
    from pathplan.timing.torque import TorqueLimits

    n = len(arm.joints)
    peak = arm.limits.torque[:n]
    if arm.links is None or not np.isfinite(peak).any():
        return None
    corner, fall = np.full(n, np.inf), np.zeros(n)
    for k, joint in enumerate(arm.joints):
        if joint.torque is not None and joint.torque_corner is not None and joint.torque_at_velocity is not None:
            corner[k] = joint.torque_corner
            fall[k] = (joint.torque - joint.torque_at_velocity) / (joint.velocity - joint.torque_corner)
    return TorqueLimits(partial(path_torque, arm), peak, corner, fall)


def load_of(arm: Arm) -> tuple[str, str | None]:
    """The tool and the payload that an arm carries, by name."""
    return arm.tool.name, arm.payload.name if arm.payload is not None else None


def _finite(rows: Array) -> Array:
    """Limits (R, 2) with the missing ones out of the way but finite."""
    far = _NO_LIMIT * np.abs(rows[np.isfinite(rows)]).max(initial=1.0)
    return np.clip(rows, -far, far)


def versions(*, torque: bool = False) -> dict[str, str]:
    """Versions of what computes a plan, for headers and reports."""
    from importlib.metadata import version

    names = ["numpy", "scipy"] + (["roboticstoolbox-python"] if torque else [])
    return {"pathplan": _own_version(), **{name: version(name) for name in names}}


def _own_version() -> str:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("pathplan")
    except PackageNotFoundError:  # run from a checkout that was not installed
        return "uninstalled"
