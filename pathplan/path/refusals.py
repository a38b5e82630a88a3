"""Why a step can't be followed, in words and numbers: step, share, pose, joint and limit or singularity,
best branch.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.kinematics import smallest_singular_value, spatial_axes
from pathplan.arm.structure import meeting_point
from pathplan.errors import UnreachableError
from pathplan.path.cartesian import CartesianPath, Leg
from pathplan.path.geometry import Index
from pathplan.path.joint import Array
from pathplan.path.states import LIMIT_SLACK, States, judged_rows
from pathplan.path.tracking import Tracks
from pathplan.units import format_quantity, joint_dimension

if TYPE_CHECKING:
    from pathplan.path.choice import Routes

__all__ = ["limit_text", "no_branch_follows", "no_state_asked", "place_text", "singular_kind", "singularity"]


def place_text(pose: Array) -> str:
    """A pose (4, 4) as people read it: mm, and deg of rpy about fixed x, y, z."""
    r = pose[:3, :3]
    pitch = np.arctan2(-r[2, 0], np.hypot(r[0, 0], r[1, 0]))
    if np.hypot(r[0, 0], r[1, 0]) > 1e-9:
        roll, yaw = np.arctan2(r[2, 1], r[2, 2]), np.arctan2(r[1, 0], r[0, 0])
    else:  # x points straight up or down: only the difference of roll and yaw is defined
        roll, yaw = 0.0, np.arctan2(-r[0, 1], r[1, 1])
    xyz = " ".join(f"{round(float(v) * 1e3, 1) + 0.0:.1f}" for v in pose[:3, 3])
    rpy = " ".join(f"{round(float(np.rad2deg(v)), 1) + 0.0:.1f}" for v in (roll, pitch, yaw))
    return f"xyz {xyz} mm, rpy {rpy} deg"


def limit_text(arm: Arm, row: int, side: int) -> str:
    """A position limit in words; `side` 0 low, 1 high."""
    limits = arm.limits
    kinds = {arm.joints[i].kind for i in np.flatnonzero(limits.matrix[row])}
    dimension = joint_dimension(kinds.pop(), "position") if len(kinds) == 1 else "number"
    limit = format_quantity(float(limits.position[row, side]), dimension)
    return f"joint {limits.names[row]} meets its limit {limit}"


def singular_kind(arm: Arm, q: Array) -> str:
    """Which singularity is nearest at q (n,): "wrist", "elbow" or "shoulder"; "singular" where the
    structure has no such names.
    """
    if arm.structure == "scara":
        return "elbow"
    if arm.structure != "spherical wrist":
        return "singular"
    columns, _ = spatial_axes(arm, q[None])
    axes = columns[:, 3:, 0]
    points = np.cross(axes, columns[:, :3, 0])  # the point of each axis nearest to the base origin
    centre = meeting_point(points[3:], axes[3:])
    if centre is None:  # the wrist axes are in line
        return "wrist"

    def unit_across(vector: Array) -> Array:
        vector = vector - axes[1] * float(axes[1] @ vector)
        return np.asarray(vector / max(float(np.linalg.norm(vector)), 1e-12))

    upper, lower = unit_across(points[2] - points[1]), unit_across(centre - points[2])
    distance = {
        "wrist": float(np.linalg.norm(np.cross(axes[3], axes[5]))),
        "elbow": float(np.linalg.norm(np.cross(upper, lower))),
        "shoulder": abs(float(np.cross(axes[0], centre - points[0]) @ axes[1])) / arm.length,
    }
    return min(distance, key=lambda kind: distance[kind])


def singularity(arm: Arm, q: Array) -> tuple[str, dict[str, Any]]:
    """A singularity at or near q (n,) in words, and its kind and smallest singular value."""
    kind, value = singular_kind(arm, q), float(smallest_singular_value(arm, q[None])[0])
    name = f"a {kind} singularity" if kind != "singular" else "a singularity"
    name = name.replace("a elbow", "an elbow")
    return f"{name} (smallest singular value {value:.2g})", {"kind": kind, "value": value}


def no_state_asked(leg: Leg, there: Sequence[Mapping[str, str]]) -> UnreachableError:
    """The target is reached, but not in the configuration asked."""
    step = leg.step
    asked = _words(step.configuration)
    reached = " or ".join(_words(label) for label in there)
    return UnreachableError(
        f"{step.where}: configuration: the target can't be reached with {asked}, only with {reached}",
        data={"step": step.index, "pose": leg.end, "configuration": dict(step.configuration)},
    )


def _words(label: Mapping[str, str]) -> str:
    return ", ".join(f"{part} {word}" for part, word in label.items()) or "the only branch"


def no_branch_follows(
    path: CartesianPath, leg: int, states: States, tracks: Tracks, ways: Routes, alive: Index
) -> UnreachableError:
    """The refusal of a leg that none of the states `alive` at its start can follow; the best of them is
    described.
    """
    best: tuple[float, str, dict[str, Any]] | None = None
    for state in alive:
        found = _obstacle(path, leg, states, tracks, ways, int(state))
        if best is None or found[0] > best[0]:
            best = found
    assert best is not None, "a leg is only judged from states that were reached"
    share, reason, data = best
    step = path.legs[leg].step
    who = "the only branch" if len(alive) == 1 else f"the best of {len(alive)} branches"
    label = data.pop("label")
    who += f" ({label})" if label else ""
    text = (
        f"{step.where}: no branch can follow this {step.motion}: {who} gets to {share * 100:.1f} % of it, "
        f"{place_text(data['pose'])}, where {reason}"
    )
    return UnreachableError(text, data={"step": step.index, "share": share, **data})


def _obstacle(
    path: CartesianPath, leg: int, states: States, tracks: Tracks, ways: Routes, state: int
) -> tuple[float, str, dict[str, Any]]:
    """How far one state follows a leg (share), what stops it in words, and the numbers."""
    arm, entry = path.task.arm, path.legs[leg]
    if entry.kind != "cartesian":
        data = {"pose": entry.end, "best": states.q[state], "label": ""}
        return 0.0, "no state at its target is left", data
    k, row = entry.segment, int(ways.row[state])
    slot = int(ways.slot[row])
    data = {"best": states.q[state], "label": ""}
    if slot < 0:
        text, singular = singularity(arm, states.q[state])
        return 0.0, f"it starts in {text}", {**data, "pose": entry.start, "singular": singular}
    part = slice(int(tracks.first[k]), int(tracks.last[k]) + 1)
    s, ok, reached = tracks.s[part], tracks.ok[part, slot], tracks.reached[part, slot]
    q = tracks.q[part, slot] + ways.turns[row]
    labels = arm.inverse_batch(entry.start[None]).labels if arm.structure != "general" else ()
    data["label"] = _words(labels[slot]) if labels and labels[slot] else ""
    length = float(path.segments.length[k])

    def placed(at: float, configuration: Array, **more: Any) -> dict[str, Any]:
        pose = path.segments.poses(np.array([k]), np.array([at]))[0]
        return {**data, "pose": pose, "best": configuration, **more}

    bad = np.flatnonzero(~ok)
    stop = int(bad[0]) if len(bad) else len(s)
    crossing = _first_crossing(arm, s[:stop], q[:stop])
    if crossing is not None:
        at, limit_row, side, configuration = crossing
        limit = float(arm.limits.position[limit_row, side])
        more = {"joint": arm.limits.names[limit_row], "limit": limit}
        return at / length, limit_text(arm, limit_row, side), placed(at, configuration, **more)
    if stop == len(s):
        words = _words(entry.step.configuration) if entry.step.configuration else "the joint vector asked"
        return 1.0, f"it does not arrive with {words}", placed(length, q[-1])
    before = max(stop - 1, 0)
    if reached[stop]:
        text, singular = singularity(arm, q[stop if stop == 0 else _nearer(arm, q, before, stop)])
        return (
            float(s[stop]) / length,
            f"it meets {text}",
            placed(float(s[stop]), q[before], singular=singular),
        )
    at = _last_reached(path, k, slot, float(s[before]), float(s[stop]))
    return (
        at / length,
        "the line leaves the reach of the arm".replace("line", entry.step.motion),
        placed(at, q[before]),
    )


def _nearer(arm: Arm, q: Array, one: int, other: int) -> int:
    """Which of two samples is nearer to a singularity."""
    values = smallest_singular_value(arm, q[[one, other]])
    return one if values[0] < values[1] else other


def _first_crossing(arm: Arm, s: Array, q: Array) -> tuple[float, int, int, Array] | None:
    """Where a track first leaves a position limit: s (linear between samples), row of the limits, side,
    joint vector.
    """
    judged = judged_rows(arm)
    low, high = arm.limits.position[judged].T
    values = q @ arm.limits.matrix[judged].T
    beyond = np.stack([low - values, values - high], axis=2)  # (T, R, side)
    over = (beyond > LIMIT_SLACK).any(axis=(1, 2))
    if not over.any():
        return None
    t = int(np.argmax(over))
    row, side = np.unravel_index(int(np.argmax(beyond[t])), beyond[t].shape)
    where = int(judged[row])
    if t == 0:
        return float(s[0]), where, int(side), q[0]
    part = float(
        np.clip(-beyond[t - 1, row, side] / (beyond[t, row, side] - beyond[t - 1, row, side]), 0.0, 1.0)
    )
    return float(s[t - 1] + part * (s[t] - s[t - 1])), where, int(side), q[t - 1] + part * (q[t] - q[t - 1])


def _last_reached(path: CartesianPath, k: int, slot: int, inside: float, outside: float) -> float:
    """s at which a segment leaves the reach of the arm, by bisection between two samples."""
    if inside == outside:
        return inside
    arm = path.task.arm
    leg = next(leg for leg in path.legs if leg.segment == k)
    from pathplan.path.cartesian import tool_of

    swap = np.linalg.solve(tool_of(arm, leg.step.tool).flange_from_tool, arm.tool.flange_from_tool)
    for _ in range(30):
        middle = (inside + outside) / 2
        pose = path.segments.poses(np.array([k]), np.array([middle])) @ swap
        if arm.inverse_batch(pose).valid[0, slot]:
            inside = middle
        else:
            outside = middle
    return inside
