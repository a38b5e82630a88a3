"""Where the arm flies by and where it stops: corner sizes from what is asked, room on the steps, and what the region holds."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pathplan.arm.kinematics import joint_derivatives
from pathplan.errors import InputError
from pathplan.path.cartesian import CartesianPath, Finding
from pathplan.path.corners import REVERSAL, fit_into_steps
from pathplan.path.geometry import Index, poses_of, spatial_twists
from pathplan.path.joint import Array
from pathplan.path.motions import Motions
from pathplan.path.newton import joint_weights, solve_near
from pathplan.path.spans import Spans
from pathplan.task.model import Blend, Step
from pathplan.units import format_quantity

__all__ = ["Junction", "Layout", "lay_out"]

_STRAIGHT = 1e-6  # rad between tangents that count as one
_SAMPLES = 33  # of a corner or a step, where something is measured along it
_ROUNDS = 40  # of shrinking a corner until its region holds it
_REGION_SLACK = 1e-6  # share of the region that rounding may take


@dataclass
class Junction:
    """Two motions that follow one another: what was asked between them and what becomes of it."""

    motion: int  # the incoming one
    step: Step  # of the incoming motion
    blend: Blend | None  # asked; None where none is, or where it can't be kept
    reason: str  # why the arm stops, "" for a fly-by point
    size: float = 0.0  # delta in use
    asked: str = ""  # as written
    notes: list[str] = field(default_factory=list)

    def stop(self, reason: str, note: str = "") -> None:
        self.blend, self.reason, self.size = None, reason, 0.0
        if note:
            self.notes.append(note)


@dataclass(frozen=True)
class Layout:
    """The spans of a whole task in order, and its junctions. `stretch` (S,): number of the stop-to-stop stretch of each span."""

    spans: Spans
    stretch: Index
    junctions: tuple[Junction, ...]
    used: Array  # (M - 1,) the sizes of the corners in the unit they were asked in (m, rad, share); 0 for a stop
    findings: tuple[Finding, ...]


def lay_out(path: CartesianPath, motions: Motions) -> Layout:
    """Corners and spans of a task. Raises InputError for a blend that can't mean anything where it stands."""
    junctions = [_junction(path, motions, j) for j in range(len(motions) - 1)]
    _stop_at_reversals(motions, junctions)
    _note_stops_that_a_blend_would_save(motions, junctions)
    asked = _asked_sizes(motions, junctions)
    for _ in range(_ROUNDS):
        delta = fit_into_steps(asked, motions.length) if len(asked) else asked
        spans, _ = _spans(motions, delta)
        if not _adjust(spans, junctions, delta, asked):
            break
    else:
        worst = next(j for j, junction in enumerate(junctions) if junction.blend is not None)
        raise InputError(f"{junctions[worst].step.where}: blend: the corner does not come to lie within its region")
    used = _used_sizes(motions, junctions, delta)
    findings = []
    for j, junction in enumerate(junctions):
        junction.size = float(delta[j])
        if junction.blend is not None and used[j] < junction.blend.value * (1 - 1e-6):
            shrunk = format_quantity(float(used[j]), _dimension(junction.blend))
            junction.notes.append(f"the blend shrinks from {junction.asked} to {shrunk}")
        findings += [Finding(junction.step.index, note) for note in junction.notes]
    spans, stretch = _spans(motions, delta)
    return Layout(spans, stretch, tuple(junctions), used, tuple(findings))


def _dimension(blend: Blend) -> str:
    return {"length": "length", "angle": "angle", "share": "ratio"}[blend.kind]


