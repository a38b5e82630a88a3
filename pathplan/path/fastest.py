"""An estimate of the least time of sampled joint paths by velocity and acceleration limits, to compare paths with.

With b = (ds/dt)^2 acceleration is q' b' / 2 + q'' b. Curvature may take up to a share of it, which walls b; what it
leaves bounds b', so that one pass from either end finds the fastest way to start and to stop. Exact on straight paths;
on curved ones longer than the true optimum (Bobrow, Dubowsky & Gibson 1985) by a tenth or two, all alike.
"""

from __future__ import annotations

import numpy as np

from pathplan.arm import Arm
from pathplan.path.joint import Array

__all__ = ["least_time", "limited_rows"]

_CURVED = 0.6  # of an acceleration limit, that curvature may take
_STILL = 1e-9  # q' below this (relative to its limit) does not limit b


def limited_rows(arm: Arm) -> tuple[Array, Array, Array, Array]:
    """Matrix (R, n) of the rows of an arm whose velocity is limited, and their velocity, acceleration and jerk (R,),
    the lower of both ways.
    """
    moving = np.isfinite(arm.limits.velocity).any(axis=1)
    limits = (rows[moving] for rows in (arm.limits.velocity, arm.limits.acceleration, arm.limits.jerk))
    velocity, acceleration, jerk = (np.abs(rows).min(axis=1) for rows in limits)
    return arm.limits.matrix[moving], velocity, acceleration, jerk


def least_time(s: Array, rows: Array, velocity: Array, acceleration: Array) -> float:
    """s, rest to rest, of a path with limited rows (P, R) at parameters s (P,), P at least 3.

    velocity and acceleration (R,), the same both ways.
    """
    h = np.diff(s)
    slope = np.diff(rows, axis=0) / h[:, None]
    bend = np.abs(np.diff(slope, axis=0)) / (0.5 * (h[1:] + h[:-1]))[:, None] / acceleration
    bend = np.maximum(np.concatenate([bend[:1], bend]), np.concatenate([bend, bend[-1:]]))
    slope = np.abs(slope)
    walls = 1.0 / np.maximum((slope / velocity).max(axis=1), _STILL) ** 2
    walls = np.minimum(walls, _CURVED / np.maximum(bend.max(axis=1), _STILL))
    rise = 2.0 * h * ((1.0 - bend * walls[:, None]) / np.maximum(slope / acceleration, _STILL)).min(axis=1)
    top = np.pad(np.minimum(walls[1:], walls[:-1]), 1)
    for i in range(len(h)):
        top[i + 1] = min(top[i + 1], top[i] + rise[i])
    for i in range(len(h) - 1, -1, -1):
        top[i] = min(top[i], top[i + 1] + rise[i])
    root = np.sqrt(top)
    return float((2.0 * h / (root[1:] + root[:-1])).sum())
