"""How the tool moves when the joints do."""

from __future__ import annotations

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.kinematics import spatial_axes
from pathplan.path.joint import Array

__all__ = ["tool_derivatives", "tool_turning"]


def tool_derivatives(arm: Arm, q: Array, q1: Array, q2: Array) -> tuple[Array, Array]:
    """First and second derivative (N, 3) of the tool centre point, from q, q', q'' (N, n), by the same
    parameter.

    With spatial axes S_i of the joints, V = S q' and V' = S q'' + sum ad(V_{i-1}) S_i q'_i (Murray, Li &
    Sastry 1994, ch. 3); then x' = v + w x p and x'' = v' + w' x p + w x x'.
    """
    axes, point = spatial_axes(arm, q)
    v, w = np.zeros((3, len(q))), np.zeros((3, len(q)))
    v1, w1 = np.zeros((3, len(q))), np.zeros((3, len(q)))
    for i in arm.chain.path:
        sv, sw = axes[i, :3], axes[i, 3:]
        v1 += sv * q2[:, i] + (_cross(w, sv) + _cross(v, sw)) * q1[:, i]
        w1 += sw * q2[:, i] + _cross(w, sw) * q1[:, i]
        v = v + sv * q1[:, i]
        w = w + sw * q1[:, i]
    first = v + _cross(w, point)
    second = v1 + _cross(w1, point) + _cross(w, first)
    return first.T, second.T


def tool_turning(arm: Arm, q: Array, q1: Array) -> Array:
    """Derivative (N, 3) of the tool's orientation, rad about the base axes per parameter, from q, q' (N, n)."""
    axes, _ = spatial_axes(arm, q)
    turning = np.zeros((3, len(q)))
    for i in arm.chain.path:
        turning += axes[i, 3:] * q1[:, i]
    return turning.T


def _cross(a: Array, b: Array) -> Array:
    """Cross product over the leading index of two (3, N) arrays."""
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])
