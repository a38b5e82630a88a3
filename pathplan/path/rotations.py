"""Rotations over a batch: matrix to rotation vector and back, by the shortest way.

Rotation vectors are axis times angle, angle in [0, pi]. The matrix is turned into a unit quaternion by its
largest component (Shepperd 1978), which is accurate at every angle; the trace formula is not near 0 and pi.
"""

from __future__ import annotations

import numpy as np

from pathplan.path.joint import Array
from pathplan.quaternions import quaternions

__all__ = ["cross", "exponential", "rotate", "rotation_vector", "turn_about"]


def rotation_vector(rotation: Array) -> Array:
    """Rotation vector (N, 3), angle in [0, pi], of rotation matrices (N, 3, 3)."""
    quaternion = quaternions(rotation)
    quaternion[quaternion[:, 0] < 0] *= -1.0
    sine = np.linalg.norm(quaternion[:, 1:], axis=1)
    angle = 2.0 * np.arctan2(sine, quaternion[:, 0])
    factor = np.where(sine > 1e-8, angle / np.maximum(sine, 1e-8), 2.0)  # below: angle = 2 sine to 1e-17
    return factor[:, None] * quaternion[:, 1:]


def turn_about(axis: Array, angle: Array) -> Array:
    """Rotation matrices (N, 3, 3) about unit axes (N, 3) by angles (N,); Rodrigues' formula."""
    x, y, z = axis.T
    zero = np.zeros_like(x)
    cross = np.stack([zero, -z, y, z, zero, -x, -y, x, zero], axis=1).reshape(-1, 3, 3)
    half = np.sin(angle / 2.0)
    return np.eye(3) + np.sin(angle)[:, None, None] * cross + 2.0 * (half * half)[:, None, None] * (cross @ cross)


def exponential(vector: Array) -> Array:
    """Rotation matrices (N, 3, 3) of rotation vectors (N, 3) of any length."""
    angle = np.linalg.norm(vector, axis=1)
    axis = vector / np.where(angle > 0, angle, 1.0)[:, None]
    return turn_about(axis, angle)


def rotate(rotation: Array, vectors: Array) -> Array:
    """Rotation matrices (N, 3, 3) applied to vectors (N, 3)."""
    return np.einsum("nij,nj->ni", rotation, vectors)


def cross(a: Array, b: Array) -> Array:
    """Cross product of vectors (N, 3); several times faster than numpy's on short batches."""
    return a[:, [1, 2, 0]] * b[:, [2, 0, 1]] - a[:, [2, 0, 1]] * b[:, [1, 2, 0]]
