"""Where the arm flies by and where it stops: corner sizes from what is asked, room on the steps, and
what the region holds.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from pathplan.errors import InputError
from pathplan.path.blends import asked_sizes, distances, used_sizes
from pathplan.path.cartesian import NO_MOTION_TEXT, CartesianPath, Finding
from pathplan.path.corners import REVERSAL, fit_into_steps
from pathplan.path.geometry import Index, Mask, spatial_twists
from pathplan.path.joint import Array
from pathplan.path.motions import Motions
from pathplan.path.newton import joint_weights
from pathplan.path.spans import Spans
from pathplan.task.model import Blend, Step
from pathplan.units import format_quantity

__all__ = ["Junction", "Layout", "lay_out"]

_STRAIGHT = 1e-6  # rad between tangents that count as one
_SAMPLES = 33  # of a corner or a step, where something is measured along it
_ROUNDS = 40  # of shrinking a corner until its region holds it
_REGION_SLACK = 1e-6  # share of the region that rounding may take
_WORTH_SAYING = 1e-3  # share by which a corner falls short of what was asked


@dataclass
class Junction:
    """Two motions that follow one another: what was asked between them and what becomes of it.

    Filled in step by step while the corners are laid out, and left alone after.
    """

    step: Step  # of the incoming motion
    blend: Blend | None  # asked; None where none is, or where it can't be kept
    reason: str  # why the arm stops, "" for a fly-by point
    asked: str = ""  # as written
    notes: list[str] = field(default_factory=list)

    def stop(self, reason: str, note: str = "") -> None:
        self.blend, self.reason = None, reason
        if note:
            self.notes.append(note)


@dataclass(frozen=True)
class Layout:
    """The spans of a whole task in order, and its junctions. `stretch` (S,): number of the stop-to-stop
    stretch of each span.
    """

    spans: Spans
    stretch: Index
    junctions: tuple[Junction, ...]
    used: Array  # (M - 1,) reach of the corners in the unit each was asked in (m, rad, share); 0 for a stop
    findings: tuple[Finding, ...]


def lay_out(path: CartesianPath, motions: Motions) -> Layout:
    """Corners and spans of a task. Raises InputError for a blend that can't mean anything where it stands."""
    junctions = [_junction(path, motions, j) for j in range(len(motions) - 1)]
    _stop_at_reversals(motions, junctions)
    _note_stops_that_a_blend_would_save(motions, junctions)
    blends = [junction.blend for junction in junctions]
    asked = asked_sizes(motions, blends, [junction.step for junction in junctions])
    for _ in range(_ROUNDS):
        delta = fit_into_steps(asked, motions.length) if len(asked) else asked
        spans, stretch = _spans(motions, delta)
        changed, reach = _adjust(spans, junctions, delta, asked)
        if not changed:
            break
    else:
        step = junctions[changed[0]].step
        raise InputError(f"{step.where}: blend: the corner does not come to lie within its region")
    blends = [junction.blend for junction in junctions]
    used = used_sizes(motions, blends, delta, reach)
    moving = set(motions.leg.tolist())
    findings = [
        Finding(leg.step.index, NO_MOTION_TEXT)
        for i, leg in enumerate(path.legs)
        if leg.kind == "joint" and i not in moving
    ]
    for j, junction in enumerate(junctions):
        if junction.blend is not None and used[j] < junction.blend.value * (1 - _WORTH_SAYING):
            shrunk = format_quantity(float(used[j]), _dimension(junction.blend))
            junction.notes.append(f"the blend shrinks from {junction.asked} to {shrunk}")
        findings += [Finding(junction.step.index, note) for note in junction.notes]
    return Layout(spans, stretch, tuple(junctions), used, tuple(findings))


def _dimension(blend: Blend) -> str:
    return {"length": "length", "angle": "angle", "share": "ratio"}[blend.kind]


def _junction(path: CartesianPath, motions: Motions, j: int) -> Junction:
    """What stands between motion j and the next: stop or fly by, as far as the task alone says.

    Raises InputError for a blend between tool paths in different frames.
    """

    def view(m: int) -> int:
        return path.legs[motions.leg[m]].view

    steps = path.task.steps
    step, following = path.legs[motions.leg[j]].step, path.legs[motions.leg[j + 1]].step
    between = steps[step.index + 1 : following.index]
    junction = Junction(step, step.blend, "", asked=step.blend.text if step.blend else "")
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
        if motions.segment[j] >= 0 and motions.segment[j + 1] >= 0 and view(j) != view(j + 1):
            text = f"blend {step.blend.text}: this step and the next are programmed in different frames, of which one"
            raise InputError(f"{step.where}: {text} moves: expected a stop point, or a joint step between them")
        return junction
    note = "" if step.blend is None else f"the arm stops here ({reason}), so the blend {step.blend.text} has no effect"
    junction.stop(reason, note)
    return junction


