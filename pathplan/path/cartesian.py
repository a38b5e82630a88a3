"""The programmed geometry of a task: which lines and arcs its steps are, before any joint is asked.

A `CartesianPath` follows from the task's poses alone. Only an arm with fewer than six axes has a say: a
pose that it serves within its tolerance is replaced by the pose it truly takes, so that the path in
between can be followed exactly.

Tool paths on a workpiece that a joint carries are programmed in that joint's moving frame: legs have a `view`
(`pathplan.path.follower`). What the poses leave free, and what is given of it, is in `Freedom`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from pathplan.arm import Arm, Tool
from pathplan.arm.arm import BARE, NOTHING
from pathplan.errors import InputError
from pathplan.path import geometry
from pathplan.path.curve import CurveSize, curve_derivatives, curve_size
from pathplan.path.follower import Course, Follower, follower_of
from pathplan.path.freedom import Freedom, Knowledge
from pathplan.path.geometry import NO_MOTION, Index, Segments
from pathplan.path.joint import Array, JointPath
from pathplan.path.rotations import rotation_vector
from pathplan.path.taught import taught_path
from pathplan.task.curves import curve_through
from pathplan.task.model import Curve, Step, Task, Taught
from pathplan.units import format_quantity

__all__ = ["CartesianPath", "Finding", "Leg", "cartesian_path", "tool_frames", "tool_of"]

_APART = 1e-6  # rad, or arm lengths: a curve that starts further from where the tool is starts elsewhere
_ROUNDING = 1e-13  # of poses that are the same

NO_MOTION_TEXT = "the arm already is at this target, the step has no motion"


FREE_ROLL_TEXT = (
    "the turn of the tool about its own axis is free here{more}: chosen for the shortest time, and left out of the "
    "path deviation"
)


class MixedFrames(ValueError):
    """A tool path that begins in one frame and ends in another, with nobody to say how they stand; the message says
    what helps.
    """


class StartsElsewhere(ValueError):
    """A curve that does not start where the tool is; the message says how far off."""


@dataclass(frozen=True)
class Finding:
    """Something worth knowing about a path: the step it concerns (0-based) and one sentence."""

    step: int
    text: str

    def __str__(self) -> str:
        return f"step {self.step + 1}: {self.text}"


@dataclass(frozen=True, eq=False)
class Leg:
    """One moving step: from where to where, base_from_tool (4, 4) with the step's own tool.

    In place of the base the frame of `view` where a joint carries the workpiece. `twist`: rad that the tool is turned
    about its own axis along the way beside what its segment says, where its roll is free.
    """

    step: Step
    # "none": a line or arc to where the arm already is; "taught": a joint path through taught points
    kind: Literal["joint", "cartesian", "taught", "none"]
    start: Array
    end: Array
    segment: int = -1  # row of `CartesianPath.segments`, -1 unless cartesian
    view: int = 0
    twist: float = 0.0


@dataclass(frozen=True, eq=False)
class CartesianPath:
    """What the steps of a task ask of the tool: lines, arcs and reorientations with exact evaluators.

    `legs`: the moving steps in order; waits have none. `segments`: one row per cartesian leg. `taught`: the joint
    paths through taught points. Corners are not part of it: where a joint step takes part in one, they depend on the
    joints. `held` (m + 1, H): the held joints at the start and after each leg, and `course` along the segments; both
    are known once what is `free` has been chosen (None: nothing is). Segments behind those of the legs are the same
    bent within the tolerance of their steps (`pathplan.path.bending`); which is followed is chosen with the branches.
    """

    task: Task
    legs: tuple[Leg, ...]
    segments: Segments
    findings: tuple[Finding, ...]
    course: Course
    held: Array
    taught: Mapping[Taught, JointPath] = field(default_factory=dict)
    free: Freedom | None = None
    origin: Index | None = None  # (K,) of each segment the one that it bends; None: none is bent

    @property
    def follower(self) -> Follower:
        return self.course.follower

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
    if name == NOTHING:
        return BARE
    if name not in arm.tools:
        raise InputError(f"{arm.name}: no tool {name}, there is {', '.join(arm.tools) or 'none'}")
    return arm.tools[name]


def cartesian_path(task: Task) -> CartesianPath:
    """The programmed geometry of a task.

    Raises InputError, with every problem found in `problems`, for arcs that make no circle, reorientations by a
    half turn, and curves that start elsewhere than where the tool is, naming the step.
    """
    legs: list[Leg] = []
    parts: list[Segments] = []
    findings: list[Finding] = []
    problems: list[str] = []
    said: set[Curve] = set()
    taught: dict[Taught, JointPath] = {}
    sizes: dict[Curve, CurveSize] = {}
    carriers = {task.carrier(step): None for step in task.steps if step.motion != "wait"}
    follower = follower_of(task.arm, tuple(name for name in carriers if name is not None))
    targets = _target_poses(task, follower)
    flange_from_tool = task.arm.tool.flange_from_tool
    pose, view = task.arm.forward(task.start), 0
    knowledge = Knowledge(follower, task.start)
    for step in task.steps:
        if step.motion == "wait":
            continue
        tool = tool_of(task.arm, step.tool).flange_from_tool
        if tool is not flange_from_tool:  # the same flange carries another tool now
            pose = pose @ np.linalg.solve(flange_from_tool, tool)
            flange_from_tool = tool
        before, view_before = knowledge.now, view
        view = follower.view_of(task.carrier(step))
        knowledge.learn(step, view)
        if step.motion in ("joint", "taught"):
            end = _given(targets, step)
            legs.append(Leg(step, "joint" if step.taught is None else "taught", pose, end, view=view))
            if step.taught is not None and step.taught not in taught:
                taught[step.taught], note = taught_path(step.taught, task.arm)
                findings += [Finding(step.index, note)] if note else []
            pose = end
            continue
        try:
            pose = _seen(follower, pose, view_before, view, before)
            segment, end, twist = _segment(task, step, targets, pose, sizes)
        except (MixedFrames, geometry.DegenerateArc, geometry.HalfTurn, StartsElsewhere) as complaint:
            problems.append(f"{step.where}: {complaint}")
            pose = targets.get(step.index, pose)
            continue
        if step.curve is not None and step.curve.note and step.curve not in said:
            said.add(step.curve)
            findings.append(Finding(step.index, step.curve.note))
        change = knowledge.change()
        if change > 0.0 and step.curve is None:
            segment = segment.over(float(np.hypot(segment.length[0], change)))
        if segment.length[0] < NO_MOTION:
            findings.append(Finding(step.index, NO_MOTION_TEXT))
            legs.append(Leg(step, "none", pose, pose, view=view))
            knowledge.rest()
            continue
        legs.append(Leg(step, "cartesian", pose, end, segment=len(parts), view=view, twist=twist))
        parts.append(segment)
        pose = end
    if problems:
        raise InputError(problems[0], problems=problems)
    if not legs:
        raise InputError("expected at least one step that moves, got none")
    free = knowledge.freedom([leg.kind for leg in legs], [leg.step for leg in legs])
    course = Course(follower, np.array([leg.view for leg in legs if leg.segment >= 0], dtype=np.intp))
    rolling = [leg.step.index for leg in legs if leg.step.roll_free]
    if rolling:
        more = f" and in {len(rolling) - 1} more steps" if len(rolling) > 1 else ""
        findings.append(Finding(rolling[0], FREE_ROLL_TEXT.format(more=more)))
    segments, held = Segments.join(parts), np.zeros((len(legs) + 1, 0))
    return CartesianPath(task, tuple(legs), segments, tuple(findings), course, held, taught, free)


def _seen(follower: Follower, pose: Array, view: int, other: int, held: Array) -> Array:
    """A tool pose (4, 4) of one view in another, with the held joints at (H,). Raises MixedFrames where that is not
    known.
    """
    if view == other:
        return pose
    q = np.full(follower.arm.n, np.nan)
    q[list(follower.held)] = held
    base_from_old, base_from_new = (follower.base_from_view(v, q) for v in (view, other))
    if not (np.isfinite(base_from_old).all() and np.isfinite(base_from_new).all()):
        name = follower.carriers[(other or view) - 1]
        hint = f"expected axes = {{ {name} = ... }} in the step before it, or a joint step in its place"
        raise MixedFrames(
            f"starts in another frame than it ends in, and where joint {name} then stands is left free: {hint}"
        )
    return np.asarray(np.linalg.solve(base_from_new, base_from_old @ pose))


def _segment(
    task: Task, step: Step, targets: Mapping[int, Array], start: Array, sizes: dict[Curve, CurveSize]
) -> tuple[Segments, Array, float]:
    """The segment of a line, arc or curve, the pose it ends at, and its twist. `sizes`: of the curves so far."""
    size = task.arm.length
    if step.target is None:
        if step.centre is None or step.axis is None or step.angle is None:
            raise InputError(f"{step.where}: expected a target, or centre, axis and angle of an arc")
        segment = geometry.arc_about(start, step.centre, step.axis, step.angle, size, along=step.along)
        return segment, segment.poses(np.array([0]), segment.length)[0], 0.0
    end = _given(targets, step)
    if step.curve is not None:
        return *_along_curve(task, step, step.curve, start, sizes), 0.0
    pointed, twist = geometry.pointing(start, end) if step.roll_free else (end, 0.0)
    if step.motion == "line":
        return geometry.line(start, pointed, size), end, twist
    if step.via is None:
        raise InputError(f"{step.where}: expected a via point of the arc, or centre, axis and angle")
    return geometry.arc_through(start, step.via, pointed, size), end, twist


def _along_curve(
    task: Task, step: Step, curve: Curve, start: Array, sizes: dict[Curve, CurveSize]
) -> tuple[Segments, Array]:
    """The segment of a curve, and the pose it ends at."""
    assert step.target is not None and step.frame_from_curve is not None
    base_from_curve = task.carrier_from_frame(step.target.frame)[1] @ step.frame_from_curve
    if len(task.arm.tool_joints) < 6:
        curve = _served_curve(task, step, curve, base_from_curve)
    away = base_from_curve @ curve.pose(end=False)
    distance = float(np.linalg.norm(away[:3, 3] - start[:3, 3]))
    angle = float(np.linalg.norm(rotation_vector((away[:3, :3] @ start[:3, :3].T)[None])[0]))
    if distance > _APART * task.arm.length or angle > _APART:
        off = f"{format_quantity(distance, 'length', 3)} and {format_quantity(angle, 'angle', 3)}"
        name = step.curve.name if step.curve is not None else ""
        hint = f'expected a step to "{name}.start" before it' if name else "expected a step to its start before it"
        raise StartsElsewhere(f"the curve starts {off} from where the tool is, {hint}")
    if curve not in sizes:
        sizes[curve] = curve_size(curve)
    segment = geometry.along_curve(curve, base_from_curve, sizes[curve])
    return segment, segment.poses(np.array([0]), segment.length)[0]


def _served_curve(task: Task, step: Step, curve: Curve, base_from_curve: Array) -> Curve:
    """The curve that an arm with fewer than six axes truly takes, where every pose of it is served within tolerance."""
    inner = curve.breaks[:-1, None] + np.diff(curve.breaks)[:, None] * np.array([0.0, 0.5])
    s = np.append(inner.ravel(), curve.breaks[-1])
    points, turned, _ = curve_derivatives(curve, s, 0)
    asked = base_from_curve @ geometry.poses_of(points[0], turned)
    swap = np.linalg.solve(tool_of(task.arm, step.tool).flange_from_tool, task.arm.tool.flange_from_tool)
    branches = task.arm.inverse_batch(asked @ swap)
    best = np.argmax(branches.valid, axis=1)
    if not branches.valid[np.arange(len(s)), best].all():
        return curve  # refused where the branches are followed and the reason is known
    served = task.arm.forward(branches.q[np.arange(len(s)), best]) @ np.linalg.inv(swap)
    if np.abs(served - asked).max() <= _ROUNDING:
        return curve
    own = np.asarray(np.linalg.solve(base_from_curve, served), dtype=np.float64)
    return curve_through(own[:, :3, 3], own[:, :3, :3], task.arm.length)


def _given(targets: Mapping[int, Array], step: Step) -> Array:
    if step.index not in targets:
        raise InputError(f"{step.where}: expected a target")
    return targets[step.index]


def _target_poses(task: Task, follower: Follower) -> dict[int, Array]:
    """base_from_tool (4, 4) of every target, with the tool of its step, by step index; on a workpiece that a joint
    carries, in that joint's frame.
    """
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
        assert target.frame_from_tool is not None
        poses[step.index] = task.carrier_from_frame(target.frame)[1] @ target.frame_from_tool
        asked.append(step.index)
    if len(task.arm.tool_joints) < 6 and asked:
        steps = {step.index: step for step in task.steps}
        swap = np.array([np.linalg.solve(tool_of(task.arm, steps[i].tool).flange_from_tool, own) for i in asked])
        view = np.array([follower.view_of(task.carrier(steps[i])) for i in asked], dtype=np.intp)
        # Which components are served does not hang on where a track or a turntable stands.
        held = np.zeros((len(asked), len(follower.held)))
        q, valid = follower.branches(view, np.array([poses[i] for i in asked]) @ swap, held)
        best = np.argmax(valid, axis=1)
        served = follower.forward(view, q[np.arange(len(asked)), best]) @ np.linalg.inv(swap)
        # What is not served is refused later, where the branches are chosen and the reason is known.
        poses |= {i: served[row] for row, i in enumerate(asked) if valid[row, best[row]]}
    return poses


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
