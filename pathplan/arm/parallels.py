"""Six revolute axes of which three neighbouring ones are parallel, as in arms with an offset wrist.

Three parallel axes leave their direction h, and every length along it, where they are: two equations for the
direction and one for the length hold for the other three joints, and a mechanism in a plane remains (Elias & Wen
2022, "three parallel axes").
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial

import numpy as np

from pathplan.arm.geometry import SHORT, Geometry, across
from pathplan.arm.inverse_form import Form
from pathplan.arm.model import Array
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

__all__ = ["inner_parallel", "outer_parallel"]

First = Callable[[Geometry, Array, Array], tuple[Array, Array, Array]]


def _snapped(g: Geometry, first: int) -> Geometry | None:
    """The geometry with axes first to first + 2 exactly parallel; None if they aren't, or make no mechanism."""
    three = [first, first + 1, first + 2]
    if not g.revolute(*range(6)) or not (g.parallel(first, first + 1) and g.parallel(first + 1, first + 2)):
        return None
    h = g.axes[first + 1]
    axes = g.axes.copy()
    axes[three] = h * np.sign(g.axes[three] @ h)[:, None]
    g = replace(g, axes=axes)
    links = [g.link(first, g.points[i], g.points[i + 1]) for i in three[:2]]
    return None if min(links) < SHORT else g


def inner_parallel(g: Geometry) -> Form | None:
    """Axes 2, 3, 4 parallel."""
    snapped = _snapped(g, 1)
    if snapped is None or snapped.parallel(0, 1) or snapped.parallel(3, 4) or snapped.parallel(4, 5):
        return None
    meeting = snapped.meet(4, 5)
    labels = tuple(
        {"shoulder": shoulder, "wrist": turn, "elbow": elbow}
        for shoulder in ("left", "right")
        for turn in ("positive", "negative")
        for elbow in ("up", "down")
    )
    words = f"axes of joints {g.numbers[1]}, {g.numbers[2]} and {g.numbers[3]} parallel"
    if meeting is None:
        words += ", the last two axes skew"
        points = snapped.points.copy()
        points[5] = snapped.foot(5, 4)
        skew = replace(snapped, points=points)
        return Form("three parallel axes", words, ({},) * 8, False, partial(_inner, skew, _inner_skew))
    points = snapped.points.copy()
    points[4:] = meeting
    met = replace(snapped, points=points)
    return Form("three parallel axes", words, labels, True, partial(_inner, met, _inner_meeting))


def _inner_meeting(g: Geometry, pointing: Array, end: Array) -> tuple[Array, Array, Array]:
    """Where axes 5 and 6 meet, the length along h measures q1 alone: shoulder left, right; then wrist +, -."""
    h, a1, o1 = g.axes[1], g.axes[0], g.points[0]
    offset = float(h @ (g.points[5] - o1))
    middle, half = two_angles(a1, h, end - o1[:, None], np.full(end.shape[1], offset))
    up = g.upward(0)
    ahead = up * (1.0 if offset > -1e-9 else -1.0) * np.array([1.0, -1.0])[:, None]  # left, right
    q1 = ahead * half - middle
    unturned = rotate(a1, -q1, np.repeat(pointing[:, None], 2, axis=1))
    bend, half_bend = _bend(g, unturned)
    # Positive is sin q5 > 0, q5 counted from the straight wrist nearest to its zero.
    side = np.array([-1.0, 1.0]) if round(bend / np.pi) % 2 == 1 else np.array([1.0, -1.0])
    q5 = bend + side[:, None] * half_bend[:, None]  # shoulder, wrist, pose
    elbow_up = np.repeat((up * ahead)[:, None], 2, axis=1).reshape(4, 1)
    return np.repeat(q1, 2, axis=0), q5.reshape(4, -1), elbow_up


def _bend(g: Geometry, unturned: Array) -> tuple[float, Array]:
    """Middle and half angle of q5 with h . Rot(a5, q5) a6 = h . unturned."""
    h, a5, a6 = g.axes[1], g.axes[4], g.axes[5]
    level = dot(h, unturned)
    middle, half = two_angles(a5, h, a6[:, None], level.reshape(1, -1))
    if abs(h @ a5) < 1e-9 and abs(a5 @ a6) < 1e-9:  # square axes: exact even where the sine is small
        half = np.arctan2(np.linalg.norm(cross(h, unturned), axis=0), level)
    return float(middle.reshape(-1)[0]), half.reshape(level.shape)