def _tangents(motions: Motions, m: Index, at_end: Mask, joint_space: Mask) -> Array:
    """(N, max(6 + H, n)) tangents of motions m at their end or start, in the space they are blended in,
    scaled without unit: of the tool, with the H held joints, or of the joints.
    """
    n, held = motions.arm.n, list(motions.course.follower.held)
    tangents = np.zeros((len(m), max(6 + len(held), n)))
    weights = joint_weights(motions.arm)
    straight = motions.segment[m] < 0
    tangents[straight, :n] = motions.direction[m[straight]] * weights
    for path, rows in motions.on_paths(m):
        at = np.where(at_end[rows], path.length, 0.0)
        tangents[rows, :n] = path(at, 1) * weights
    rows = np.flatnonzero(~straight)
    if len(rows):
        s = np.where(at_end[rows], motions.length[m[rows]], 0.0)
        segment = motions.segment[m[rows]]
        jets = motions.segments.jets(segment, s)
        rates = motions.course.derivatives(segment, s)[1:].transpose(1, 0, 2)
        tool = np.hstack([jets.position[1] / motions.arm.length, jets.turning[0], rates[:, 0] * weights[held]])
        in_joints = joint_space[rows]
        tangents[rows[~in_joints], : tool.shape[1]] = tool[~in_joints]
        if in_joints.any():
            q = np.where(
                at_end[rows[in_joints], None],
                motions.end[m[rows[in_joints]]],
                motions.start[m[rows[in_joints]]],
            )
            twists, view = spatial_twists(jets)[in_joints], motions.course.view[segment[in_joints]]
            derivatives = motions.course.follower.derivatives(view, q, twists, rates[in_joints])
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
    junction.stop(
        "reversal",
        f"the path turns back on itself, so the arm stops here and the blend {junction.asked} is dropped",
    )


def _note_stops_that_a_blend_would_save(motions: Motions, junctions: list[Junction]) -> None:
    """A stop point where the path runs straight on: the engineer should know that only the missing blend
    stops the arm.
    """
    idle = [j for j, junction in enumerate(junctions) if junction.reason == "no blend asked"]
    view = motions.course.view
    cartesian = [
        j
        for j in idle
        if min(motions.segment[j : j + 2]) >= 0 and view[motions.segment[j]] == view[motions.segment[j + 1]]
    ]
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


def _spans(motions: Motions, delta: Array) -> tuple[Spans, Index]:
    """Plain spans and corners in order, and the number of the stretch each belongs to."""
    count = len(motions)
    left = np.concatenate([[0.0], delta])[:count]  # corner at the start of each motion
    right = np.concatenate([delta, [0.0]])[:count]
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
    number = np.repeat(np.concatenate([[0], np.cumsum(delta == 0)])[:count], 2)
    keep = length > 0
    spans = Spans(motions, before[keep], after[keep], offset[keep], size[keep], length[keep])
    return spans, number[keep].astype(np.intp)


def _adjust(spans: Spans, junctions: list[Junction], delta: Array, asked: Array) -> tuple[list[int], Array]:
    """Drop corners that nearly stand still, shrink those that leave their region.

    Returns the junctions whose `asked` was changed, and how far the corners of joint steps reach (M - 1,), in the
    unit of their blend.
    """
    reach = np.zeros(len(junctions))
    corners = np.flatnonzero(spans.corner)
    if not len(corners):
        return [], reach
    u = np.linspace(0.0, 2.0, _SAMPLES)
    i = np.repeat(corners, _SAMPLES)
    at = (spans.delta[corners][:, None] * u).ravel()
    size, q = _tangents_and_joints(spans, i, at)
    size = size.reshape(-1, _SAMPLES)
    away = _away(spans, junctions, i, q).reshape(-1, _SAMPLES).max(axis=1)
    changed = []
    for row, span in enumerate(corners):
        j = int(spans.before[span])
        blend = junctions[j].blend
        assert blend is not None
        reach[j] = away[row]
        if size[row].min() < np.sin(REVERSAL / 2) * max(size[row, 0], size[row, -1]):
            _reverse(junctions[j])
            asked[j] = 0.0
            changed.append(j)
        elif away[row] > blend.value * (1 + _REGION_SLACK):
            asked[j] = (1 - _REGION_SLACK) * delta[j] * blend.value / away[row]
            changed.append(j)
    return changed, reach


def _tangents_and_joints(spans: Spans, i: Index, at: Array) -> tuple[Array, Array]:
    """Size of the path's tangent (N,) in the space it is blended in, and joint positions (N, n) where that is joint
    space (NaN elsewhere).
    """
    arm = spans.motions.arm
    size, q = np.empty(len(i)), np.full((len(i), arm.n), np.nan)
    known = spans.programmed()[i]
    if known.any():
        jets = spans.tool_jets(i[known], at[known])
        speed = np.linalg.norm(jets.position[1], axis=1) / arm.length
        size[known] = np.hypot(speed, np.linalg.norm(jets.turning[0], axis=1))
        held = list(spans.motions.course.follower.held)
        if held:
            rates = spans.held_jets(i[known], at[known])[1] * joint_weights(arm)[held]
            size[known] = np.hypot(size[known], np.linalg.norm(rates, axis=1))
    if not known.all():
        rows, where = i[~known], at[~known]
        straight = spans.joint_jets(rows, where)
        mixed = spans.inverted()[rows]
        if mixed.any():
            i, at = rows[mixed], where[mixed]
            jets = spans.tool_jets(i, at)
            inverse, _ = spans.near(i, at, jets, spans.guess(i, at))
            straight[0, mixed] += inverse
            straight[1, mixed] += spans.derivatives(i, at, jets, inverse)[0]
        q[~known] = straight[0]
        size[~known] = np.linalg.norm(straight[1] * joint_weights(arm), axis=1)
    return size, q


def _away(spans: Spans, junctions: list[Junction], i: Index, q: Array) -> Array:
    """(N,) distance from the corner, in the unit of its blend, where a joint step takes part in it; else 0."""
    motions = spans.motions
    kind = np.array([junction.blend.kind if junction.blend else "" for junction in junctions])
    out = np.zeros(len(i))
    j = spans.before[i]
    rows = np.flatnonzero(~spans.programmed()[i] & (kind[j] != "share"))
    if len(rows):
        m = j[rows]
        out[rows] = distances(motions, m, q[rows], motions.end[m], kind[m] == "length")
    return out