def _junction(path: CartesianPath, motions: Motions, j: int) -> Junction:
    """What stands between motion j and the next: stop or fly by, as far as the task alone says."""
    steps = path.task.steps
    step, following = path.legs[motions.leg[j]].step, path.legs[motions.leg[j + 1]].step
    between = steps[step.index + 1 : following.index]
    junction = Junction(j, step, step.blend, "", asked=step.blend.text if step.blend else "")
    if any(other.motion == "wait" for other in between):
        reason = "wait"
    elif following.tool != step.tool or any(other.tool != step.tool for other in between):
        reason = "the tool changes"
    elif following.payload != step.payload or any(other.payload != step.payload for other in between):
        reason = "the payload changes"
    elif step.blend is None:
        junction.stop("no blend asked")
        return junction
    elif any(other.blend is None for other in between):
        reason = "the step without motion that follows has no blend"
    else:
        return junction
    note = "" if step.blend is None else f"the arm stops here ({reason}), so the blend {step.blend.text} has no effect"
    junction.stop(reason, note)
    return junction


def _tangents(motions: Motions, m: Index, at_end: NDArray[np.bool_], joint_space: NDArray[np.bool_]) -> Array:
    """(N, max(6, n)) tangents of motions m at their end or start, in the space they are blended in, scaled without unit."""
    n = motions.arm.n
    tangents = np.zeros((len(m), max(6, n)))
    weights = joint_weights(motions.arm)
    straight = motions.segment[m] < 0
    tangents[straight, :n] = motions.direction[m[straight]] * weights
    rows = np.flatnonzero(~straight)
    if len(rows):
        s = np.where(at_end[rows], motions.length[m[rows]], 0.0)
        jets = motions.segments.jets(motions.segment[m[rows]], s)
        tool = np.hstack([jets.position[1] / motions.arm.length, jets.turning[0]])
        in_joints = joint_space[rows]
        tangents[rows[~in_joints], :6] = tool[~in_joints]
        if in_joints.any():
            q = np.where(at_end[rows[in_joints], None], motions.end[m[rows[in_joints]]], motions.start[m[rows[in_joints]]])
            derivatives, _ = joint_derivatives(motions.arm, q, spatial_twists(jets)[in_joints])
            tangents[rows[in_joints], :n] = derivatives[:, 0] * weights
    return tangents


def _turn_angles(motions: Motions, j: Index) -> Array:
    """(N,) angle between the tangents on both sides of junctions j."""
    joint_space = (motions.segment[j] < 0) | (motions.segment[j + 1] < 0)
    before = _tangents(motions, j, np.ones(len(j), dtype=bool), joint_space)
    after = _tangents(motions, j + 1, np.zeros(len(j), dtype=bool), joint_space)
    before /= np.linalg.norm(before, axis=1, keepdims=True)
    after /= np.linalg.norm(after, axis=1, keepdims=True)
    return np.asarray(2.0 * np.arctan2(np.linalg.norm(after - before, axis=1), np.linalg.norm(after + before, axis=1)))


def _stop_at_reversals(motions: Motions, junctions: list[Junction]) -> None:
    blended = [j for j, junction in enumerate(junctions) if junction.blend is not None]
    if not blended:
        return
    for j, angle in zip(blended, _turn_angles(motions, np.array(blended)), strict=True):
        if angle > np.pi - REVERSAL:
            _reverse(junctions[j])


def _reverse(junction: Junction) -> None:
    junction.stop("reversal", f"the path turns back on itself, so the arm stops here and the blend {junction.asked} is dropped")


def _note_stops_that_a_blend_would_save(motions: Motions, junctions: list[Junction]) -> None:
    """A stop point where the path runs straight on: the engineer should know that only the missing blend stops the arm."""
    idle = [j for j, junction in enumerate(junctions) if junction.reason == "no blend asked"]
    cartesian = [j for j in idle if motions.segment[j] >= 0 and motions.segment[j + 1] >= 0]
    if not cartesian:
        return
    one, two = motions.segment[cartesian], motions.segment[np.array(cartesian) + 1]
    segments = motions.segments
    bend = segments.jets(two, np.zeros(len(two))).position[2] - segments.jets(one, segments.length[one]).position[2]
    bends = np.linalg.norm(bend, axis=1) > 1e-9 * motions.arm.length
    for row, (j, angle) in enumerate(zip(cartesian, _turn_angles(motions, np.array(cartesian)), strict=True)):
        if angle > _STRAIGHT:
            continue
        why = "the path runs straight on, but the arm stops here"
        if bends[row]:
            junctions[j].reason = "curvature jumps"
            why = "the path runs on tangentially but its curvature jumps, so the arm stops here"
        junctions[j].notes.append(f"{why}; a blend would let it fly by")