def _inner_skew(g: Geometry, pointing: Array, end: Array) -> tuple[Array, Array, Array]:
    """h . E_1^-1 G o6 = h . E_5 o6 and h . E_1^-1 R a6 = h . R_5 a6, two equations in q1 and q5."""
    h, a1, a5, a6 = g.axes[1], g.axes[0], g.axes[4], g.axes[5]
    o1, o5, o6 = g.points[0], g.points[4], g.points[5]
    w = end - o1[:, None]
    one = np.stack([_coefficients(h, -a1, pointing), _coefficients(h, -a1, w) / g.length])
    five = np.stack([_coefficients(h, a5, a6[:, None]), _coefficients(h, a5, (o6 - o5)[:, None]) / g.length])
    lean_1, lean_5 = float(h @ a1), float(h @ a5)
    right = np.stack(
        [
            lean_5 * float(a5 @ a6) - lean_1 * dot(a1, pointing),
            (h @ (o5 - o1) + lean_5 * float(a5 @ (o6 - o5)) - lean_1 * dot(a1, w)) / g.length,
        ]
    )
    q1, q5 = two_circles(one, -five, right)
    return q1, q5, np.ones((4, 1))


def _coefficients(direction: Array, axis: Array, v: Array) -> Array:
    """(2, N) coefficients of cos and sin in direction . Rot(axis, angle) v, v (3, N)."""
    square = direction - axis * float(axis @ direction)
    return np.stack([dot(square, v), dot(np.cross(square, axis), v)])


def _inner(g: Geometry, first: First, rotation: Array, shift: Array) -> Array:
    """(6, 8, N) from q1 and q5 (4, N) that `first` finds; then q6, and two links in the plane square to h."""
    h, a1, a5, a6 = g.axes[1], g.axes[0], g.axes[4], g.axes[5]
    size = shift.shape[1]
    pointing = np.einsum("ijn,j->in", rotation, a6)
    end = np.einsum("ijn,j->in", rotation, g.points[5]) + shift
    q1, q5, elbow_up = first(g, pointing, end)
    # h seen from the tool: R_6 (R^T R_1 h) = R_5^T h.
    turned_h = rotate(a1, q1, np.broadcast_to(h[:, None, None], (3, 4, size)))
    seen = np.einsum("ijn,ibn->jbn", rotation, turned_h)
    bent_h = rotate(a5, -q5, np.broadcast_to(h[:, None, None], (3, 4, size)))
    q6 = angle_about(a6, seen, bent_h)
    along = cross(a6, seen)
    q6[np.sum(along * along, axis=0) < STRAIGHT**2] = 0.0
    # What the parallel axes do: D = E_1^-1 G E_6^-1 E_5^-1, of which a turn about h and the path of a point remain.
    left = rotate(a1, -q1[None], np.repeat(rotation[:, :, None], 4, axis=2))
    right = rotate(a6, q6[None], left.swapaxes(0, 1))  # transposed: times E_6^-1 from the right
    right = rotate(a5, q5[None], right)
    total = rotation_about(h, right.swapaxes(0, 1))
    fourth = _moved(g, 5, q6, _moved(g, 4, q5, np.broadcast_to(g.points[3][:, None, None], (3, 4, size))))
    fourth = np.einsum("ijn,jbn->ibn", rotation, fourth) + shift[:, None]
    o1 = g.points[0][:, None, None]
    fourth = rotate(a1, -q1, fourth - o1) + o1
    return _plane_joints(g, (1, 2, 3), fourth, total, elbow_up, (q1, q5, q6))


def _moved(g: Geometry, joint: int, angle: Array, x: Array) -> Array:
    """E_joint^-1 x."""
    point = g.points[joint].reshape(3, *(1,) * angle.ndim)
    return np.asarray(rotate(g.axes[joint], -angle, x - point) + point)


