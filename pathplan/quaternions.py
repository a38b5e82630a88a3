"""Unit quaternions (w, x, y, z) of rotation matrices and back, over a batch.

A matrix gives the four columns of 4 q q^T. The longest of them is normalised (Shepperd 1978 chooses by the same pivot),
which is accurate at every angle; the trace formula is not near a half turn.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["angles_between", "quaternion_product", "quaternions", "rotations", "steady_quaternions"]

Array = NDArray[np.float64]


def quaternions(rotation: Array) -> Array:
    """Unit quaternions (N, 4) of rotation matrices (N, 3, 3), of either sign."""
    r = rotation
    diagonal = np.einsum("nii->ni", r)
    trace = diagonal.sum(axis=1)
    outer = np.empty((len(r), 4, 4))  # 4 q q^T
    outer[:, 0, 0] = 1.0 + trace
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        outer[:, i + 1, i + 1] = 1.0 + 2.0 * diagonal[:, i] - trace
        outer[:, 0, i + 1] = outer[:, i + 1, 0] = r[:, k, j] - r[:, j, k]
        outer[:, j + 1, k + 1] = outer[:, k + 1, j + 1] = r[:, j, k] + r[:, k, j]
    pivot = np.argmax(np.einsum("nii->ni", outer), axis=1)
    found = outer[np.arange(len(r)), pivot]
    return np.asarray(found / np.linalg.norm(found, axis=1, keepdims=True))


def steady_quaternions(rotation: Array, before: Array | None = None) -> Array:
    """Unit quaternions (N, 4) of rotation matrices (N, 3, 3), without a change of sign from row to row.

    `before` (4,) is the quaternion of the row before the first; without one the first w is not negative.
    """
    q = quaternions(rotation)
    start = q[0] if before is None else before
    if before is None and q[0, 0] < 0:
        start = -start
    towards = np.einsum("ni,ni->n", q, np.vstack([start, q[:-1]]))
    return np.asarray(q * np.cumprod(np.where(towards < 0, -1.0, 1.0))[:, None])


def rotations(quaternion: Array) -> Array:
    """Rotation matrices (N, 3, 3) of quaternions (N, 4) of any length above zero."""
    w, x, y, z = (quaternion / np.linalg.norm(quaternion, axis=1, keepdims=True)).T
    rows = [
        [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
    ]
    return np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)


def angles_between(one: Array, other: Array) -> Array:
    """Angles (m,) in [0, pi] between orientations given as quaternions (m, 4) of any length."""
    one, other = (q / np.linalg.norm(q, axis=1, keepdims=True) for q in (one, other))
    apart = np.minimum(np.linalg.norm(one - other, axis=1), np.linalg.norm(one + other, axis=1))
    return np.asarray(4.0 * np.arcsin(np.minimum(apart / 2.0, 1.0)))


def quaternion_product(one: Array, other: Array) -> Array:
    """Products (m, 4) of quaternions (m, 4), either of which may be a single row: first `other`, then `one`."""
    a, b = (np.moveaxis(np.atleast_2d(q), -1, 0) for q in (one, other))
    product = [
        a[0] * b[0] - a[1] * b[1] - a[2] * b[2] - a[3] * b[3],
        a[0] * b[1] + a[1] * b[0] + a[2] * b[3] - a[3] * b[2],
        a[0] * b[2] - a[1] * b[3] + a[2] * b[0] + a[3] * b[1],
        a[0] * b[3] + a[1] * b[2] - a[2] * b[1] + a[3] * b[0],
    ]
    return np.stack(product, axis=-1)
