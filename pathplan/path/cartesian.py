"""The programmed geometry of a task: which lines and arcs its steps are, before any joint is asked.

A `CartesianPath` follows from the task's poses alone. Only an arm with fewer than six axes has a say: a
pose that it serves within its tolerance is replaced by the pose it truly takes, so that the path in
between can be followed exactly.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from pathplan.arm import Arm, Tool
from pathplan.errors import InputError
from pathplan.path import geometry
from pathplan.path.geometry import NO_MOTION, Index, Segments
from pathplan.path.joint import Array
from pathplan.task.model import Step, Target, Task

__all__ = ["CartesianPath", "Finding", "Leg", "cartesian_path", "tool_frames", "tool_of"]

NO_MOTION_TEXT = "the arm already is at this target, the step has no motion"


@dataclass(frozen=True)
class Finding:
    """Something worth knowing about a path: the step it concerns (0-based) and one sentence."""

    step: int
    text: str

    def __str__(self) -> str:
        return f"step {self.step + 1}: {self.text}"


@dataclass(frozen=True, eq=False)
class Leg:
    """One moving step: from where to where, base_from_tool (4, 4) with the step's own tool."""

    step: Step
    kind: Literal["joint", "cartesian", "none"]  # "none": a line or arc to where the arm already is
    start: Array
    end: Array
    segment: int = -1  # row of `CartesianPath.segments`, -1 unless cartesian


@dataclass(frozen=True, eq=False)
class CartesianPath:
    """What the steps of a task ask of the tool: lines, arcs and reorientations with exact evaluators.

    `legs`: the moving steps in order; waits have none. `segments`: one row per cartesian leg. Corners are
    not part of it: where a joint step takes part in one, they depend on the joints.
    """

    task: Task
    legs: tuple[Leg, ...]
    segments: Segments
    findings: tuple[Finding, ...]

    def poses(self, legs: Index, s: Array) -> Array:
        """(N, 4, 4) programmed base_from_tool at s (N,) along cartesian legs (N,), corners left aside."""
        rows = np.array([leg.segment for leg in self.legs], dtype=np.intp)[legs]
        if np.any(rows < 0):
            raise ValueError("a joint motion has no programmed tool path")
        return self.segments.poses(rows, s)


def tool_of(arm: Arm, name: str) -> Tool:
    """The tool a step names; the arm's own where it names none. Raises InputError for one the arm does
    not know.
    """
    if name in ("", arm.tool.name):
        return arm.tool
    if name not in arm.tools:
        raise InputError(f"{arm.name}: no tool {name}, there is {', '.join(arm.tools) or 'none'}")
    return arm.tools[name]


def cartesian_path(task: Task) -> CartesianPath:
    """The programmed geometry of a task.

    Raises InputError, with every problem found in `problems`, for arcs that make no circle and
    reorientations by a half turn, naming the step.
    """
    legs: list[Leg] = []
    parts: list[Segments] = []
    findings: list[Finding] = []
    problems: list[str] = []
    targets = _target_poses(task)
    flange_from_tool = task.arm.tool.flange_from_tool
    pose = task.arm.forward(task.start)
    for step in task.steps:
        if step.motion == "wait":
            continue
        tool = tool_of(task.arm, step.tool).flange_from_tool
        if tool is not flange_from_tool:  # the same flange carries another tool now
            pose = pose @ np.linalg.solve(flange_from_tool, tool)
            flange_from_tool = tool
        if step.motion == "joint":
            end = _given(targets, step)
            legs.append(Leg(step, "joint", pose, end))
            pose = end
            continue
        try:
            segment, end = _segment(task, step, targets, pose)
        except (geometry.DegenerateArc, geometry.HalfTurn) as complaint:
            problems.append(f"{step.where}: {complaint}")
            pose = targets.get(step.index, pose)
            continue
        if segment.length[0] < NO_MOTION:
            findings.append(Finding(step.index, NO_MOTION_TEXT))
            legs.append(Leg(step, "none", pose, pose))
            continue
        legs.append(Leg(step, "cartesian", pose, end, segment=len(parts)))
        parts.append(segment)
        pose = end
    if problems:
        raise InputError(problems[0], problems=problems)
    if not legs:
        raise InputError("expected at least one step that moves, got none")
    return CartesianPath(task, tuple(legs), Segments.join(parts), tuple(findings))