def _plane_joints(
    g: Geometry,
    three: tuple[int, int, int],
    target: Array,
    total: Array,
    side: Array,
    others: tuple[Array, Array, Array],
) -> Array:
    """(6, 8, N): the three parallel joints that bring the last of their axes to `target` (3, 4, N) and turn by
    `total` (4, N), with the `others` (4, N) in order of the joints that are left.
    """
    h = g.axes[three[0]]
    o2, o3, o4 = (g.points[i] for i in three)
    sign = side[:, None] * np.array([1.0, -1.0])[:, None]  # (4 or 1, elbow, 1)
    reach = (target - o2[:, None, None])[:, :, None]
    q2, bend = planar(h, across(o3 - o2, h), across(o4 - o3, h), reach, sign)
    joints = np.empty((6, 4, 2, target.shape[-1]))
    turns = [np.sign(h @ g.axes[i]) for i in three]
    joints[three[0]] = q2
    joints[three[1]] = turns[1] * bend
    joints[three[2]] = turns[2] * (total[:, None] - q2 - bend)
    for joint, value in zip([i for i in range(6) if i not in three], others, strict=True):
        joints[joint] = value[:, None]
    return wrapped(joints.reshape(6, 8, -1))


def outer_parallel(g: Geometry) -> Form | None:
    """Axes 1, 2, 3 parallel: two equations in q4 and q6."""
    snapped = _snapped(g, 0)
    if snapped is None or any(snapped.parallel(i, i + 1) for i in (2, 3, 4)):
        return None
    words = f"axes of joints {g.numbers[0]}, {g.numbers[1]} and {g.numbers[2]} parallel"
    return Form("three parallel axes", words, ({},) * 8, False, partial(_outer, snapped))


def _outer(g: Geometry, rotation: Array, shift: Array) -> Array:
    """(6, 8, N). With v = R^T h, R_4 R_5 R_6 v = h gives a5 . R_6 v = a5 . R_4^T h, and the length along h is
    h . E_4 E_5 o6 = (R_6 v) . (o6 - o5) + (R_4^T h) . (o5 - o4) + h . o4.
    """
    h = g.axes[0]
    a4, a5, a6 = g.axes[3:]
    o4, o5, o6 = g.points[3:]
    size = shift.shape[1]
    v = np.einsum("ijn,i->jn", rotation, h)
    end = np.einsum("ijn,j->in", rotation, o6) + shift
    six = np.stack([_coefficients(a5, a6, v), _coefficients(o6 - o5, a6, v) / g.length])
    four = np.stack([_coefficients(-a5, -a4, h[:, None]), _coefficients(o5 - o4, -a4, h[:, None]) / g.length])
    right = np.stack(
        [
            float(a5 @ a4) * float(a4 @ h) - float(a5 @ a6) * dot(a6, v),
            (dot(h, end) - h @ o4 - float((o6 - o5) @ a6) * dot(a6, v) - float((o5 - o4) @ a4) * float(a4 @ h))
            / g.length,
        ]
    )
    q6, q4 = two_circles(six, four, right)
    start = rotate(a6, q6, np.broadcast_to(v[:, None], (3, 4, size)))
    goal = rotate(a4, -q4, np.broadcast_to(h[:, None, None], (3, 4, size)))
    q5 = angle_about(a5, start, goal)
    # D = G E_6^-1 E_5^-1 E_4^-1 on the third axis, and its turn.
    third = np.broadcast_to(g.points[2][:, None, None], (3, 4, size))
    third = _moved(g, 5, q6, _moved(g, 4, q5, _moved(g, 3, q4, third)))
    third = np.einsum("ijn,jbn->ibn", rotation, third) + shift[:, None]
    turned = np.repeat(rotation.swapaxes(0, 1)[:, :, None], 4, axis=2)
    for axis, angle in ((a6, q6), (a5, q5), (a4, q4)):
        turned = rotate(axis, angle[None], turned)
    total = rotation_about(h, turned.swapaxes(0, 1))
    return _plane_joints(g, (0, 1, 2), third, total, np.ones((4, 1)), (q4, q5, q6))
