"""Why a step can't be followed, in words and numbers: step, share, pose, joint and limit or singularity,
best branch.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.kinematics import joint_derivatives, smallest_singular_value
from pathplan.errors import UnreachableError
from pathplan.path.cartesian import CartesianPath, Leg, tool_frames
from pathplan.path.follower import Course
from pathplan.path.geometry import NO_MOTION, Index, Segments, spatial_twists
from pathplan.path.joint import Array
from pathplan.path.newton import joint_weights
from pathplan.path.singular import singularity
from pathplan.path.states import LIMIT_SLACK, SAME_STATE, States, judged_rows
from pathplan.path.tracking import Tracks, track, turns_between
from pathplan.task.model import Step
from pathplan.units import format_quantity, joint_dimension

__all__ = [
    "limit_text",
    "motion_words",
    "no_branch_follows",
    "no_state_asked",
    "not_with_held",
    "place_text",
    "roll_hint",
    "rpy_of",
]


def rpy_of(pose: Array) -> Array:
    """Turns (3,) about the fixed x, y, z that make the rotation of a pose (4, 4), rad."""
    r = pose[:3, :3]
    pitch = np.arctan2(-r[2, 0], np.hypot(r[0, 0], r[1, 0]))
    if np.hypot(r[0, 0], r[1, 0]) > 1e-9:
        roll, yaw = np.arctan2(r[2, 1], r[2, 2]), np.arctan2(r[1, 0], r[0, 0])
    else:  # x points straight up or down: only the difference of roll and yaw is defined
        roll, yaw = 0.0, np.arctan2(-r[0, 1], r[1, 1])
    return np.array([roll, pitch, yaw])


def place_text(pose: Array) -> str:
    """A pose (4, 4) as people read it: mm, and deg of rpy about fixed x, y, z."""
    xyz = " ".join(f"{round(float(v) * 1e3, 1) + 0.0:.1f}" for v in pose[:3, 3])
    rpy = " ".join(f"{round(float(np.rad2deg(v)), 1) + 0.0:.1f}" for v in rpy_of(pose))
    return f"xyz {xyz} mm, rpy {rpy} deg"


def limit_text(arm: Arm, row: int, side: int) -> str:
    """A position limit in words; `side` 0 low, 1 high."""
    limits = arm.limits
    kind = arm.limit_kinds[row]
    dimension = joint_dimension(kind, "position") if kind else "number"
    limit = format_quantity(float(limits.position[row, side]), dimension)
    return f"joint {limits.names[row]} meets its limit {limit}"


def motion_words(step: Step) -> str:
    """What a step's motion is called in a sentence."""
    return "taught path" if step.motion == "taught" else step.motion


def not_with_held(path: CartesianPath, leg: int, pose: Array) -> UnreachableError:
    """The refusal of a target that is reached, but not with the held joints where they are to stand."""
    arm, step = path.task.arm, path.legs[leg].step
    where = []
    held = path.held if path.free is None else path.free.known
    for i, value in zip(path.follower.held, held[leg + 1], strict=True):
        dimension = joint_dimension(arm.joints[i].kind, "position")
        at = f"at {format_quantity(float(value), dimension)}" if np.isfinite(value) else "wherever it may stand"
        where.append(f"{arm.joint_names[i]} {at}")
    text = f"{step.where}: no branch reaches the pose within the limits with {' and '.join(where)}"
    return UnreachableError(text, data={"step": step.index, "pose": pose})


def roll_hint(arm: Arm, step: Step, pose: Array) -> str:
    """What to say of a pose (4, 4) of the arm's own tool that five axes reach, if not with that roll; "" of others."""
    if step.roll_free or len(arm.tool_joints) != 5 or not arm.serves_pointing:
        return ""
    if not arm.with_tool_roll().inverse_batch(pose[None]).valid.any():
        return ""
    return '; roll = "free" in every step would do, if the tool may be turned anyhow about its axis'


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


