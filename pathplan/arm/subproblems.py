"""Canonical subproblems of inverse kinematics, least-squares forms, over a batch.

Paden 1986 and Kahan stated them; the least-squares forms and the names SP1, SP4 are those of Elias & Wen,
"Canonical Subproblems for Robot Inverse Kinematics", arXiv 2211.05737 (2022). Where there is no exact
answer each gives the one that comes nearest. Vectors are (3, ...) with the batch behind; axes are constant
unit vectors (3,).
"""

from __future__ import annotations

import numpy as np

from pathplan.arm.model import Array

__all__ = ["angle_about", "cross", "dot", "rotate", "rotation_about", "two_angles", "two_link"]


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


def two_link(first: float, second: float, reach: Array) -> Array:
    """Angle (...) in [0, pi] between two links, straight at 0, whose ends are `reach` apart; nearest if out
    of reach."""
    inner, outer = abs(first - second), first + second
    sine = np.sqrt(np.maximum((outer - reach) * (reach - inner), 0.0) * (outer + reach) * (reach + inner))
    return np.arctan2(sine, reach * reach - first * first - second * second)
