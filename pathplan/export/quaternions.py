"""Unit quaternions (w, x, y, z) of rotation matrices and back, over the rows of a table."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["quaternions_of", "rotations_of"]

Array = NDArray[np.float64]


def quaternions_of(rotations: Array, before: Array | None = None) -> Array:
    """Unit quaternions (N, 4) of rotation matrices (N, 3, 3), without a change of sign from row to row.

    `before` (4,) is the quaternion of the row before the first; without one the first w is not negative.
    Of the four columns of 4 q q^T that the matrix gives, the longest one is normalised (Shepperd 1978 chooses
    by the same pivot), so no row suffers cancellation.
    """
    r = rotations
    outer = np.empty((len(r), 4, 4))  # 4 q q^T
    trace = r[:, 0, 0] + r[:, 1, 1] + r[:, 2, 2]
    outer[:, 0, 0] = 1 + trace
    for i, j, k in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        outer[:, i + 1, i + 1] = 1 + 2 * r[:, i, i] - trace
        outer[:, 0, i + 1] = outer[:, i + 1, 0] = r[:, k, j] - r[:, j, k]
        outer[:, i + 1, j + 1] = outer[:, j + 1, i + 1] = r[:, i, j] + r[:, j, i]
    pivot = np.argmax(np.einsum("nii->ni", outer), axis=1)
    q = outer[np.arange(len(r)), pivot]
    q /= np.linalg.norm(q, axis=1, keepdims=True)
    start = q[0] if before is None else before
    if before is None and q[0, 0] < 0:
        start = -start
    towards = np.einsum("ni,ni->n", q, np.vstack([start, q[:-1]]))
    return q * np.cumprod(np.where(towards < 0, -1.0, 1.0))[:, None]


def rotations_of(quaternions: Array) -> Array:
    """Rotation matrices (N, 3, 3) of quaternions (N, 4); lengths near 1 are made 1."""
    q = quaternions / np.linalg.norm(quaternions, axis=1, keepdims=True)
    w, x, y, z = q.T
    rows = [
        [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
    ]
    return np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)