def no_branch_follows(path: CartesianPath, leg: int, states: States, alive: Index) -> UnreachableError:
    """The refusal of a leg that none of the states `alive` at its start can follow; the best is described."""
    step = path.legs[leg].step
    if path.legs[leg].kind == "taught":
        return _starts_elsewhere(path.task.arm, step, states.q[alive])
    outcomes = _outcomes(path, leg, states, alive)
    best = max(outcomes, key=lambda outcome: outcome.share)
    who = "the only branch" if len(alive) == 1 else f"the best of {len(alive)} branches"
    who += f" ({best.label})" if best.label else ""
    text = (
        f"{step.where}: no branch can follow this {motion_words(step)}: {who} gets to {best.share * 100:.1f} % of it, "
        f"{place_text(best.pose)}, where {best.reason}"
    )
    data = {"step": step.index, "share": best.share, "pose": best.pose, "best": best.q, **best.more}
    return UnreachableError(text, data=data)


def _starts_elsewhere(arm: Arm, step: Step, q: Array) -> UnreachableError:
    """The refusal of a taught path that starts where the arm can't be; q (S, n) are the states it can be in."""
    assert step.taught is not None
    start = step.taught.points[0]
    best = q[np.argmin((np.abs(q - start) * joint_weights(arm)).max(axis=1))]
    j = int(np.argmax(np.abs(best - start) * joint_weights(arm)))
    joint = arm.joints[j]
    there, here = (format_quantity(float(v), joint_dimension(joint.kind, "position")) for v in (start[j], best[j]))
    text = f"the taught path starts with joint {joint.name} at {there}, the arm is at {here}: expected a step to "
    text += f'"{step.taught.name}.start" before it' if step.taught.name else "its first point before it"
    data = {"step": step.index, "joint": joint.name, "best": best, "start": start}
    return UnreachableError(f"{step.where}: {text}", data=data)


_KNOWN = 1e-9  # smallest singular value below which joint rates are noise


@dataclass(frozen=True, eq=False)
class _Outcome:
    """How far one branch follows a step, and what stops it."""

    share: float
    reason: str
    pose: Array
    q: Array
    label: str = ""
    more: Mapping[str, Any] = field(default_factory=dict)


def _outcomes(path: CartesianPath, leg: int, states: States, alive: Index) -> list[_Outcome]:
    """What becomes of each state on a leg, its branches tracked once more, this time to the bitter end."""
    arm, entry = path.task.arm, path.legs[leg]
    if entry.kind != "cartesian":
        reason = "the target has no state left that can be used"
        return [_Outcome(0.0, reason, entry.end, states.q[state]) for state in alive]
    frame = tool_frames(path)[[leg]]
    segment = path.segments.take(np.array([entry.segment]))
    course = path.course.take(np.array([entry.segment]))
    tracks = track(course, segment, frame, thorough=True)
    revolute = arm.revolute
    labels = path.follower.labels(entry.view)
    outcomes = []
    for state in alive:
        q = states.q[state]
        turns = turns_between(q - tracks.q[0], revolute)
        starts = (np.abs(q - tracks.q[0] - turns) < SAME_STATE).all(axis=1) & tracks.reached[0]
        if not starts.any():
            text, singular = singularity(arm, q, path.follower.held)
            more = {"singular": singular}
            reason = f"it starts in {text}{_limit_words(arm, tracks, q)}"
            outcomes.append(_Outcome(0.0, reason, entry.start, q, more=more))
            continue
        slot = int(np.argmax(starts))
        words = _words(labels[slot]) if slot < len(labels) and labels[slot] else ""
        outcomes.append(_outcome(path, entry, segment, frame, tracks, slot, turns[slot], words))
    return outcomes


def _limit_words(arm: Arm, tracks: Tracks, q: Array) -> str:
    """How the arm would have to stand, in place of q (n,), to start a line from a singularity; "" if not known."""
    limits = [tracks.q[0, end.slot] for end in tracks.ends if not end.last and tracks.ok[:, end.slot].all()]
    if not limits:
        return ""
    change = np.array(limits) - q
    change -= turns_between(change, arm.revolute)
    nearest = q + change[np.abs(change).max(axis=1).argmin()]
    joints = []
    for j in np.flatnonzero(np.abs(nearest - q) > SAME_STATE).tolist():
        dimension = joint_dimension(arm.joints[j].kind, "position")
        joints.append(f"{arm.joint_names[j]} at {format_quantity(round(float(nearest[j]), 8) + 0.0, dimension)}")
    return f" and goes on only with {' and '.join(joints)}"


