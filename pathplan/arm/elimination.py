"""All branches of any six revolute axes by elimination (Raghavan & Roth 1993; Manocha & Canny 1994).

The chain, with the motion it has to make, is a closed loop of six axes. One axis is left out as a line (point p,
direction l) that its own turn does not move; three joints x, y, z carry it to where two others, u and v, bring it from
the other side. p, l, p x l, p . p, p . l and (p . p) l - 2 (p . l) p, 14 equations in all (Raghavan & Roth 1993, eq.
9), are linear in the cosine and sine of each of the five angles. Those of u and v, eight products, are eliminated; six
equations in x, y, z remain. Each is taken times cos(y/2) and times sin(y/2), which makes twelve, linear in twelve
products of y and z: their determinant is zero at the sought x. As a quadratic in tan((x - x0)/2) it is an eigenvalue
problem of size 24 (Manocha & Canny 1994), at least 8 of whose values are complex: at most 16 branches.

Half-angle products in place of their tangents keep every angle, half turns included, as well conditioned as any other.
The loop can be opened at each of its six axes and read both ways, which gives twelve versions of the equations. For an
arm with parallel or meeting axes some of them are singular, or have double roots; `versions` finds out, by trying them
on poses of the arm itself, which are not.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import product

import numpy as np

from pathplan.arm.geometry import Geometry
from pathplan.arm.model import Array, Mask
from pathplan.arm.refine import apart, canonical, pose_errors, reached, refine
from pathplan.arm.subproblems import rotate, rotation_about, wrapped

__all__ = ["BRANCHES", "Version", "distinct", "eliminate", "versions"]

BRANCHES = 16  # a chain of six revolute joints has at most 16 (Raghavan & Roth 1993)
TRIALS = 48  # poses that versions are tried on
NEARLY_REAL = 0.05  # rad: imaginary part of an angle up to which its real part is tried
SAME = 1e-6  # rad: answers closer than this are one
_SAMPLES = np.array([0.0, 2.0 * np.pi / 3.0, -2.0 * np.pi / 3.0])
# Coefficients of (1, cos, sin) from values at the three samples.
_FIT = np.linalg.inv(np.stack([np.ones(3), np.cos(_SAMPLES), np.sin(_SAMPLES)], axis=1))
# (1, cos y, sin y) times cos(y/2), and times sin(y/2), in products of (cos y/2, sin y/2, cos 3y/2, sin 3y/2).
_TIMES_COS = np.array([[1.0, 0, 0, 0], [0.5, 0, 0.5, 0], [0, 0.5, 0, 0.5]])
_TIMES_SIN = np.array([[0.0, 1, 0, 0], [0, -0.5, 0, 0.5], [0.5, 0, -0.5, 0]])
_START = 0.7391  # rad: x is counted from here; no arm is likely to have a root half a turn away in all its poses


@dataclass(frozen=True)
class Version:
    """Where the loop is opened, and which way it is read."""

    backwards: bool
    shift: int  # the joints in order are shift, shift + 1, ... 5, 0, ...; the last of them is the line


def versions(g: Geometry) -> tuple[tuple[Version, ...], float]:
    """Versions that serve a chain, best first, and the part of the known branches that the first of them finds.

    Tried on poses of random joint values: known are these values, and what the versions tried find. Two versions that
    find all of them, and the same number of them, end the trial. Takes some tenths of a second, once for axes: a tool
    changes nothing.
    """
    return _tried(g.points.tobytes(), g.axes.tobytes(), g.length)


@lru_cache(maxsize=32)
def _tried(points: bytes, axes: bytes, length: float) -> tuple[tuple[Version, ...], float]:
    """The same for axes as they stand in memory, which can be remembered."""
    at, along = (np.frombuffer(part).reshape(6, 3) for part in (points, axes))
    g = Geometry(("revolute",) * 6, at, along, np.eye(4), along[0], length)
    q = np.random.default_rng(5).uniform(-np.pi, np.pi, (TRIALS, 6))
    poses = reached(g, q)
    trials: list[tuple[Version, Array, Mask]] = []
    whole: list[int] = []
    # With the loop opened at the tool everything but the pose itself is the same for all poses: those are faster.
    for shift, backwards in product(range(6), (False, True)):
        version = Version(backwards, shift)
        answers, good = distinct(g, *eliminate(g, version, poses), BRANCHES)
        trials.append((version, answers, good))
        gap = np.where(good, apart(g, answers, q[:, None]), np.inf).min(axis=1)
        if (gap < 1e-5).all() and (good.sum(axis=1) % 2 == 0).all():
            if whole and (trials[whole[0]][2].sum(axis=1) == good.sum(axis=1)).all():
                return (trials[whole[0]][0], version), 1.0
            whole.append(len(trials) - 1)
    known = np.concatenate([q[:, None], *(answers for _, answers, _ in trials)], axis=1)
    valid = np.concatenate([np.ones((TRIALS, 1), dtype=bool), *(good for _, _, good in trials)], axis=1)
    known, valid = distinct(g, known, valid, 2 * BRANCHES)
    share = []
    for _, answers, good in trials:
        gap = np.where(good[:, None], apart(g, known[:, :, None], answers[:, None]), np.inf).min(axis=2)
        share.append(float((gap[valid] < 1e-5).mean()))
    order = np.argsort(-np.array(share), kind="stable")
    return tuple(trials[k][0] for k in order), share[order[0]]


def eliminate(g: Geometry, version: Version, poses: Array) -> tuple[Array, Mask]:
    """Answers (N, 24, 6) for poses (N, 4, 4) and which of them (N, 24) stand there; not yet distinct."""
    rotation, shift = g.motion(poses)
    turn, place = rotation.transpose(2, 0, 1), shift.T
    if version.backwards:
        turn = turn.transpose(0, 2, 1)
        place = -np.einsum("nij,nj->ni", turn, place)
        g_read = g.reversed()
    else:
        g_read = g
    loop = _loop(g_read, version.shift, turn, place)
    matrices, line = _equations(loop, turn, place)
    angles = _eigenvalues(matrices)
    row, column = np.nonzero(np.abs(angles.imag) < NEARLY_REAL)
    q = np.zeros((len(row), 6))
    if len(row):
        x = angles[row, column].real
        y, z, u, v = _others(matrices[row], tuple(part[row] for part in line), x)
        order = [(version.shift + k) % 6 for k in range(6)]
        q[:, order[:5]] = np.stack([u, v, x, y, z], axis=1)
        q[:, order[5]] = _last(g_read, order[5], q, turn[row])
        if version.backwards:
            q = q[:, ::-1]
        q = canonical(g, refine(g, q, poses[row]))
    answers, good = np.zeros((*angles.shape, 6)), np.zeros(angles.shape, dtype=bool)
    distance, angle = pose_errors(reached(g, q), poses[row])
    answers[row, column], good[row, column] = q, (distance < 1e-10) & (angle < 1e-10)
    return answers, good


def _loop(g: Geometry, shift: int, turn: Array, place: Array) -> tuple[Array, Array]:
    """Points and axes (6, N or 1, 3) in the order of the version, lengths in lengths of the arm. Joints that come round
    again stand at the far side of the motion: E' = G^-1 E G.
    """
    points, axes = g.points[:, None], g.axes[:, None]
    if shift:
        back = turn.transpose(0, 2, 1)
        size = len(turn)
        moved = np.einsum("nij,knj->kni", back, points[:shift] - place)
        turned = np.einsum("nij,kj->kni", back, g.axes[:shift])
        points = np.concatenate([np.broadcast_to(points[shift:], (6 - shift, size, 3)), moved])
        axes = np.concatenate([np.broadcast_to(axes[shift:], (6 - shift, size, 3)), turned])
    return points, axes


def _about(point: Array, axis: Array, angle: float, p: Array, direction: Array) -> tuple[Array, Array]:
    """A line (point p, direction) (N, 3) turned about another line by one angle (Rodrigues)."""
    c, s = np.cos(angle), np.sin(angle)

    def turned(vector: Array) -> Array:
        along = np.sum(axis * vector, axis=-1, keepdims=True) * (1.0 - c)
        return np.asarray(c * vector + s * np.cross(axis, vector) + along * axis)

    return turned(p - point) + point, turned(direction)


def _fourteen(p: Array, direction: Array, length: float) -> Array:
    """(N, 14) the left or right sides of the equations for lines."""
    p = p / length
    square = np.sum(p * p, axis=-1, keepdims=True)
    along = np.sum(p * direction, axis=-1, keepdims=True)
    parts = [direction, p, square, along, np.cross(p, direction), square * direction - 2.0 * along * p]
    return np.concatenate(parts, axis=-1)


def _equations(loop: tuple[Array, Array], turn: Array, place: Array) -> tuple[Array, tuple[Array, ...]]:
    """Coefficients (N, 3, 12, 12) of (1, cos x, sin x), and what then finds u and v."""
    points, axes = loop
    size = len(turn)
    length = max(float(np.abs(points - points[2]).max()), 1e-6)
    left = np.empty((points.shape[1], 3, 3, 3, 14))
    for k, z in enumerate(_SAMPLES):
        line_z = _about(points[4], axes[4], z, points[5], axes[5])
        for j, y in enumerate(_SAMPLES):
            line_y = _about(points[3], axes[3], y, *line_z)
            for i, x in enumerate(_SAMPLES):
                p, direction = _about(points[2], axes[2], x, *line_y)
                left[:, i, j, k] = _fourteen(p - points[2], direction, length)
    left = np.einsum("ai,bj,ck,nijke->neabc", _FIT, _FIT, _FIT, left, optimize=True)
    far = np.einsum("nij,nj->ni", turn, np.broadcast_to(points[5], (size, 3))) + place
    far_direction = np.einsum("nij,nj->ni", turn, np.broadcast_to(axes[5], (size, 3)))
    right = np.empty((size, 3, 3, 14))
    for i, u in enumerate(_SAMPLES):
        line_u = _about(points[0], axes[0], -u, far, far_direction)
        for j, v in enumerate(_SAMPLES):
            p, direction = _about(points[1], axes[1], -v, *line_u)
            right[:, i, j] = _fourteen(p - points[2], direction, length)
    right = np.einsum("ai,bj,nije->neab", _FIT, _FIT, right, optimize=True).reshape(size, 14, 9)
    basis, sizes, others = np.linalg.svd(right[:, :, 1:])
    null = basis[:, :, 8:]  # (N, 14, 6): the equations without u and v
    if len(left) == 1:
        six = np.einsum("nek,eabc->nkabc", null, left[0], optimize=True)
    else:
        six = np.einsum("nek,neabc->nkabc", null, left, optimize=True)
    six[:, :, 0, 0, 0] -= np.einsum("nek,ne->nk", null, right[:, :, 0])
    twelve = [np.einsum("nkabc,bd->nakdc", six, table) for table in (_TIMES_COS, _TIMES_SIN)]
    matrices = np.concatenate(twelve, axis=2).reshape(size, 3, 12, 12)
    inverse = np.einsum("nji,nj,nej->nie", others, 1.0 / np.maximum(sizes, 1e-9 * sizes[:, :1]), basis[:, :, :8])
    left = np.broadcast_to(left, (size, *left.shape[1:]))
    return matrices, (inverse, left, right[:, :, 0])


def _eigenvalues(matrices: Array) -> Array:
    """Angles x (N, 24), complex, at which the twelve equations have a solution."""
    c, s = np.cos(_START), np.sin(_START)
    constant, cosine, sine = matrices[:, 0], matrices[:, 1], matrices[:, 2]
    cosine, sine = c * cosine + s * sine, c * sine - s * cosine
    # (1 + t^2) constant + (1 - t^2) cosine + 2 t sine, t = tan((x - start) / 2)
    lead = constant - cosine
    rest = np.concatenate([constant + cosine, 2.0 * sine], axis=2)
    try:
        solved = np.linalg.solve(lead, rest)
    except np.linalg.LinAlgError:  # this version is singular for this arm
        solved = np.linalg.pinv(lead) @ rest
    companion = np.zeros((len(matrices), 24, 24))
    companion[:, :12, 12:] = np.eye(12)
    companion[:, 12:] = -solved
    tangent = np.linalg.eigvals(companion).astype(complex)
    with np.errstate(all="ignore"):
        angle = 2.0 * np.arctan(tangent)
    angle = np.where(np.isfinite(angle), angle, 1j)
    return np.asarray(angle + _START)


def _others(matrices: Array, line: tuple[Array, ...], x: Array) -> tuple[Array, Array, Array, Array]:
    """y, z, u, v (K,) that belong to angles x (K,)."""
    inverse, left, constant = line
    circle = np.stack([np.ones(len(x)), np.cos(x), np.sin(x)], axis=1)
    vector = np.linalg.svd(np.einsum("kaij,ka->kij", matrices, circle))[2][:, -1].reshape(-1, 4, 3)
    in_y, _, in_z = np.linalg.svd(vector)
    y = 2.0 * np.arctan2(in_y[:, 1, 0], in_y[:, 0, 0])
    z_one, z_cos, z_sin = in_z[:, 0].T
    z = np.arctan2(z_sin * np.sign(z_one), z_cos * np.sign(z_one))
    y_circle = np.stack([np.ones(len(x)), np.cos(y), np.sin(y)], axis=1)
    z_circle = np.stack([np.ones(len(x)), np.cos(z), np.sin(z)], axis=1)
    value = np.einsum("keabc,ka,kb,kc->ke", left, circle, y_circle, z_circle, optimize=True) - constant
    products = np.einsum("kie,ke->ki", inverse, value)
    # In order: cos v, sin v, cos u, cos u cos v, cos u sin v, sin u, ...
    return wrapped(y), z, np.arctan2(products[:, 5], products[:, 2]), np.arctan2(products[:, 1], products[:, 0])


def _last(g: Geometry, joint: int, q: Array, turn: Array) -> Array:
    """The angle (K,) of the joint whose axis was the line, from the rotation that the others leave to it."""
    rest = turn.transpose(1, 2, 0)
    for i in range(joint):
        rest = rotate(g.axes[i], -q[:, i][None], rest)
    rest = rest.swapaxes(0, 1)
    for i in range(5, joint, -1):
        rest = rotate(g.axes[i], q[:, i][None], rest)
    return rotation_about(g.axes[joint], rest.swapaxes(0, 1))


def distinct(g: Geometry, q: Array, good: Mask, slots: int) -> tuple[Array, Mask]:
    """The answers q (N, C, m) that are good and differ, in the first of `slots` places: (N, slots, m), (N, slots)."""
    gap = apart(g, q[:, :, None], q[:, None])
    before = np.tri(q.shape[1], k=-1, dtype=bool)
    keep = good & ~((gap < SAME) & good[:, None, :] & before).any(axis=2)
    place = np.cumsum(keep, axis=1) - 1
    keep &= place < slots
    out, filled = np.zeros((len(q), slots, q.shape[2])), np.zeros((len(q), slots), dtype=bool)
    row, column = np.nonzero(keep)
    out[row, place[row, column]], filled[row, place[row, column]] = q[row, column], True
    return out, filled
