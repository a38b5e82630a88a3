"""The arm and its path in space, as numbers to draw: joints, tool, frames, path, blends. SI, in the base frame."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.path.cartesian import tool_of
from pathplan.report.gather import Picture
from pathplan.report.thinning import Array

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.planning import Plan

__all__ = ["Blended", "Frame", "Scene", "arm_links", "arm_points", "scene_of"]

MOST_POINTS = 800  # of the tool's path
LEG_POINTS = 33  # of a programmed step that is no straight line
BLEND_POINTS = 11
MOST_BLENDS = 400
MOST_LEGS = 2000


@dataclass(frozen=True, eq=False)
class Frame:
    """A workpiece frame at rest in the base frame, or carried by a joint and then stated in its moving frame."""

    name: str
    pose: Array  # (4, 4)
    joint: int = -1


@dataclass(frozen=True, eq=False)
class Blended:
    """The way of the tool (K, 3) through the corner after a step, and the point (3,) that it rounds."""

    step: int
    points: Array
    corner: Array


@dataclass(frozen=True, eq=False)
class Scene:
    """What stands in the picture.

    `path` (P, 3) is where the tool goes; `programmed` one polyline (K, 3) a step, without blends; `ends` (step, point
    (3,)) where each moving step ends. `tools` are the different tip_from_tool (4, 4), `step_tool` the index of each
    step's. `centre` (3,) and `radius` hold all of it and the arm at `shown` (A, n), configurations along the way.
    """

    arm: Arm
    path: Array
    programmed: tuple[Array, ...]
    blends: tuple[Blended, ...]
    ends: tuple[tuple[int, Array], ...]
    frames: tuple[Frame, ...]
    tools: tuple[Array, ...]
    step_tool: tuple[int, ...]
    shown: Array
    centre: Array
    radius: float


def scene_of(picture: Picture) -> Scene:
    """The scene of a motion. Programmed steps, blends, ends and frames are those of its plan, if it has one."""
    arm, plan = picture.arm, picture.plan
    path = _path(picture)
    joints = np.column_stack([picture.kept["position", i] for i in range(arm.n)])
    shown = joints[np.unique(np.linspace(0, len(joints) - 1, 60).round().astype(int))]
    tools, step_tool = _tools(arm, plan)
    programmed: tuple[Array, ...] = ()
    blends: tuple[Blended, ...] = ()
    ends: tuple[tuple[int, Array], ...] = ()
    frames: tuple[Frame, ...] = ()
    if plan is not None:
        legs = _legs(plan)
        programmed = tuple(points for _, points in legs)
        ends = tuple((step, points[-1]) for step, points in legs)
        blends = _blends(plan)
        frames = _frames(plan)
    points = [path, *programmed, *(arm_points(arm, q, tools[0])[1] for q in shown)]
    points += [frame.pose[None, :3, 3] for frame in frames if frame.joint < 0]
    corners = np.vstack([*points, np.zeros((1, 3))])
    corners = corners[np.isfinite(corners).all(axis=1)]
    low, high = corners.min(axis=0), corners.max(axis=0)
    centre = (low + high) / 2
    radius = max(float(np.linalg.norm(corners - centre, axis=1).max()), 1e-3)
    return Scene(arm, path, programmed, blends, ends, frames, tools, step_tool, shown, centre, radius)


def arm_points(arm: Arm, q: Array, tip_from_tool: Array) -> tuple[Array, Array]:
    """Moving frames base_from_joint (n, 4, 4) at q (n,), and the points base, joints, flange and tool (n + 3, 3)."""
    from pathplan.arm.kinematics import joint_motion

    frames = np.empty((arm.n, 4, 4))
    for i in range(arm.n):
        before = frames[arm.parents[i]] if arm.parents[i] >= 0 else np.eye(4)
        frames[i] = before @ arm.parent_from_joint[i] @ joint_motion(arm.joints[i].kind, arm.axes[i], float(q[i]))
    flange, tool = frames[arm.tip] @ arm.tip_from_flange, frames[arm.tip] @ tip_from_tool
    return frames, np.vstack([np.zeros((1, 3)), frames[:, :3, 3], flange[None, :3, 3], tool[None, :3, 3]])


def arm_links(arm: Arm, frames: Array, points: Array) -> list[tuple[Array, Array, float]]:
    """What carries what, as (from (3,), to (3,), width 0..1) for the frames and points of `arm_points`.

    A link leads to where its joint is mounted; a slide leads on from there to where the joint has moved, thinner. The
    arm grows thinner towards the tool.
    """
    links = []
    count = arm.n + 1
    for i in range(arm.n):
        parent = arm.parents[i]
        before = frames[parent] if parent >= 0 else np.eye(4)
        mounted = (before @ arm.parent_from_joint[i])[:3, 3]
        width = 1.0 - 0.65 * i / count
        links.append((before[:3, 3], mounted, width))
        if arm.joints[i].kind == "prismatic":
            links.append((mounted, points[i + 1], 0.6 * width))
    links.append((points[arm.tip + 1], points[-2], 1.0 - 0.65 * arm.n / count))
    links.append((points[-2], points[-1], 0.35))
    return links


def _path(picture: Picture) -> Array:
    """Where the tool goes, at so many of the kept rows and at those where the step changes."""
    points = np.column_stack([picture.kept[name, -1] for name in ("tool x", "tool y", "tool z")])
    every = np.linspace(0, len(points) - 1, min(MOST_POINTS, len(points))).round().astype(int)
    borders = np.flatnonzero(np.diff(picture.kept_step))[:MOST_POINTS]
    points = points[np.union1d(every, borders)]
    moved = np.append(True, np.abs(np.diff(points, axis=0)).max(axis=1) > 1e-6)
    return np.asarray(points[moved])


def _tools(arm: Arm, plan: Plan | None) -> tuple[tuple[Array, ...], tuple[int, ...]]:
    own = arm.tip_from_flange @ arm.tool.flange_from_tool
    if plan is None:
        return (own,), (0,)
    names, tools, index = {arm.tool.name: 0}, [own], []
    for step in plan.task.steps:
        tool = tool_of(arm, step.tool)
        if tool.name not in names:
            names[tool.name] = len(tools)
            tools.append(arm.tip_from_flange @ tool.flange_from_tool)
        index.append(names[tool.name])
    return tuple(tools), tuple(index)


def _legs(plan: Plan) -> list[tuple[int, Array]]:
    """(step, points (K, 3)) of every moving step as programmed."""
    cartesian, targets, found = plan.path.cartesian, plan.path.targets, []
    share = np.linspace(0.0, 1.0, LEG_POINTS)
    for number, leg in enumerate(cartesian.legs[:MOST_LEGS]):
        if leg.view > 0:  # programmed on a workpiece that turns: where the tool then goes
            points = _followed(plan, leg.step.index)
        elif leg.segment >= 0:
            straight = leg.step.motion == "line"
            s = (share[[0, -1]] if straight else share) * cartesian.segments.length[leg.segment]
            points = cartesian.poses(np.full(len(s), number), s)[:, :3, 3]
        elif leg.kind == "joint":
            arm = plan.arm
            tool = tool_of(arm, leg.step.tool)
            carrying = arm if tool is arm.tool else arm.equipped(tool=tool)
            q = targets[number] + share[:, None] * (targets[number + 1] - targets[number])
            points = carrying.forward(q)[:, :3, 3]
        else:
            continue
        found.append((leg.step.index, np.asarray(points)))
    return found


def _followed(plan: Plan, step: int) -> Array:
    """(K, 3) where the tool goes on a step, corners left out."""
    share = np.linspace(0.0, 1.0, LEG_POINTS)
    for stretch in plan.path.stretches:
        for part in stretch.steps:
            if part.step == step:
                q = stretch.path(part.s_from + share * (part.s_to - part.s_from))
                return np.asarray(stretch.arm.forward(q)[:, :3, 3])
    return np.zeros((0, 3))


def _blends(plan: Plan) -> tuple[Blended, ...]:
    found = []
    for corner in plan.path.corners[:MOST_BLENDS]:
        if corner.kind != "fly-by" or corner.s_to <= corner.s_from:
            continue
        stretch = plan.path.stretches[corner.stretch]
        q = stretch.path(np.linspace(corner.s_from, corner.s_to, BLEND_POINTS))
        found.append(Blended(corner.after_step, stretch.arm.forward(q)[:, :3, 3], np.asarray(corner.pose[:3, 3])))
    return tuple(found)


def _frames(plan: Plan) -> tuple[Frame, ...]:
    """The task's frames, each by its whole chain of parents."""
    task, names, found = plan.task, plan.arm.joint_names, []
    for name in task.frames:
        pose, joint, at = np.eye(4), -1, name
        while at != "base" and joint < 0:
            frame: Any = task.frames[at]
            pose = frame.parent_from_frame @ pose
            joint = names.index(frame.joint) if frame.joint is not None else -1
            at = frame.parent
        found.append(Frame(name, pose, joint))
    return tuple(found)