def _outcome(
    path: CartesianPath,
    entry: Leg,
    segment: Segments,
    frame: Array,
    tracks: Tracks,
    slot: int,
    turns: Array,
    label: str,
) -> _Outcome:
    """What becomes of one track, counted from the turns its motion starts with."""
    arm = path.task.arm
    s, ok, reached, q = tracks.s, tracks.ok[:, slot], tracks.reached[:, slot], tracks.q[:, slot] + turns
    length = float(segment.length[0])

    def outcome(at: float, reason: str, configuration: Array, **more: Any) -> _Outcome:
        pose = segment.poses(np.array([0]), np.array([at]))[0]
        return _Outcome(at / length, reason, pose, configuration, label, more)

    bad = np.flatnonzero(~ok)
    stop = int(bad[0]) if len(bad) else len(s)
    crossing = _first_crossing(arm, s[:stop], q[:stop])
    if crossing is not None:
        at, row, side, configuration = crossing
        limit = float(arm.limits.position[row, side])
        return outcome(at, limit_text(arm, row, side), configuration, joint=arm.limits.names[row], limit=limit)
    if stop == len(s):
        asked = entry.step.configuration
        words = _words(asked) if asked else "the joint positions asked"
        return outcome(length, f"it arrives, but not with {words}", q[-1])
    before = max(stop - 1, 0)
    if reached[stop]:
        nearer, still = _nearer(arm, q, before, stop), path.follower.held
        text, singular = singularity(arm, q[nearer], still)
        known = singular["value"] > _KNOWN and not still and entry.view == 0
        held = _held(arm, segment, float(s[nearer]), q[nearer]) if known else None
        if held is not None:
            words, more = held
            return outcome(float(s[stop]), f"it meets {text}: {words}", q[before], singular={**singular, **more})
        return outcome(float(s[stop]), f"it meets {text}", q[before], singular=singular)
    at = _last_reached(
        path.course.take(np.array([entry.segment])), segment, frame, slot, float(s[before]), float(s[stop])
    )
    hint = roll_hint(arm, entry.step, segment.poses(np.array([0]), s[[stop]])[0] @ frame[0])
    return outcome(at, f"the {motion_words(entry.step)} leaves the reach of the arm{hint}", q[before])


def _held(arm: Arm, segment: Segments, s: float, q: Array) -> tuple[str, dict[str, Any]] | None:
    """Which joint would have to go how fast at s of a segment, q (n,): what the tool may move when it goes as fast as
    it can, in words and as data; None where the joints' limits or the segment say nothing.
    """
    jets = segment.jets(np.array([0]), np.array([s]))
    rates, _ = joint_derivatives(arm, q[None], spatial_twists(jets))
    used = arm.limits.matrix @ rates[0, 0]
    low, high = arm.limits.velocity.T
    share = np.maximum(used / high, used / low)
    row = int(np.argmax(share))
    turning = float(np.linalg.norm(jets.position[1, 0])) < NO_MOTION
    moves = float(np.linalg.norm(jets.turning[0, 0] if turning else jets.position[1, 0]))
    if not 0 < share[row] < np.inf:
        return None
    speed, name, kind = moves / float(share[row]), arm.limits.names[row], arm.limit_kinds[row]
    dimension = joint_dimension(kind, "velocity") if kind else "number"
    limit = format_quantity(float(min(-low[row], high[row])), dimension)
    words = f"joint {name} at its {limit} would hold the tool to "
    words += format_quantity(speed, "angular_speed" if turning else "speed", 2)
    return words, {"joint": name, "turning" if turning else "speed": speed}


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
    part = float(np.clip(-beyond[t - 1, row, side] / (beyond[t, row, side] - beyond[t - 1, row, side]), 0.0, 1.0))
    return float(s[t - 1] + part * (s[t] - s[t - 1])), where, int(side), q[t - 1] + part * (q[t] - q[t - 1])


def _last_reached(course: Course, segment: Segments, frame: Array, slot: int, inside: float, outside: float) -> float:
    """s at which a branch loses a segment, by bisection between two samples; a branch index must have a
    meaning.
    """
    if not course.follower.steady:
        return inside
    only = np.array([0])
    for _ in range(30):
        middle = (inside + outside) / 2
        pose = segment.poses(only, np.array([middle])) @ frame
        if course.follower.branches(course.view, pose, course.held(only, np.array([middle])))[1][0, slot]:
            inside = middle
        else:
            outside = middle
    return inside