def _asked_sizes(motions: Motions, junctions: list[Junction]) -> Array:
    """(M - 1,) delta asked by each blend, before room on the steps is looked at; 0 for stop points."""
    asked = np.zeros(len(junctions))
    sampled: list[tuple[int, int, str, float]] = []  # junction, side (0 incoming), what is measured, value
    for j, junction in enumerate(junctions):
        blend = junction.blend
        if blend is None:
            continue
        if blend.kind == "share":
            asked[j] = blend.value * min(motions.length[j], motions.length[j + 1])
            continue
        _check_length(motions, junction)
        sides = [_size_on_side(motions, j, side, blend) for side in (0, 1)]
        if sides == [np.inf, np.inf]:
            what, hint = ("moves the tool centre point", "an angle") if blend.kind == "length" else ("turns anything", "a length")
            raise InputError(f"{junction.step.where}: blend {blend.text}: neither step here {what}, expected {hint}")
        asked[j] = min(size for size in sides if size is not None) if sides != [None, None] else np.inf
        sampled += [(j, side, blend.kind, blend.value) for side in (0, 1) if sides[side] is None]
    for (j, *_), size in zip(sampled, _sampled_sizes(motions, sampled), strict=True):
        asked[j] = min(asked[j], size)
    return asked


def _check_length(motions: Motions, junction: Junction) -> None:
    blend, segment = junction.blend, motions.segment[junction.motion]
    if blend is None or blend.kind != "length" or segment < 0:
        return
    own = float(motions.segments.path_length[segment])
    if 0.0 < own * (1 + 1e-9) < blend.value:
        raise InputError(
            f"{junction.step.where}: blend {blend.text} is longer than its {junction.step.motion} "
            f"of {format_quantity(own, 'length')}",
            data={"step": junction.step.index, "blend": blend.value, "length": own},
        )


def _size_on_side(motions: Motions, j: int, side: int, blend: Blend) -> float | None:
    """delta at which one side reaches a length or an angle; inf if it has none of it, None if it must be sampled."""
    m = j + side
    segment = motions.segment[m]
    pair = motions.segment[j] >= 0 and motions.segment[j + 1] >= 0
    if segment >= 0:
        if blend.kind == "angle" and not pair:
            return None
        extent = motions.segments.path_length[segment] if blend.kind == "length" else motions.segments.angle[segment]
        return float(blend.value / extent * motions.length[m]) if extent > 1e-12 else np.inf
    if blend.kind == "length":
        return None
    revolute = [i for i, joint in enumerate(motions.arm.joints) if joint.kind == "revolute"]
    rate = float(np.abs(motions.direction[m, revolute]).max(initial=0.0))
    return blend.value / rate if rate > 1e-12 else np.inf


def _sampled_sizes(motions: Motions, wanted: list[tuple[int, int, str, float]]) -> Array:
    """(N,) path parameter from the corner at which a measured distance first reaches its value; inf if it never does."""
    if not wanted:
        return np.zeros(0)
    j = np.array([entry[0] for entry in wanted])
    side = np.array([entry[1] for entry in wanted])
    value = np.array([entry[3] for entry in wanted])
    m = j + side
    corner = motions.end[j]
    length = motions.length[m]

    def measure(rows: Index, x: Array) -> Array:
        s = np.where(side[rows] == 0, length[rows] - x, x)
        q = motions.joint_points(m[rows], s)
        out = np.abs((q - corner[rows])[:, _revolute(motions)]).max(axis=1, initial=0.0)
        by_length = np.array([wanted[r][2] == "length" for r in rows])
        if by_length.any():
            at = m[rows[by_length]]
            apart = motions.tool_points(at, q[by_length]) - motions.tool_points(at, corner[rows[by_length]])
            out[by_length] = np.linalg.norm(apart, axis=1)
        return out

    return _first_reach(measure, length, value)


