"""What a drive can still give at a speed."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pathplan.arm.model import Array, Joint

__all__ = ["falls_with_speed", "peak_torque_share"]


def falls_with_speed(joints: Sequence[Joint]) -> NDArray[np.bool_]:
    """(n,) joints whose peak torque depends on their speed."""
    return np.array([joint.torque_corner is not None for joint in joints], dtype=bool)


def peak_torque_share(joints: Sequence[Joint], velocity: Array) -> Array:
    """The share (N, n) of its peak torque that each drive still gives at joint velocities (N, n), rad/s or m/s.

    1 up to the corner speed, from there on a straight line to `torque_at_velocity` at the velocity limit, the same
    either way; beyond the velocity limit what there is at it.
    """
    share = np.ones(np.shape(velocity))
    for i in np.flatnonzero(falls_with_speed(joints)).tolist():
        joint = joints[i]
        if joint.torque is None or joint.torque_corner is None or joint.torque_at_velocity is None:
            continue
        speeds = (joint.torque_corner, joint.velocity)
        share[:, i] = np.interp(np.abs(velocity[:, i]), speeds, (1.0, joint.torque_at_velocity / joint.torque))
    return share
