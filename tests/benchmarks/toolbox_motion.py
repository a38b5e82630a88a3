"""What one would otherwise do with the toolbox alone: its multi-segment joint motion, slowed until it keeps the limits.

`roboticstoolbox.mstraj` joins straight joint segments by quintic blends of one acceleration time and knows speed limits
only. Its best setting is searched for here, and the motion is then slowed in time until the finite differences of its
positions keep velocity, acceleration and jerk limits: python -m tests.benchmarks.toolbox_motion
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_STEP = 0.002  # s
_BLEND_TIMES = np.geomspace(0.02, 1.0, 18)  # s, times tried for the blends
_SPEEDS = (1.0, 0.8, 0.6, 0.45, 0.3)  # shares of the velocity limits tried


def toolbox_duration(waypoints: Array, velocity: Array, acceleration: Array, jerk: Array) -> float:
    """The shortest duration, s, that the toolbox's motion through waypoints (m, n) reaches under the limits (n,)."""
    from roboticstoolbox import mstraj

    best = np.inf
    for blend in _BLEND_TIMES:
        for share in _SPEEDS:
            try:
                motion = mstraj(np.asarray(waypoints), dt=_STEP, tacc=blend, qdmax=velocity * share)
            except ValueError:  # a blend longer than its segment
                continue
            best = min(best, slowed_duration(np.asarray(motion.q), velocity, acceleration, jerk))
    if not np.isfinite(best):
        raise ValueError("the toolbox finds no motion through these waypoints")
    return best


def slowed_duration(q: Array, velocity: Array, acceleration: Array, jerk: Array) -> float:
    """Duration of rows q (N, n) at the step, slowed until their differences, padded with rest, keep the limits."""
    padded = np.concatenate([np.repeat(q[:1], 4, axis=0), q, np.repeat(q[-1:], 4, axis=0)])
    factor = 0.0
    for order, limit in enumerate((velocity, acceleration, jerk), start=1):
        share = (np.abs(np.diff(padded, order, axis=0)).max(axis=0) / _STEP**order / limit).max()
        factor = max(factor, share ** (1 / order))
    return float(factor * (len(q) - 1) * _STEP)


if __name__ == "__main__":
    rng = np.random.default_rng(0)
    points = rng.uniform(-1.0, 1.0, (5, 6))
    v, a, j = np.full(6, 3.0), np.full(6, 15.0), np.full(6, 150.0)
    print(f"five waypoints, six axes: {toolbox_duration(points, v, a, j):.3f} s with the toolbox alone")
