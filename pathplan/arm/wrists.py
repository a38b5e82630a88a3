"""Six axes of which three neighbouring ones meet in a point, or of which three slide.

Three axes that meet leave their point where it is: what the other three do to it is a problem of position
(`pathplan.arm.positions`), and the three turns then make up what is left of the orientation (Pieper 1968).
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np

from pathplan.arm.geometry import SHORT, Geometry, across, meeting_points
from pathplan.arm.inverse_form import Form
from pathplan.arm.model import Array
from pathplan.arm.positions import Solve, position_problem, signs
from pathplan.arm.subproblems import (
    STRAIGHT,
    angle_about,
    cross,
    dot,
    planar,
    rotate,
    rotation_about,
    two_angles,
    two_circles,
    wrapped,
)

__all__ = ["meeting_elsewhere", "three_slides", "wrist", "wrist_angles"]

WRIST = ({"wrist": "positive"}, {"wrist": "negative"})


def wrist(g: Geometry) -> Form | None:
    """Joints 4, 5, 6 revolute and meeting in a point, any first three."""
    snapped = _meeting_triple(g, 3)
    if snapped is None:
        return None
    g, centre = snapped
    position = position_problem(g.of((0, 1, 2)), centre)
    if position is None:
        return None
    labels = tuple({**label, **turn} for label in position.labels for turn in WRIST)
    if not position.steady:
        labels = ({},) * len(labels)
    words = f"wrist axes meet; {position.words}"
    return Form("spherical wrist", words, labels, position.steady, partial(_wrist, g, centre, position.solve))


def _meeting_triple(g: Geometry, first: int) -> tuple[Geometry, Array] | None:
    """The geometry with axes first to first + 2 laid through their meeting point, and that point."""
    three = list(range(first, first + 3))
    if not g.revolute(*three) or g.parallel(first, first + 1) or g.parallel(first + 1, first + 2):
        return None
    centre, distance = meeting_points(g.points[three], g.axes[three])
    if distance > g.tolerance.distance:
        return None
    points = g.points.copy()
    points[three] = centre
    return replace(g, points=points), centre


def _wrist(g: Geometry, centre: Array, solve: Solve, rotation: Array, shift: Array) -> Array:
    """(6, B, N): B positions times wrist positive and negative."""
    point = np.einsum("ijn,j->in", rotation, centre) + shift
    arm = solve(centre[:, None], point)
    branches, size = arm.shape[1:]
    joints = np.empty((6, branches, 2, size))
    joints[:3] = arm[:, :, None]
    left = np.repeat(rotation[:, :, None], branches, axis=2)
    for i in range(3):
        if g.kinds[i] == "revolute":
            left = rotate(g.axes[i], -arm[i][None], left)
    joints[3:] = wrist_angles(g.axes[3:], left)
    return joints.reshape(6, 2 * branches, size)


def wrist_angles(axes: Array, rotation: Array) -> Array:
    """(3, ..., 2, N) three turns about `axes` (3, 3) that make up rotations (3, 3, ..., N), rows first.

    Positive, negative: the sign of the sine of the middle turn, counted from the straight wrist nearest to its zero.
    Where the outer axes are in line the first turn stays at zero.
    """
    a4, a5, a6 = axes
    pointing = np.einsum("ij...,j->i...", rotation, a6)
    middle, half = _bend(axes, pointing)
    flipped = round(middle / np.pi) % 2 == 1
    side = (np.array([-1.0, 1.0]) if flipped else np.array([1.0, -1.0]))[:, None]
    q5 = middle + side * half[..., None, :]
    bent = rotate(a5, q5, np.broadcast_to(a6.reshape(3, *(1,) * q5.ndim), (3, *q5.shape)))
    pointing = np.broadcast_to(pointing[..., None, :], bent.shape)
    q4 = angle_about(a4, bent, pointing)
    along = cross(a4, pointing)
    q4[np.sum(along * along, axis=0) < STRAIGHT**2] = 0.0
    rest = rotate(a4, -q4[None], np.broadcast_to(rotation[..., None, :], (3, 3, *q4.shape)))
    rest = rotate(a5, -q5[None], rest)
    return np.stack([q4, wrapped(q5), rotation_about(a6, rest)])


def _bend(axes: Array, pointing: Array) -> tuple[float, Array]:
    """Middle and half angle of the two q5 that let axis 6 point along `pointing` (3, ...)."""
    a4, a5, a6 = axes
    level = dot(a4, pointing)
    middle, half = two_angles(a5, a4, a6[:, None], level.reshape(1, -1))
    if abs(a4 @ a5) < 1e-9 and abs(a5 @ a6) < 1e-9:
        # Square axes: q5 is the angle between axes 4 and 6, and its sine is exact even where it is small.
        half = np.arctan2(np.linalg.norm(cross(a4, pointing), axis=0), level)
    return float(middle.reshape(-1)[0]), half.reshape(level.shape)


def three_slides(g: Geometry) -> Form | None:
    """Three prismatic and three revolute joints in any order: the turns alone orient, then the travels are linear."""
    turns = [i for i in range(6) if g.kinds[i] == "revolute"]
    slides = [i for i in range(6) if g.kinds[i] == "prismatic"]
    if g.m != 6 or len(slides) != 3:
        return None
    axes = g.axes[turns]
    if any(np.linalg.norm(np.cross(axes[i], axes[i + 1])) < 1e-6 for i in (0, 1)):
        return None
    return Form("three slides", "three slides, three turns", WRIST, True, partial(_three_slides, g, turns, slides))


def _three_slides(g: Geometry, turns: list[int], slides: list[int], rotation: Array, shift: Array) -> Array:
    """(6, 2, N): wrist positive, negative."""
    size = shift.shape[1]
    joints = np.zeros((6, 2, size))
    joints[turns] = wrist_angles(g.axes[turns], rotation)
    # Without the travels, then what each of them adds, turned by the joints before it.
    directions = np.empty((3, 3, 2, size))
    unmoved = np.zeros((3, 2, size))
    for k in reversed(range(6)):
        if k in turns:
            point = g.points[k].reshape(3, 1, 1)
            unmoved = rotate(g.axes[k], joints[k], unmoved - point) + point
    for column, k in enumerate(slides):
        direction = np.broadcast_to(g.axes[k].reshape(3, 1, 1), (3, 2, size))
        for i in reversed([i for i in turns if i < k]):
            direction = rotate(g.axes[i], joints[i], direction)
        directions[:, column] = direction
    joints[slides] = _solved(directions, shift[:, None] - unmoved)
    return joints


def _solved(columns: Array, right: Array) -> Array:
    """(3, ...) x with columns (3, 3, ...) @ x = right (3, ...), by Cramer's rule; zero where the columns are level."""

    def crossed(a: Array, b: Array) -> Array:
        return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])

    a, b, c = columns[:, 0], columns[:, 1], columns[:, 2]
    rows = np.stack([crossed(b, c), crossed(c, a), crossed(a, b)])
    determinant = np.sum(a * rows[0], axis=0)
    determinant = np.where(np.abs(determinant) < 1e-12, np.inf, determinant)
    return np.asarray(np.sum(rows * right, axis=1) / determinant)


