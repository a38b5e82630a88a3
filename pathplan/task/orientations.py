"""Orientations as quaternions (w, x, y, z) over a batch."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["angles_between", "quaternion_product", "quaternions", "rotations"]

Array = NDArray[np.float64]


def quaternions(rotation: Array) -> Array:
    """Unit quaternions (m, 4) of rotation matrices (m, 3, 3), each of the sign that is nearer to the one before.

    By the largest component (Shepperd 1978), which is accurate at every angle.
    """
    r = rotation
    diagonal = np.einsum("nii->ni", r)
    trace = diagonal.sum(axis=1)
    products = np.empty((len(r), 4, 4))  # four times the products of the components
    products[:, 0, 0] = 1.0 + trace
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        products[:, i + 1, i + 1] = 1.0 + 2.0 * diagonal[:, i] - trace
        products[:, 0, i + 1] = products[:, i + 1, 0] = r[:, k, j] - r[:, j, k]
        products[:, j + 1, k + 1] = products[:, k + 1, j + 1] = r[:, j, k] + r[:, k, j]
    largest = np.argmax(np.einsum("nii->ni", products), axis=1)
    quaternion = products[np.arange(len(r)), largest]
    quaternion /= np.linalg.norm(quaternion, axis=1, keepdims=True)
    turned = np.einsum("ij,ij->i", quaternion[1:], quaternion[:-1]) < 0.0
    sign = np.where(np.cumsum(np.append(False, turned)) % 2 == 1, -1.0, 1.0)
    return quaternion * sign[:, None]


def rotations(quaternion: Array) -> Array:
    """Rotation matrices (m, 3, 3) of quaternions (m, 4) of any length above zero."""
    w, x, y, z = (quaternion / np.linalg.norm(quaternion, axis=1, keepdims=True)).T
    rows = [
        [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
    ]
    return np.array(rows).transpose(2, 0, 1)


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
