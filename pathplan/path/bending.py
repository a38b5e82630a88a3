"""Where a step tolerates it, the tool is turned aside so far that its path runs through a singularity it would pass.

Near a wrist or shoulder singularity the joints turn over fast, and the nearer the path the faster; but a path that
runs right through is smooth (`pathplan.path.crossing`). So a line that passes within its orientation tolerance is bent:
at the place of nearest approach the tool takes the least rotation with which the singularity is met, its centre point
kept where it is, and a smooth bump (`pathplan.path.bends`) leads there and back. A bent segment stands beside the
programmed one, and the choice of the branches takes whichever is faster.

Bumps end before the corners at both ends of a step, and before its targets: there the tool stands as programmed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.geometry import meeting_points
from pathplan.arm.kinematics import joint_frame, smallest_singular_value, spatial_axes
from pathplan.arm.relative import ROLL
from pathplan.path.bends import Bend, Bump
from pathplan.path.cartesian import CartesianPath, Finding, tool_of
from pathplan.path.geometry import Segments
from pathplan.path.joint import Array
from pathplan.path.rotations import rotation_vector
from pathplan.path.singular import nearness
from pathplan.path.tracking import Tracks, track
from pathplan.task.model import Blend, Step

__all__ = ["least_turn", "with_bends"]

UNUSED = (
    "the tolerance is not made use of: where axes are left free, a frame turns or the roll is free for five axes, "
    "the path keeps the orientation it is programmed with"
)
_WIDTH = 0.5  # path parameter on each side of a bump: the wider, the gentler, and it needs no more angle
_GENTLE = 4.0  # and at least that over the root of its angle: joints then turn about once a rad of the path
_STEEPEST = 4.0  # a bump narrower than this many times its angle turns the tool faster than it saves
_MET = 1e-7  # rad: nearer, the path runs through as it is
_NEAREST = 1.5  # angles to a singularity are at most about this times the smallest singular value times two
_GRID = np.linspace(-1.0, 1.0, 9)
_ROUNDS = 20
_STEPS = 60
_EXACT = 1e-11
_SAME = 1e-8  # rad
_DIFFERENCE = 1e-6
_RANK = 1e-7
_DAMPING = 1e-4


def with_bends(path: CartesianPath, tracks: Tracks, frames: Array) -> tuple[CartesianPath, Tracks]:
    """The path with bent segments behind its own, and the tracks along all of them. `frames` (K, 4, 4) as `track` takes
    them.
    """
    follower = path.follower
    if follower.held or len(follower.views) > 1 or follower.arm.joint_names[-1] == ROLL:
        unused = [Finding(leg.step.index, UNUSED) for leg in path.legs if leg.segment >= 0 and _tolerance(leg.step)]
        return replace(path, findings=(*path.findings, *unused)), tracks
    origin: list[int] = []
    bends: list[Bend] = []
    for i, leg in enumerate(path.legs):
        if leg.segment >= 0 and _tolerance(leg.step):
            found = _bends(path, i, tracks)
            bends += found
            origin += [leg.segment] * len(found)
    if not bends:
        return path, tracks
    k, count = np.array(origin, dtype=np.intp), len(path.segments)
    segments = path.segments.bent(k, bends)
    every = np.concatenate([np.arange(count), k]).astype(np.intp)
    course = path.course.take(every)
    own = np.arange(count, len(every))
    more = track(course.take(own), segments.take(own), frames[k])
    return replace(path, segments=segments, course=course, origin=every), tracks.followed_by(more)


def _tolerance(step: Step) -> float:
    """rad that a step leaves to the orientation of its tool; 0 for none."""
    return step.orientation_tolerance or step.tilt


def _bends(path: CartesianPath, leg: int, tracks: Tracks) -> list[Bend]:
    """Different ways to bend the segment of a leg, one for each pair of branches that meet in its singularities."""
    entry = path.legs[leg]
    step, k = entry.step, entry.segment
    arm = path.task.arm.equipped(tool=tool_of(path.task.arm, step.tool))
    tolerance = _tolerance(step)
    segments = path.segments.take(np.array([k]))
    before = path.legs[leg - 1].step.blend if leg else None
    low, high = _kept(segments, before), float(segments.length[0]) - _kept(segments, step.blend)
    rows = np.arange(tracks.first[k], tracks.last[k] + 1)
    found: list[Bend] = []
    for slot in np.flatnonzero(tracks.reached[rows].all(axis=0)):
        q, s = tracks.q[rows, slot], tracks.s[rows]
        value = smallest_singular_value(arm, q)
        least = np.flatnonzero((value[1:-1] <= value[:-2]) & (value[1:-1] <= value[2:])) + 1
        bumps: list[Bump] = []
        for i in least[value[least] < _NEAREST * tolerance].tolist():
            bump = _bump(arm, segments, s[i - 1 : i + 2], q[i], tolerance, upright=step.tilt > 0)
            if bump is not None and low < bump.centre < high and not any(_same(bump, other) for other in bumps):
                bumps.append(bump)
        bumps = _roomy(bumps, low, high) if bumps else []
        if bumps and not any(_alike(bumps, other.bumps) for other in found):
            found.append(Bend(tuple(bumps)))
    return found


def _kept(segments: Segments, blend: Blend | None) -> float:
    """Path parameter at an end of a single segment that its corner may take."""
    length = float(segments.length[0])
    if blend is None:
        return 0.0
    if blend.kind == "share":
        return blend.value * length
    rate = float(segments.speed[0] if blend.kind == "length" else segments.turning[0])
    return min(blend.value / rate if rate > 0 else np.inf, length)


def _bump(arm: Arm, segments: Segments, between: Array, near: Array, tolerance: float, *, upright: bool) -> Bump | None:
    """The bump over the nearest approach between s[0] and s[2], near joints (n,); None where none is within tolerance.

    Its width is still that which is wanted.
    """

    def pose(at: Array) -> Array:
        return segments.poses(np.zeros(len(at), dtype=np.intp), at)

    middle, half = float(between[1]), float(between[2] - between[0])
    for _ in range(_ROUNDS):
        at = np.clip(middle + half * _GRID, between[0], between[2])
        middle, half = float(at[np.argmin(_value(arm, pose(at), near))]), half / 4
    start = _branch(arm, pose(np.array([middle])), near)[0]
    turn = least_turn(arm, pose(np.array([middle]))[0], start, upright=upright)
    angle = np.inf if turn is None else float(np.linalg.norm(turn))
    if turn is None or not _MET < angle <= tolerance:
        return None
    return Bump(middle, max(_WIDTH, _GENTLE * float(np.sqrt(angle))), turn)


def _branch(arm: Arm, poses: Array, near: Array) -> Array:
    """(N, n) the answers nearest to joints (n,), axes 4 to 6 aside: near a wrist singularity they turn over."""
    branches = arm.inverse_batch(poses)
    away = np.abs(np.angle(np.exp(1j * (branches.q - near))))[:, :, :3].max(axis=2)
    away[~np.asarray(branches.valid)] = np.inf
    return np.asarray(branches.q[np.arange(len(poses)), away.argmin(axis=1)])


def _value(arm: Arm, poses: Array, near: Array) -> Array:
    return smallest_singular_value(arm, _branch(arm, poses, near))


def _same(one: Bump, other: Bump) -> bool:
    return abs(one.centre - other.centre) < 1e-6


def _alike(bumps: list[Bump], others: tuple[Bump, ...]) -> bool:
    if len(bumps) != len(others):
        return False
    return all(_same(a, b) and np.abs(a.turn - b.turn).max() < 1e-6 for a, b in zip(bumps, others, strict=True))


def _roomy(bumps: list[Bump], low: float, high: float) -> list[Bump]:
    """The bumps no wider than there is room for, without those that would be too narrow."""
    bumps = sorted(bumps, key=lambda bump: bump.centre)
    borders = [low, *((a.centre + b.centre) / 2 for a, b in pairwise(bumps)), high]
    fitted = []
    for bump, left, right in zip(bumps, borders[:-1], borders[1:], strict=True):
        width = min(bump.width, bump.centre - left, right - bump.centre)
        if width >= _STEEPEST * bump.angle:
            fitted.append(replace(bump, width=width))
    return fitted


def least_turn(arm: Arm, pose: Array, q: Array, *, upright: bool) -> Array | None:
    """Least rotation vector (3,) in the tool frame with which the nearest wrist or shoulder singularity is met, the
    tool centre point kept at `pose` (4, 4); `upright`: only about axes square to the tool's own z. q (n,) is an answer
    at the pose.

    Least squares under equations (Gauss-Newton in the null space of the linearised equations). None where there is no
    such singularity, or no such rotation is found.
    """
    kind = nearness(arm, q).kind
    if kind not in ("wrist", "shoulder"):
        return None
    missed = _measure(arm, kind, q)
    q = q.copy()
    before = np.inf
    shifts = _DIFFERENCE * np.concatenate([np.eye(arm.n), -np.eye(arm.n)])
    for _ in range(_STEPS):
        reached, jacobian = arm.forward(q), arm.jacobian(q)
        turn = rotation_vector((pose[:3, :3].T @ reached[:3, :3])[None])[0]
        turning = reached[:3, :3].T @ jacobian[3:]
        values = missed(np.concatenate([q[None], q + shifts]))
        slope = (values[1 : arm.n + 1] - values[arm.n + 1 :]) / (2 * _DIFFERENCE)
        equations = np.vstack([jacobian[:3] / arm.length, slope, *([turning[2]] if upright else [])])
        left = np.concatenate([(pose[:3, 3] - reached[:3, 3]) / arm.length, -values[:1], [-turn[2]] if upright else []])
        u, size, vt = np.linalg.svd(equations)
        rank = int((size > _RANK * size[0]).sum())
        if rank < len(left):
            return None
        step = vt[:rank].T @ ((u.T @ left) / size)
        free = vt[rank:].T
        way = turning @ free
        damped = way.T @ way + _DAMPING * np.eye(way.shape[1])  # what hardly turns the tool is left alone
        step -= free @ np.linalg.solve(damped, way.T @ (turn + turning @ step))
        largest = float(np.abs(step).max())
        angle = float(np.linalg.norm(turn))
        if np.abs(left).max() < _EXACT and abs(angle - before) < _SAME:
            return np.asarray(turn) if nearness(arm, q).value < _MET else None
        before = angle
        q = q + step * min(1.0, 0.2 / max(largest, 1e-300))
    return None


def _measure(arm: Arm, kind: str, q: Array) -> Callable[[Array], Array]:
    """A smooth function of joints (N, n) that changes sign where the singularity is met: (N,)."""
    if kind == "wrist":

        def sine(joints: Array) -> Array:
            axes = spatial_axes(arm, joints)[0][:, 3:]
            return np.asarray(np.einsum("in,in->n", np.cross(axes[3], axes[5], axis=0), axes[4]))

        return sine
    columns = spatial_axes(arm, q[None])[0][:, :, 0]
    centre, _ = meeting_points(np.cross(columns[3:, 3:], columns[3:, :3]), columns[3:, 3:])
    local = np.linalg.solve(joint_frame(arm, 3, q), np.append(centre, 1.0))  # on axis 4, so at rest in its frame

    def radius(joints: Array) -> Array:
        columns = spatial_axes(arm, joints)[0]
        points = (joint_frame(arm, 3, joints) @ local)[:, :3].T - np.cross(columns[0, 3:], columns[0, :3], axis=0)
        return np.asarray(np.einsum("in,in->n", np.cross(columns[0, 3:], points, axis=0), columns[1, 3:]) / arm.length)

    return radius