def meeting_elsewhere(g: Geometry) -> Form | None:
    """Axes 3, 4, 5 meeting in a point c, all joints revolute: E_1 E_2 c = G E_6^-1 c, then the three turns."""
    if not g.revolute(*range(6)):
        return None
    snapped = _meeting_triple(g, 2)
    if snapped is None:
        return None
    g, centre = snapped
    if g.link(1, g.points[1], centre) < SHORT or g.link(5, g.points[5], centre) < SHORT:
        return None
    two, six, middle = f"joint {g.numbers[1]}", f"joint {g.numbers[5]}", f"joint {g.numbers[3]}"
    words = f"axes of joints {g.numbers[2]}, {g.numbers[3]} and {g.numbers[4]} meet"
    labels, steady = signs(six, two, middle), True
    if g.parallel(0, 1):
        if g.link(0, g.points[0], g.points[1]) < SHORT:
            return None
        first = partial(_middle_parallel, g, centre)
    elif (meeting := g.meet(0, 1)) is not None:
        first = partial(_middle_meeting, g, centre, meeting)
    else:
        points = g.points.copy()
        points[0] = g.foot(0, 1)
        g = replace(g, points=points)
        first, steady = partial(_middle_skew, g, centre), False
        labels = ({},) * 8
    return Form("three meeting axes", words, labels, steady, partial(_middle, g, first))


def _middle(g: Geometry, first: partial[tuple[Array, Array, Array]], rotation: Array, shift: Array) -> Array:
    """(6, 8, N) from q1, q2, q6 (4, N)."""
    q1, q2, q6 = first(rotation, shift)
    size = shift.shape[1]
    left = np.repeat(rotation[:, :, None], 4, axis=2)
    left = rotate(g.axes[1], -q2[None], rotate(g.axes[0], -q1[None], left))
    # Times E_6^-1 from the right: its transpose from the left of the transpose.
    left = rotate(g.axes[5], q6[None], left.swapaxes(0, 1)).swapaxes(0, 1)
    joints = np.empty((6, 4, 2, size))
    joints[0], joints[1], joints[5] = q1[:, None], q2[:, None], q6[:, None]
    joints[2:5] = wrist_angles(g.axes[2:5], left)
    return joints.reshape(6, 8, size)


def _seen_from_six(g: Geometry, centre: Array, origin: Array, rotation: Array, shift: Array) -> tuple[Array, Array]:
    """The circle on which G E_6^-1 c lies, as base + rotation Rot(-a6, q6) v, base counted from `origin`: base (3, N)
    and v (3,).
    """
    base = np.einsum("ijn,j->in", rotation, g.points[5]) + shift - origin[:, None]
    return base, centre - g.points[5]


def _turned_vectors(vectors: Array, rotation: Array, axis: Array, v: Array) -> tuple[Array, Array]:
    """Coefficients (k, 2, N) and constants (k, N) of vectors (k, 3, N) . rotation Rot(axis, angle) v."""
    local = np.einsum("kin,ijn->kjn", vectors, rotation)
    along = axis * float(axis @ v)
    plane = np.stack([v - along, np.cross(axis, v)])
    return np.einsum("kjn,cj->kcn", local, plane), np.einsum("kjn,j->kn", local, along)


