"""Canonical subproblems of inverse kinematics, least-squares forms, over a batch.

Paden 1986 and Kahan stated them; the least-squares forms and the names SP1, SP4 are those of Elias & Wen,
"Canonical Subproblems for Robot Inverse Kinematics", arXiv 2211.05737 (2022). Where there is no exact
answer each gives one that comes near. Vectors are (3, ...) with the batch behind; axes are constant unit
vectors (3,).
"""

from __future__ import annotations

import numpy as np

from pathplan.arm.model import Array

__all__ = [
    "angle_about",
    "cross",
    "dot",
    "planar",
    "rotate",
    "rotation_about",
    "trigonometric_roots",
    "two_angles",
    "two_circles",
    "two_link",
    "two_turns",
    "wrapped",
]

STRAIGHT = 1e-11  # sine of the bend below which two axes count as one line; the first of them then stays at zero


def dot(axis: Array, vector: Array) -> Array:
    """Product of a constant vector with (3, ...) vectors."""
    return axis[0] * vector[0] + axis[1] * vector[1] + axis[2] * vector[2]


def cross(axis: Array, vector: Array) -> Array:
    """Constant vector x (3, ...) vectors."""
    return np.stack(
        [
            axis[1] * vector[2] - axis[2] * vector[1],
            axis[2] * vector[0] - axis[0] * vector[2],
            axis[0] * vector[1] - axis[1] * vector[0],
        ]
    )


def rotate(axis: Array, angle: Array, vector: Array) -> Array:
    """Vectors (3, ...) turned about a constant axis by angles (...) (Rodrigues)."""
    c, s = np.cos(angle), np.sin(angle)
    along = dot(axis, vector) * (1.0 - c)
    return c * vector + s * cross(axis, vector) + np.stack([axis[0] * along, axis[1] * along, axis[2] * along])


def rotation_about(axis: Array, rotation: Array) -> Array:
    """Angle (...) about a constant axis that comes nearest to rotations (3, 3, ...) (rows, columns first).

    Maximises the trace of rotation^T Rot(axis, angle): exact where the rotation is about that axis. 0 where
    every angle comes equally near (a half turn about a line square to the axis).
    """
    skew = np.stack([rotation[2, 1] - rotation[1, 2], rotation[0, 2] - rotation[2, 0], rotation[1, 0] - rotation[0, 1]])
    trace = rotation[0, 0] + rotation[1, 1] + rotation[2, 2]
    along = sum(axis[i] * dot(axis, rotation[i]) for i in range(3))
    return np.arctan2(dot(axis, skew), trace - along)


def angle_about(axis: Array, start: Array, end: Array) -> Array:
    """SP1: angle (...) about `axis` that brings vectors `start` nearest to `end`; 0 where either lies along
    the axis."""
    turned, end_turned = cross(axis, start), cross(axis, end)
    sine = turned[0] * end[0] + turned[1] * end[1] + turned[2] * end[2]
    # start . end - (axis . start)(axis . end) would cancel for vectors that all but lie along the axis.
    cosine = turned[0] * end_turned[0] + turned[1] * end_turned[1] + turned[2] * end_turned[2]
    return np.arctan2(sine, cosine)


def two_angles(axis: Array, direction: Array, vector: Array, distance: Array) -> tuple[Array, Array]:
    """SP4: angles about `axis` after which direction . Rot(axis, angle) vector = distance.

    `direction` is a constant vector that is not along the axis, `vector` (3, ...), `distance` (...).
    Returns (middle, half): the two answers are middle + half and middle - half, half in [0, pi]. Nearest
    answer (half 0 or pi) where none is exact.
    """
    across = direction - axis * float(axis @ direction)
    length = float(np.linalg.norm(across))
    unit = across / length
    # The vector's part square to the axis, in coordinates (unit, axis x unit).
    u, v = dot(unit, vector), dot(np.cross(axis, unit), vector)
    wanted = (distance - float(axis @ direction) * dot(axis, vector)) / length
    rest = u * u + v * v - wanted * wanted
    return -np.arctan2(v, u), np.arctan2(np.sqrt(np.maximum(rest, 0.0)), wanted)


def two_link(first: float | Array, second: float | Array, reach: Array) -> Array:
    """Angle (...) in [0, pi] between two links, straight at 0, whose ends are `reach` apart; nearest if out
    of reach."""
    inner, outer = np.abs(first - second), first + second
    sine = np.sqrt(np.maximum((outer - reach) * (reach - inner), 0.0) * (outer + reach) * (reach + inner))
    return np.arctan2(sine, reach * reach - first * first - second * second)


def two_turns(first: Array, second: Array, start: Array, end: Array) -> tuple[Array, Array]:
    """SP2: angles (2, ...) with Rot(first, angle_1) Rot(second, angle_2) start = end, both answers.

    `start`, `end` (3, ...) of equal length; the axes pass through the origin and are not parallel.
    """
    middle, half = two_angles(second, first, start, dot(first, end))
    angle_2 = np.stack(np.broadcast_arrays(middle + half, middle - half))
    bent = rotate(second, angle_2, np.broadcast_to(start[:, None], (3, *angle_2.shape)))
    return angle_about(first, bent, np.broadcast_to(end[:, None], bent.shape)), angle_2