def _revolute(motions: Motions) -> list[int]:
    return [i for i, joint in enumerate(motions.arm.joints) if joint.kind == "revolute"]


def _first_reach(measure: Callable[[Index, Array], Array], length: Array, value: Array) -> Array:
    """First x in [0, length] (N,) at which measure(rows, x) reaches `value`: sampled, then sampled again between two samples."""
    low, high = np.zeros(len(length)), length.copy()
    rows = np.arange(len(length))
    never = np.zeros(len(length), dtype=bool)
    for round_ in range(3):
        share = np.linspace(0.0, 1.0, _SAMPLES)
        x = low[:, None] + share * (high - low)[:, None]
        values = measure(np.repeat(rows, _SAMPLES), x.ravel()).reshape(x.shape)
        over = values >= value[:, None]
        first = np.maximum(over.argmax(axis=1), 1)
        if round_ == 0:
            never = ~over.any(axis=1)
        low, high = x[rows, first - 1], x[rows, first]
    # The lower bound: the corner leaves at most that far.
    return np.where(never, np.inf, low)


def _spans(motions: Motions, delta: Array) -> tuple[Spans, Index]:
    """Plain spans and corners in order, and the number of the stretch each belongs to."""
    count = len(motions)
    left = np.concatenate([[0.0], delta])  # corner at the start of each motion
    right = np.concatenate([delta, [0.0]])
    rest = motions.length - left - right
    rest[rest < 1e-12 * motions.length] = 0.0
    every = np.arange(count)
    # Two slots a motion: itself, and the corner that ends it.
    before = np.repeat(every, 2)
    after = np.full(2 * count, -1)
    after[1::2] = np.where(right > 0, every + 1, -1)
    offset, size, length = np.zeros(2 * count), np.zeros(2 * count), np.zeros(2 * count)
    offset[::2], size[1::2] = left, right
    length[::2], length[1::2] = rest, 2 * right
    number = np.repeat(np.concatenate([[0], np.cumsum(delta == 0)]), 2)
    keep = length > 0
    spans = Spans(motions, before[keep], after[keep], offset[keep], size[keep], length[keep])
    return spans, number[keep].astype(np.intp)


def _adjust(spans: Spans, junctions: list[Junction], delta: Array, asked: Array) -> bool:
    """Drop corners that nearly stand still, shrink those that leave their region; True if anything changed in `asked`."""
    corners = np.flatnonzero(spans.corner)
    if not len(corners):
        return False
    u = np.linspace(0.0, 2.0, _SAMPLES)
    i = np.repeat(corners, _SAMPLES)
    at = (spans.delta[corners][:, None] * u).ravel()
    changed = False
    slow = _slowest(spans, i, at).reshape(-1, _SAMPLES)
    excess = _excess(spans, junctions, i, at).reshape(-1, _SAMPLES).max(axis=1)
    for row, span in enumerate(corners):
        j = int(spans.before[span])
        if slow[row].min() < np.sin(REVERSAL / 2) * max(slow[row, 0], slow[row, -1]):
            _reverse(junctions[j])
            asked[j], changed = 0.0, True
        elif excess[row] > 1 + _REGION_SLACK:
            asked[j], changed = 0.99 * delta[j] / excess[row], True
    return changed