def _angles_at(coefficients: Array, constant: Array, wanted: Array) -> Array:
    """(2, N) both angles with coefficients (2, N) . (cos, sin) + constant = wanted, or the nearest one twice."""
    size = np.hypot(coefficients[0], coefficients[1])
    middle = np.arctan2(coefficients[1], coefficients[0])
    level = wanted - constant
    half = np.arctan2(np.sqrt(np.maximum(size * size - level * level, 0.0)), level)
    return np.stack([middle + half, middle - half])


def _six(g: Geometry, q6: Array, base: Array, v: Array, rotation: Array) -> Array:
    """(3, ..., N) base + rotation Rot(-a6, q6) v."""
    turned = rotate(-g.axes[5], q6, np.broadcast_to(v.reshape(3, *(1,) * q6.ndim), (3, *q6.shape)))
    return np.asarray(base.reshape(3, *(1,) * (q6.ndim - 1), -1) + np.einsum("ijn,j...n->i...n", rotation, turned))


def _middle_meeting(
    g: Geometry, centre: Array, meeting: Array, rotation: Array, shift: Array
) -> tuple[Array, Array, Array]:
    """1 and 2 meet: the distance of c from there measures q6 alone, its place along axis 1 then q2."""
    base, v = _seen_from_six(g, centre, meeting, rotation, shift)
    coefficients, constant = _turned_vectors(base[None], rotation, -g.axes[5], v)
    squares = float(np.sum((centre - meeting) ** 2)) - np.sum(base * base, axis=0) - float(v @ v)
    q6 = _angles_at(coefficients[0], constant[0], squares / 2.0)
    target = _six(g, q6, base, v, rotation)
    start = (centre - meeting)[:, None, None]
    middle, half = two_angles(g.axes[1], g.axes[0], start, dot(g.axes[0], target))
    q2 = np.stack(np.broadcast_arrays(middle + half, middle - half), axis=1)  # sign of 6, sign of 2
    bent = rotate(g.axes[1], q2, np.broadcast_to(start[..., None], (3, *q2.shape)))
    q1 = angle_about(g.axes[0], bent, np.broadcast_to(target[:, :, None], bent.shape))
    return q1.reshape(4, -1), q2.reshape(4, -1), np.repeat(q6, 2, axis=0)


def _middle_parallel(g: Geometry, centre: Array, rotation: Array, shift: Array) -> tuple[Array, Array, Array]:
    """1 and 2 parallel: the place of c along them measures q6 alone; then two links in a plane."""
    a1, o1, o2 = g.axes[0], g.points[0], g.points[1]
    base, v = _seen_from_six(g, centre, o1, rotation, shift)
    along = np.broadcast_to(a1[:, None], base.shape)[None]
    coefficients, constant = _turned_vectors(along, rotation, -g.axes[5], v)
    q6 = _angles_at(coefficients[0], constant[0], a1 @ (centre - o1) - dot(a1, base))
    target = _six(g, q6, base, v, rotation)
    sign = np.array([1.0, -1.0])[None, :, None]
    q1, q2 = planar(a1, across(o2 - o1, a1), across(centre - o2, a1), target[:, :, None], sign)
    q2 = np.sign(a1 @ g.axes[1]) * q2
    return q1.reshape(4, -1), q2.reshape(4, -1), np.repeat(q6, 2, axis=0)


def _middle_skew(g: Geometry, centre: Array, rotation: Array, shift: Array) -> tuple[Array, Array, Array]:
    """1 and 2 skew: place of c along axis 1 and distance from it, two equations in q2 and q6."""
    a1, a2, o1, o2 = g.axes[0], g.axes[1], g.points[0], g.points[1]
    base, v = _seen_from_six(g, centre, o1, rotation, shift)
    w = centre - o2
    vectors = np.stack([np.broadcast_to(a1[:, None], base.shape), base])
    six, six_constant = _turned_vectors(vectors, rotation, -g.axes[5], v)
    out = np.stack([a1, o2 - o1])
    in_plane = np.stack([w - a2 * float(a2 @ w), np.cross(a2, w)])
    two, two_constant = out @ in_plane.T, (out @ a2) * float(a2 @ w)
    right = np.stack(
        [
            a1 @ (o2 - o1) - dot(a1, base),
            (w @ w + (o2 - o1) @ (o2 - o1) - v @ v - np.sum(base * base, axis=0)) / 2.0,
        ]
    )
    right = right + two_constant[:, None] - six_constant
    scale = np.array([1.0, 1.0 / g.length])[:, None]
    q6, q2 = two_circles(six * scale[:, :, None], -two * scale, right * scale)
    target = _six(g, q6, base, v, rotation)
    start = np.broadcast_to((o2 - o1)[:, None, None], (3, *q2.shape))
    start = start + rotate(a2, q2, np.broadcast_to(w[:, None, None], (3, *q2.shape)))
    return angle_about(a1, start, target), q2, q6
