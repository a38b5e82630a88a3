"""Where three joints carry a point: all (q_1, q_2, q_3) with E_1 E_2 E_3 c = p, for a batch.

This is the first half of the inverse of an arm whose last three axes meet in c. Every mix of revolute and prismatic
joints is served: by canonical subproblems where two neighbouring axes are parallel or meet (Paden 1986; Elias & Wen
2022), otherwise by eliminating the middle joint, whose axis a leaves a . x and |x - o| of a point alone (or, sliding,
the plane square to it): two equations in q_1 and q_3 remain (subproblem 6 of Elias & Wen 2022).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from pathplan.arm.geometry import SHORT, Geometry, across
from pathplan.arm.model import Array
from pathplan.arm.subproblems import (
    angle_about,
    dot,
    planar,
    rotate,
    trigonometric_roots,
    two_angles,
    two_circles,
    two_turns,
    wrapped,
)

__all__ = ["Position", "Solve", "position_problem", "signs"]

Solve = Callable[[Array, Array], Array]
Label = Mapping[str, str]


@dataclass(frozen=True)
class Position:
    """How three joints are solved for. `solve(c, p)` with c (3, 1) or (3, N) and p (3, N) gives (3, B, N)."""

    words: str
    labels: tuple[Label, ...]  # of length B
    steady: bool  # the branch index means the same for every point
    solve: Solve


def signs(*keys: str) -> tuple[Label, ...]:
    """Labels of branches told apart by signs: the last key changes fastest."""
    labels: list[dict[str, str]] = [{}]
    for key in keys:
        labels = [{**label, key: word} for label in labels for word in ("positive", "negative")]
    return tuple(labels)


def position_problem(g: Geometry, centre: Array) -> Position | None:
    """What solves three joints for the place of a point that lies at `centre` (3,) at q = 0; None if nothing does."""
    if g.revolute(0, 1, 2) and g.parallel(1, 2) and not g.parallel(0, 1):
        if g.link(1, g.points[1], g.points[2]) < SHORT or g.link(1, g.points[2], centre) < SHORT:
            return None
        labels = tuple({"shoulder": s, "elbow": e} for s in ("left", "right") for e in ("up", "down"))
        return Position("axes 2 and 3 parallel", labels, True, partial(_shoulder_elbow, g))
    found = _forwards(g)
    if found is not None and found.steady:
        return found
    backwards = _forwards(g.reversed())
    if backwards is not None and (found is None or backwards.steady):
        return Position(backwards.words, backwards.labels, backwards.steady, partial(_backwards, backwards.solve))
    return found


def _backwards(solve: Solve, c: Array, p: Array) -> Array:
    """E_3(-q_3) E_2(-q_2) E_1(-q_1) p = c."""
    return solve(p, np.broadcast_to(c, p.shape))[::-1]


def _forwards(g: Geometry) -> Position | None:
    """The solution by what the first two axes, or all three, have of special; None if it takes the other end."""
    kinds = "".join("R" if kind == "revolute" else "P" for kind in g.kinds)
    one, two, three = (f"joint {number}" for number in g.numbers)
    square = abs(float(g.axes[0] @ g.axes[1])) <= g.tolerance.angle
    if kinds == "PPP" and abs(np.linalg.det(g.axes)) > 1e-3:
        return Position("three slides", ({},), True, partial(_ppp, g))
    if kinds == "PPR" and not g.parallel(0, 1) and _tilts(np.cross(g.axes[0], g.axes[1]), g.axes[2]):
        return Position(f"{one} and {two} slide", signs(three), True, partial(_ppr, g))
    if kinds == "PRP" and max(abs(g.axes[1] @ g.axes[0]), abs(g.axes[1] @ g.axes[2])) > 1e-6:
        return Position(f"slides before and after {two}", signs("slides"), True, partial(_prp, g))
    if kinds == "RPR" and square and not g.parallel(0, 2):
        words = f"{two} slides square to the axis of {one}"
        return Position(words, signs(three, one), True, partial(_rpr_square, g))
    if kinds == "RPR":
        return Position(f"{two} slides", ({},) * 4, False, partial(_rpr, g))
    if kinds == "PRR":
        return _slide_first(g, square)
    if kinds != "RRR":
        return None
    if g.parallel(0, 1):
        if g.parallel(1, 2) or g.link(0, g.points[0], g.points[1]) < SHORT:
            return None
        words = f"axes of {one} and {two} parallel"
        return Position(words, signs(three, two), True, partial(_rrr_parallel, g))
    meeting = g.meet(0, 1)
    if meeting is not None:
        if g.parallel(1, 2) or g.link(2, g.points[2], meeting) < SHORT:
            return None
        words = f"axes of {one} and {two} meet"
        return Position(words, signs(three, two), True, partial(_rrr_meeting, g, meeting))
    if g.parallel(1, 2) or g.meet(1, 2) is not None:
        return None  # the other end is special
    points = g.points.copy()
    points[1] = g.foot(1, 2)  # keeps the two equations as independent as the axes are
    words = "first three axes skew: two equations in two angles"
    return Position(words, ({},) * 4, False, partial(_rrr_skew, replace(g, points=points)))


def _tilts(direction: Array, axis: Array) -> bool:
    """Turning about `axis` moves points along `direction`."""
    return bool(np.linalg.norm(np.cross(direction, axis)) > 1e-6)


def _slide_first(g: Geometry, square: bool) -> Position | None:
    """Prismatic, revolute, revolute."""
    one, _, three = (f"joint {number}" for number in g.numbers)
    if g.parallel(1, 2):
        if square or g.link(1, g.points[1], g.points[2]) < SHORT:
            return None
        return Position(f"{one} slides, parallel axes after it", signs(three), True, partial(_prr_parallel, g))
    if square:
        labels = signs(three, one)
        return Position(f"{one} slides square to the next axis", labels, True, partial(_prr_square, g))
    return Position(f"{one} slides", ({},) * 4, False, partial(_prr, g))


# Points: `column` turns (3,) into (3, 1, 1) to be broadcast with (3, B, N).


def _column(vector: Array) -> Array:
    return vector[:, None, None]


def _about(axis: Array, point: Array, angle: Array, x: Array) -> Array:
    """Points x (3, ...) turned by angles (...) about a line."""
    origin = point.reshape(3, *(1,) * angle.ndim)
    moved = x - origin
    return np.asarray(rotate(axis, angle, np.broadcast_to(moved, (3, *angle.shape))) + origin)


def _both(middle: Array, half: Array) -> Array:
    """(2, N) middle + half, middle - half."""
    return np.stack(np.broadcast_arrays(middle + half, middle - half))


def _square_sum(vector: Array) -> Array:
    return np.asarray(np.sum(vector * vector, axis=0))


def _shoulder_elbow(g: Geometry, c: Array, p: Array) -> Array:
    """Three revolute joints, 2 and 3 parallel: shoulder left and right, elbow up and down."""
    (a1, a2, a3), (o1, o2, o3) = g.axes, g.points
    centre = c[:, 0]
    size = p.shape[-1]
    # Shoulder: turning joint 1 back must leave the point at its distance along axis 2.
    offset = float(a2 @ (centre - o1))
    from_axis = p - o1[:, None]
    middle, half = two_angles(a1, a2, from_axis, np.full(size, offset))
    up = g.upward(0)
    ahead = up * (1.0 if offset > -1e-9 else -1.0) * np.array([1.0, -1.0])[:, None]  # left, right
    q1 = wrapped(ahead * half - middle)
    unturned = rotate(a1, -q1, np.repeat(from_axis[:, None], 2, axis=1))
    # Elbow: a two-link mechanism in the plane square to axes 2 and 3.
    to_point = (unturned - _column(o2 - o1))[:, :, None]
    bend_sign = (up * ahead)[:, None] * np.array([1.0, -1.0])[None, :, None]  # elbow up, down
    q2, bend = planar(a2, across(o3 - o2, a2), across(centre - o3, a2), to_point, bend_sign)
    joints = np.empty((3, 2, 2, size))
    joints[0], joints[1], joints[2] = q1[:, None], wrapped(q2), wrapped(np.sign(a2 @ a3) * bend)
    return joints.reshape(3, 4, size)


def _rrr_parallel(g: Geometry, c: Array, p: Array) -> Array:
    """1 and 2 parallel: their common direction measures joint 3 alone; then two links in a plane."""
    (a1, a2, a3), (o1, o2, o3) = g.axes, g.points
    q3 = _both(*two_angles(a3, a1, c - o3[:, None], dot(a1, p - o3[:, None])))
    x = _about(a3, o3, q3, c[:, None])
    second = x - _column(o2)
    second = second - np.einsum("i,...->i...", a1, dot(a1, second))
    target = (p - o1[:, None])[:, None, None]
    sign = np.array([1.0, -1.0])[None, :, None]
    q1, q2 = planar(a1, across(o2 - o1, a1), second[:, :, None], target, sign)
    joints = np.empty((3, *q1.shape))
    joints[0], joints[1], joints[2] = q1, np.sign(a1 @ a2) * q2, q3[:, None]
    return joints.reshape(3, 4, -1)


def _rrr_meeting(g: Geometry, meeting: Array, c: Array, p: Array) -> Array:
    """1 and 2 meet: the distance from there measures joint 3 alone; then two turns about one point."""
    a3, o3 = g.axes[2], g.points[2]
    v = c - o3[:, None]
    rest = float(np.sum((o3 - meeting) ** 2))
    distance = (_square_sum(p - meeting[:, None]) - _square_sum(v) - rest) / 2.0
    q3 = _both(*two_angles(a3, o3 - meeting, v, distance))
    start = _about(a3, o3, q3, c[:, None]) - _column(meeting)
    end = np.broadcast_to((p - meeting[:, None])[:, None], start.shape)
    q1, q2 = two_turns(g.axes[0], g.axes[1], start, end)
    joints = np.empty((3, *q1.shape))  # joint, sign of 2, sign of 3, pose
    joints[0], joints[1], joints[2] = q1, q2, q3
    return joints.transpose(0, 2, 1, 3).reshape(3, 4, -1)


def _plane(vectors: Array, axis: Array, v: Array) -> Array:
    """Coefficients (k, 2, N) of cos and sin in vectors (k, 3) . Rot(axis, angle) v, v (3, N)."""
    square = v - np.einsum("i,...->i...", axis, dot(axis, v))
    turned = np.stack(
        [
            axis[1] * v[2] - axis[2] * v[1],
            axis[2] * v[0] - axis[0] * v[2],
            axis[0] * v[1] - axis[1] * v[0],
        ]
    )
    return np.stack([vectors @ square, vectors @ turned], axis=1)


def _along(vectors: Array, axis: Array, v: Array) -> Array:
    """What is constant (k, N) in vectors (k, 3) . Rot(axis, angle) v."""
    return np.asarray((vectors @ axis)[:, None] * dot(axis, v))


def _rrr_skew(g: Geometry, c: Array, p: Array) -> Array:
    """No two neighbours special: E_3 c and E_1^-1 p have the same place along axis 2 and distance from it."""
    (a1, a2, a3), (o1, o2, o3) = g.axes, g.points
    v, w = c - o3[:, None], p - o1[:, None]
    out, back = np.stack([a2, o3 - o2]), np.stack([a2, o1 - o2])
    right = np.stack(
        [
            np.broadcast_to(a2 @ (o1 - o3), p.shape[1:]),
            (_square_sum(w) - _square_sum(v) + np.sum((o1 - o2) ** 2) - np.sum((o3 - o2) ** 2)) / 2.0,
        ]
    )
    right = right + _along(back, a1, w) - _along(out, a3, v)
    # The second equation is a length squared: brought to the size of the first.
    scale = np.array([1.0, 1.0 / g.length])[:, None, None]
    first, second = _plane(out, a3, v) * scale, -_plane(back, -a1, w) * scale
    q3, q1 = two_circles(first, second, right * scale[:, 0])
    x = _about(a3, o3, q3, c[:, None])
    y = _about(a1, o1, -q1, p[:, None])
    q2 = angle_about(a2, x - _column(o2), y - _column(o2))
    return np.stack([q1, q2, q3])


def _ppp(g: Geometry, c: Array, p: Array) -> Array:
    travel: Array = np.linalg.inv(g.axes.T) @ (p - c)
    return travel[:, None]


def _ppr(g: Geometry, c: Array, p: Array) -> Array:
    """The normal of the two slides measures joint 3 alone."""
    a3, o3 = g.axes[2], g.points[2]
    normal = np.cross(g.axes[0], g.axes[1])
    q3 = _both(*two_angles(a3, normal, c - o3[:, None], dot(normal, p - o3[:, None])))
    travel = p[:, None] - _about(a3, o3, q3, c[:, None])
    slides = np.linalg.pinv(g.axes[:2].T)
    return np.concatenate([np.einsum("ij,j...->i...", slides, travel), q3[None]])


def _prp(g: Geometry, c: Array, p: Array) -> Array:
    """Place along axis 2 leaves a line of the two travels, distance from it two points on that line."""
    (a1, a2, a3), o2 = g.axes, g.points[1]
    alpha, beta = float(a2 @ a3), float(a2 @ a1)
    size = alpha * alpha + beta * beta
    wanted = dot(a2, p - c)
    q1, q3 = beta * wanted / size, alpha * wanted / size  # the point of the line nearest to zero travel
    # Along (q1, q3) = (.., ..) + t (alpha, -beta): |c + q3 a3 - o2|^2 = |p - q1 a1 - o2|^2, a quadratic in t.
    x, y = c + a3[:, None] * q3 - o2[:, None], p - a1[:, None] * q1 - o2[:, None]
    u, v = -beta * a3, -alpha * a1  # what t adds to x and y
    t = _quadratic(u @ u - v @ v, 2.0 * (u @ x - v @ y), _square_sum(x) - _square_sum(y))
    q1, q3 = q1 + alpha * t, q3 - beta * t
    x = c[:, None] + _column(a3) * q3 - _column(o2)
    y = p[:, None] - _column(a1) * q1 - _column(o2)
    return np.stack([q1, angle_about(a2, x, y), q3])


def _quadratic(a: Array, b: Array, c: Array) -> Array:
    """Both roots (2, ...) of a t^2 + b t + c, the larger first; their middle where they are complex. One that runs off
    to infinity as a vanishes is given as the other one.
    """
    a, b, c = np.broadcast_arrays(a, b, c)
    root = np.sqrt(np.maximum(b * b - 4.0 * a * c, 0.0))
    half = -(b + np.where(b < 0, -root, root)) / 2.0
    small = c / np.where(half == 0.0, 1.0, half)
    linear = np.abs(a) <= 1e-14 * np.abs(half)
    large = np.where(linear, small, half / np.where(a == 0.0, 1.0, a))
    small = np.where(b * b < 4.0 * a * c, large, np.where(half == 0.0, large, small))
    return np.stack([np.maximum(small, large), np.minimum(small, large)])


def _rpr(g: Geometry, c: Array, p: Array) -> Array:
    """E_3 c and E_1^-1 p have the same place in the plane square to the slide."""
    (a1, a2, a3), (o1, _, o3) = g.axes, g.points
    normal = np.linalg.svd(a2[None])[2][1:]  # two directions square to the slide
    v, w = c - o3[:, None], p - o1[:, None]
    right = (normal @ (o1 - o3))[:, None] + _along(normal, a1, w) - _along(normal, a3, v)
    q3, q1 = two_circles(_plane(normal, a3, v), -_plane(normal, -a1, w), right)
    x, y = _about(a3, o3, q3, c[:, None]), _about(a1, o1, -q1, p[:, None])
    return np.stack([q1, dot(a2, y - x), q3])


def _rpr_square(g: Geometry, c: Array, p: Array) -> Array:
    """The slide does not move along axis 1: that place measures joint 3 alone; the other direction joint 1."""
    (a1, a2, a3), (o1, _, o3) = g.axes, g.points
    q3 = _both(*two_angles(a3, a1, c - o3[:, None], dot(a1, p - o3[:, None])))
    x = _about(a3, o3, q3, c[:, None])
    across_both = np.cross(a1, a2)
    from_axis = np.broadcast_to((p - o1[:, None])[:, None], (3, *q3.shape))
    middle, half = two_angles(-a1, across_both, from_axis, dot(across_both, x - _column(o1)))
    q1 = np.stack([middle + half, middle - half], axis=1)  # sign of 3, sign of 1
    y = _about(a1, o1, -q1, p[:, None, None])
    q2 = dot(a2, y - x[:, :, None])
    return np.stack([q1, q2, np.broadcast_to(q3[:, None], q1.shape)]).reshape(3, 4, -1)


def _prr_parallel(g: Geometry, c: Array, p: Array) -> Array:
    """Parallel axes after the slide: it alone moves along them; then two links in a plane."""
    (a1, a2, a3), (_, o2, o3) = g.axes, g.points
    q1 = dot(a2, p - c) / float(a2 @ a1)
    target = p - a1[:, None] * q1 - o2[:, None]
    second = c - o3[:, None]
    second = second - np.einsum("i,...->i...", a2, dot(a2, second))
    sign = np.array([1.0, -1.0])[:, None]
    q2, bend = planar(a2, across(o3 - o2, a2), second[:, None], target[:, None], sign)
    return np.stack([np.broadcast_to(q1, q2.shape), q2, np.sign(a2 @ a3) * bend])


def _prr_square(g: Geometry, c: Array, p: Array) -> Array:
    """The slide does not move along axis 2: that place measures joint 3 alone; the distance from axis 2 the slide."""
    (a1, a2, a3), (_, o2, o3) = g.axes, g.points
    q3 = _both(*two_angles(a3, a2, c - o3[:, None], dot(a2, p - o3[:, None])))
    x = _about(a3, o3, q3, c[:, None]) - _column(o2)
    y = np.broadcast_to((p - o2[:, None])[:, None], x.shape)
    q1 = _quadratic(np.array(1.0), -2.0 * dot(a1, y), _square_sum(y) - _square_sum(x))  # (sign, sign of 3, N)
    q2 = angle_about(a2, np.broadcast_to(x[:, None], (3, *q1.shape)), y[:, None] - a1[:, None, None, None] * q1)
    joints = np.stack([q1, q2, np.broadcast_to(q3, q1.shape)])
    return joints.transpose(0, 2, 1, 3).reshape(3, 4, -1)


def _prr(g: Geometry, c: Array, p: Array) -> Array:
    """The place along axis 2 gives the slide by the angle of joint 3, the distance from axis 2 that angle."""
    (a1, a2, a3), (_, o2, o3) = g.axes, g.points
    lean = float(a2 @ a1)
    v = c - o3[:, None]
    # q1 = travel - (k0 + k . circle) / lean, circle = (cos q3, sin q3)
    k = _plane(a2[None], a3, v)[0] / lean
    travel = (dot(a2, p - o3[:, None]) - _along(a2[None], a3, v)[0]) / lean
    d = _plane((o3 - o2)[None], a3, v)[0]
    constant = _square_sum(v) + np.sum((o3 - o2) ** 2) + 2.0 * _along((o3 - o2)[None], a3, v)[0]
    y = p - o2[:, None] - a1[:, None] * travel  # y + a1 (k . circle) is E_1^-1 p from axis 2
    ky = dot(a1, y)
    squares = k[0] * k[0] - k[1] * k[1]
    angle = trigonometric_roots(
        np.broadcast_to(constant - _square_sum(y) - (k[0] ** 2 + k[1] ** 2) / 2.0, p.shape[1:]),
        2.0 * (d[0] - ky * k[0]),
        2.0 * (d[1] - ky * k[1]),
        np.broadcast_to(-squares / 2.0, p.shape[1:]),
        np.broadcast_to(-k[0] * k[1], p.shape[1:]),
    )
    q1 = travel - (k[0] * np.cos(angle) + k[1] * np.sin(angle))
    x = _about(a3, o3, angle, c[:, None]) - _column(o2)
    target = p[:, None] - _column(a1) * q1 - _column(o2)
    return np.stack([q1, angle_about(a2, x, target), angle])