def _slowest(spans: Spans, i: Index, at: Array) -> Array:
    """(N,) size of the path's tangent, in the space it is blended in."""
    size = np.empty(len(i))
    known = spans.programmed()[i]
    if known.any():
        jets = spans.tool_jets(i[known], at[known])
        size[known] = np.hypot(
            np.linalg.norm(jets.position[1], axis=1) / spans.motions.arm.length, np.linalg.norm(jets.turning[0], axis=1)
        )
    if (~known).any():
        rows, where = i[~known], at[~known]
        rate = spans.joint_jets(rows, where)[1]
        mixed = spans.inverted()[rows]
        if mixed.any():
            q = _cartesian_part(spans, rows[mixed], where[mixed])
            twists = spatial_twists(spans.tool_jets(rows[mixed], where[mixed]))
            rate[mixed] += joint_derivatives(spans.motions.arm, q, twists)[0][:, 0]
        size[~known] = np.linalg.norm(rate * joint_weights(spans.motions.arm), axis=1)
    return size


def _cartesian_part(spans: Spans, i: Index, at: Array) -> Array:
    jets = spans.tool_jets(i, at)
    poses = poses_of(jets.position[0], jets.rotation) @ spans.tool_from_own(i)
    q, _ = solve_near(spans.motions.arm, poses, spans.guess(i, at))
    return q


def _excess(spans: Spans, junctions: list[Junction], i: Index, at: Array) -> Array:
    """(N,) distance from the corner over what its region allows, of corners in which a joint step takes part; else 0."""
    out = np.zeros(len(i))
    motions = spans.motions
    blends = [junctions[int(j)].blend for j in spans.before[i]]
    rows = np.flatnonzero(~spans.programmed()[i])
    rows = rows[[blends[r] is not None and blends[r].kind != "share" for r in rows]]  # type: ignore[union-attr]
    if not len(rows):
        return out
    k, where = i[rows], at[rows]
    q = spans.joint_jets(k, where)[0]
    mixed = spans.inverted()[k]
    if mixed.any():
        q[mixed] += _cartesian_part(spans, k[mixed], where[mixed])
    corner = motions.end[spans.before[k]]
    size = np.array([blends[r].value for r in rows])  # type: ignore[union-attr]
    by_length = np.array([blends[r].kind == "length" for r in rows])  # type: ignore[union-attr]
    turned = np.abs((q - corner)[:, _revolute(motions)]).max(axis=1, initial=0.0)
    m = spans.before[k]
    moved = np.linalg.norm(motions.tool_points(m, q) - motions.tool_points(m, corner), axis=1)
    out[rows] = np.where(by_length, moved, turned) / size
    return out


def _used_sizes(motions: Motions, junctions: list[Junction], delta: Array) -> Array:
    """(M - 1,) how far the corners reach, in the unit they were asked in: the larger of both sides."""
    used = np.zeros(len(junctions))
    for j, junction in enumerate(junctions):
        blend = junction.blend
        if blend is None:
            continue
        if blend.kind == "share":
            used[j] = delta[j] / min(motions.length[j], motions.length[j + 1])
            continue
        reach = 0.0
        for side in (0, 1):
            m = j + side
            segment = motions.segment[m]
            pair = motions.segment[j] >= 0 and motions.segment[j + 1] >= 0
            if segment >= 0 and (pair or blend.kind == "length"):
                extents = motions.segments.path_length if blend.kind == "length" else motions.segments.angle
                reach = max(reach, float(extents[segment] * delta[j] / motions.length[m]))
                continue
            x = np.linspace(0.0, delta[j], _SAMPLES)
            q = motions.joint_points(np.full(_SAMPLES, m), motions.length[m] - x if side == 0 else x)
            if blend.kind == "length":
                points = motions.tool_points(np.full(_SAMPLES, m), q)
                corner = motions.tool_points(np.array([m]), motions.end[j][None])
                reach = max(reach, float(np.linalg.norm(points - corner, axis=1).max()))
            else:
                reach = max(reach, float(np.abs((q - motions.end[j])[:, _revolute(motions)]).max(initial=0.0)))
        used[j] = min(reach, blend.value)
    return used