def _segment(task: Task, step: Step, targets: Mapping[int, Array], start: Array) -> tuple[Segments, Array]:
    """The segment of a line or arc, and the pose it ends at."""
    size = task.arm.length
    if step.target is None:
        if step.centre is None or step.axis is None or step.angle is None:
            raise InputError(f"{step.where}: expected a target, or centre, axis and angle of an arc")
        segment = geometry.arc_about(start, step.centre, step.axis, step.angle, size, along=step.along)
        return segment, segment.poses(np.array([0]), segment.length)[0]
    end = _given(targets, step)
    if step.motion == "line":
        return geometry.line(start, end, size), end
    if step.via is None:
        raise InputError(f"{step.where}: expected a via point of the arc, or centre, axis and angle")
    return geometry.arc_through(start, step.via, end, size), end


def _given(targets: Mapping[int, Array], step: Step) -> Array:
    if step.index not in targets:
        raise InputError(f"{step.where}: expected a target")
    return targets[step.index]


def _target_poses(task: Task) -> dict[int, Array]:
    """base_from_tool (4, 4) of every target, with the tool of its step, by step index."""
    own = task.arm.tool.flange_from_tool
    poses: dict[int, Array] = {}
    asked: list[int] = []  # those given as poses
    for step in task.steps:
        target = step.target
        if target is None:
            continue
        if target.joints is not None:
            tool = tool_of(task.arm, step.tool).flange_from_tool
            poses[step.index] = task.arm.forward(target.joints) @ np.linalg.solve(own, tool)
            continue
        carried = _carried_by(task, target)
        if carried:
            raise InputError(f"{step.where}: frame {target.frame} turns with joint {carried}, expected a frame at rest")
        poses[step.index] = task.pose(target)
        asked.append(step.index)
    if task.arm.n < 6 and asked:
        steps = {step.index: step for step in task.steps}
        swap = np.array([np.linalg.solve(tool_of(task.arm, steps[i].tool).flange_from_tool, own) for i in asked])
        branches = task.arm.inverse_batch(np.array([poses[i] for i in asked]) @ swap)
        best = np.argmax(branches.valid, axis=1)
        served = task.arm.forward(branches.q[np.arange(len(asked)), best]) @ np.linalg.inv(swap)
        # What is not served is refused later, where the branches are chosen and the reason is known.
        poses |= {i: served[row] for row, i in enumerate(asked) if branches.valid[row, best[row]]}
    return poses


def _carried_by(task: Task, target: Target) -> str | None:
    """The joint that carries a target's frame, None if the frame rests."""
    name = target.frame
    while name != "base":
        frame = task.frames[name]
        if frame.joint is not None:
            return frame.joint
        name = frame.parent
    return None


def tool_frames(path: CartesianPath) -> Array:
    """(m, 4, 4) tool_from_own of each leg: from the leg's tool to the tool that the task's arm itself
    carries.

    The whole path is followed with one arm; a pose of another tool is first turned into the pose its own
    tool then has.
    """
    own = path.task.arm.tool.flange_from_tool
    frames: dict[str, Array] = {}
    rows = []
    for leg in path.legs:
        name = leg.step.tool
        if name not in frames:
            tool = tool_of(path.task.arm, name)
            same = tool is path.task.arm.tool
            swap = np.eye(4) if same else np.linalg.solve(tool.flange_from_tool, own)
            frames[name] = np.asarray(swap, dtype=float)
        rows.append(frames[name])
    return np.array(rows)
