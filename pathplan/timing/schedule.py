"""Timing of a joint path by itself: `schedule` and the `Timing` it returns."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pathplan.errors import InputError
from pathplan.path.joint import JointPath
from pathplan.timing.motion import Motion, two_sided
from pathplan.timing.stretch import StretchTiming

Array = NDArray[np.float64]


class Timing:
    """When a joint path is where: joint positions and derivatives by time, from rest to rest."""

    __slots__ = ("_stretch",)

    def __init__(self, stretch: StretchTiming) -> None:
        self._stretch = stretch

    @property
    def duration(self) -> float:
        """s, not rounded to ticks."""
        return self._stretch.duration

    @property
    def path(self) -> JointPath:
        """The path that is timed."""
        return self._stretch.motion.path

    def path_parameter(self, t: ArrayLike) -> Array:
        """Path parameter s (len(t),) at times t in s; before 0 and after the duration the arm rests at the ends."""
        return self._stretch.parameter(np.atleast_1d(np.asarray(t, dtype=float)))

    def __call__(self, t: ArrayLike, derivative: int = 0) -> Array:
        """Joint positions, or their derivative (1 velocity, 2 acceleration, 3 jerk) at t (len(t),) -> (len(t), n).

        Before 0 and after the duration the arm rests: position of the end, derivatives zero. Raises InputError for
        another derivative.
        """
        if derivative not in (0, 1, 2, 3):
            raise InputError(f"timing: expected a derivative of 0, 1, 2 or 3, got {derivative!r}")
        times = np.atleast_1d(np.asarray(t, dtype=float))
        values = self._stretch.derivatives(times, derivative)[derivative]
        if derivative:
            values[(times < 0) | (times > self.duration)] = 0.0
        return values


def schedule(path: JointPath, *, velocity: ArrayLike, acceleration: ArrayLike, jerk: ArrayLike) -> Timing:
    """Near time-optimal timing of a joint path from rest to rest under limits of every joint.

    Parameters
    ----------
    path : JointPath
    velocity, acceleration, jerk
        Limits in rad (or m) and s: one number for all joints, one a joint (n,), or low and high a joint (n, 2).

    Returns
    -------
    Timing
        Its derivatives stay within the limits for all times, and its duration is near the least possible.

    Raises
    ------
    InputError
        For limits of the wrong shape, not finite, or not on both sides of zero.

    Notes
    -----
    Convex-concave sequential programming on b = (dtau/dt)^2: Verscheure et al., IEEE TAC 2009; Debrouwere et al.,
    IEEE T-RO 2013. See `pathplan.timing.fine`.
    """
    from pathplan.timing.solve import time_motions

    return Timing(time_motions([_plain_motion(path, velocity, acceleration, jerk)])[0])


def lower_bound(path: JointPath, *, velocity: ArrayLike, acceleration: ArrayLike, jerk: Any = None) -> float:
    """A duration that no motion along `path` from rest to rest can beat under these limits, s.

    The jerk limits are left out, which can only lower the bound; see `pathplan.timing.bound` for the argument.
    """
    from pathplan.timing.bound import bound_durations

    any_jerk = acceleration if jerk is None else jerk
    return float(bound_durations([_plain_motion(path, velocity, acceleration, any_jerk)])[0])


def _plain_motion(path: JointPath, velocity: ArrayLike, acceleration: ArrayLike, jerk: ArrayLike) -> Motion:
    if not isinstance(path, JointPath):
        raise InputError(f"schedule: expected a JointPath, got {type(path).__name__}")
    n = path.joints
    return Motion(
        path,
        np.eye(n),
        two_sided(velocity, n, "velocity"),
        two_sided(acceleration, n, "acceleration"),
        two_sided(jerk, n, "jerk"),
    )