def planar(axis: Array, first: Array, second: Array, target: Array, sign: Array) -> tuple[Array, Array]:
    """Two links `first` (3,) and `second` (3, ...), square to `axis`, that end at `target` (3, ...).

    `sign` says which way the second link is bent about the axis. Returns the turn of the first link and of
    the second against it, both about `axis` and from where they stand at q = 0.
    """
    across = target - np.einsum("i,...->i...", axis, dot(axis, target))
    reach = np.sqrt(np.sum(across * across, axis=0))
    if second.ndim == 1:
        second = second.reshape(3, *(1,) * np.broadcast(reach, sign).ndim)
    length = np.sqrt(np.sum(second * second, axis=0))
    base = first.reshape(3, *(1,) * (second.ndim - 1))
    angle = sign * two_link(float(np.linalg.norm(first)), length, reach)
    bend = angle - angle_about(axis, np.broadcast_to(base, second.shape), second)
    link = np.broadcast_to(second, (3, *bend.shape))
    tip = base + rotate(axis, bend, link)
    return angle_about(axis, tip, np.broadcast_to(across, tip.shape)), bend


def two_circles(first: Array, second: Array, right: Array) -> tuple[Array, Array]:
    """SP6: angles (4, N) each with first @ (cos, sin)(angle_1) + second @ (cos, sin)(angle_2) = right.

    `first`, `second` (2, 2) or (2, 2, N), `right` (2, N). One angle is eliminated, in each row of the batch that
    whose matrix is the better conditioned; what is left is a trigonometric polynomial of degree two. A pair that is
    complex comes back as the angles at its real part.
    """
    size = right.shape[1]
    a = np.broadcast_to(first.reshape(2, 2, -1), (2, 2, size))
    b = np.broadcast_to(second.reshape(2, 2, -1), (2, 2, size))
    swap = _regularity(b) > _regularity(a)
    kept, gone = np.where(swap, a, b), np.where(swap, b, a)  # the angle of `gone` is eliminated
    determinant = gone[0, 0] * gone[1, 1] - gone[0, 1] * gone[1, 0]
    least = 1e-14 * np.sum(gone * gone, axis=(0, 1)) + 1e-100
    determinant = np.where(np.abs(determinant) < least, least, determinant)
    inverse = np.array([[gone[1, 1], -gone[0, 1]], [-gone[1, 0], gone[0, 0]]]) / determinant
    k = np.einsum("ijn,jn->in", inverse, right)
    h = np.einsum("ijn,jkn->ikn", inverse, kept)
    square = np.einsum("jin,jkn->ikn", h, h)
    angle = trigonometric_roots(
        np.sum(k * k, axis=0) - 1.0 + (square[0, 0] + square[1, 1]) / 2.0,
        -2.0 * np.sum(k * h[:, 0], axis=0),
        -2.0 * np.sum(k * h[:, 1], axis=0),
        (square[0, 0] - square[1, 1]) / 2.0,
        square[0, 1],
    )
    circle = np.stack([np.cos(angle), np.sin(angle)])
    other = k[:, None] - np.einsum("ijn,jbn->ibn", h, circle)
    eliminated = np.arctan2(other[1], other[0])
    return np.where(swap, angle, eliminated), np.where(swap, eliminated, angle)


def _regularity(matrix: Array) -> Array:
    """(N,) how far 2x2 matrices (2, 2, N) are from singular: determinant over squared size, at most 1/2."""
    size = np.sum(matrix * matrix, axis=(0, 1))
    determinant = matrix[0, 0] * matrix[1, 1] - matrix[0, 1] * matrix[1, 0]
    return np.asarray(np.abs(determinant) / np.where(size == 0.0, 1.0, size))


def trigonometric_roots(c0: Array, c1: Array, s1: Array, c2: Array, s2: Array) -> Array:
    """Angles (4, N) at which c0 + c1 cos + s1 sin + c2 cos 2 + s2 sin 2 is zero; complex roots by their real part.

    The tangent of the half angle, counted from where the polynomial is farthest from zero (there it would be
    infinite), makes a quartic; its roots are the eigenvalues of its companion matrix.
    """
    turns = np.arange(8)[:, None] * (np.pi / 4.0)
    values = np.abs(c0 + c1 * np.cos(turns) + s1 * np.sin(turns) + c2 * np.cos(2 * turns) + s2 * np.sin(2 * turns))
    shift = np.argmax(values, axis=0) * (np.pi / 4.0) - np.pi
    c, s = np.cos(shift), np.sin(shift)
    c1, s1 = c1 * c + s1 * s, s1 * c - c1 * s
    c, s = np.cos(2 * shift), np.sin(2 * shift)
    c2, s2 = c2 * c + s2 * s, s2 * c - c2 * s
    lead = c0 - c1 + c2
    lead = np.where(np.abs(lead) < 1e-200, 1.0, lead)
    companion = np.zeros((len(lead), 4, 4))
    companion[:, 1, 0] = companion[:, 2, 1] = companion[:, 3, 2] = 1.0
    rest = np.stack([c0 + c1 + c2, 2 * s1 + 4 * s2, 2 * c0 - 6 * c2, 2 * s1 - 4 * s2]) / lead
    companion[:, :, 3] = -rest.T
    tangent = np.linalg.eigvals(companion).T.astype(complex)
    with np.errstate(divide="ignore", invalid="ignore"):
        angle = np.nan_to_num(2.0 * np.arctan(tangent).real)
    for _ in range(2):  # Newton steps: where the root is real they end at rounding
        c, s, cc, ss = np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)
        value = c0 + c1 * c + s1 * s + c2 * cc + s2 * ss
        slope = s1 * c - c1 * s + 2.0 * (s2 * cc - c2 * ss)
        step = value / np.where(np.abs(slope) < 1e-100, np.inf, slope)
        angle = angle - np.where(np.abs(step) < 1e-3, step, 0.0)
    return angle + shift


def wrapped(angle: Array) -> Array:
    """Angles brought into (-pi, pi]; those already inside are returned unchanged to the last digit."""
    angle = angle - 2.0 * np.pi * np.round(angle / (2.0 * np.pi))
    return np.where(angle <= -np.pi, np.pi, angle)
