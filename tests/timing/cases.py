"""The cast of the timing tests: joint paths with limits, degenerate ones included."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline

from pathplan.path.joint import JointPath
from pathplan.timing.motion import Motion, two_sided

Array = NDArray[np.float64]


class Case(NamedTuple):
    path: JointPath
    velocity: Array
    acceleration: Array
    jerk: Array


def straight(distance, velocity, acceleration, jerk) -> Case:
    """A straight line in joint space: all joints in proportion."""
    distance = np.atleast_1d(np.asarray(distance, dtype=float))
    length = float(np.linalg.norm(distance))
    path = JointPath.from_pieces([0.0, length], np.stack([distance / length, 0 * distance])[:, None, :])
    limits = (np.broadcast_to(np.asarray(x, dtype=float), distance.shape) for x in (velocity, acceleration, jerk))
    return Case(path, *limits)


def wavy(seed: int, points: int, joints: int = 6) -> Case:
    """A quintic spline through random points with random limits."""
    rng = np.random.default_rng(seed)
    places = rng.uniform(-1.2, 1.2, (points, joints))
    parameter = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(places, axis=0), axis=1))])
    degree = 5 if points > 5 else 3
    limits = (rng.uniform(low, high, joints) for low, high in ((2, 5), (8, 25), (60, 250)))
    return Case(JointPath(make_interp_spline(parameter, places, k=degree)), *limits)


def corner(delta: float = 0.1) -> Case:
    """Two lines joined by a quartic corner: the third derivative jumps where it begins and ends."""
    first = np.array([1, 0.3, 0, 0.5, 0, 0.2])
    second = np.array([0, 1, 0.4, -0.3, 0.6, 0.1])
    first, second = first / np.linalg.norm(first), second / np.linalg.norm(second)
    u = np.polynomial.Polynomial([-1.0, 1.0 / delta])  # of the place in the corner, -1 to 1
    ramp = np.polynomial.Polynomial([3 / 16, 1 / 2, 3 / 8, 0, -1 / 16])
    leave, join = ramp(-u).coef, ramp(u).coef
    pieces = np.zeros((5, 3, 6))
    pieces[-1, 0], pieces[-2, 0] = -first, first
    pieces[::-1, 1] = delta * (np.outer(join, second) - np.outer(leave, first))
    pieces[-1, 2], pieces[-2, 2] = delta * second, second
    path = JointPath.from_pieces([0.0, 1.0 - delta, 1.0 + delta, 2.0], pieces)
    return Case(path, np.full(6, 3.0), np.full(6, 15.0), np.full(6, 150.0))


CAST = {
    "wavy": wavy(1, 9),
    "four points": wavy(2, 4),
    "corner": corner(),
    "small corner": corner(0.004),
    "one joint": straight([0.7], 2.0, 9.0, 80.0),
    "tiny": straight([1e-6, -2e-6], 1.0, 4.0, 30.0),
    "never at speed": straight([0.05, 0.4, -0.2], 3.0, 12.0, 40.0),
    "long": straight([30.0, 4.0], 0.5, 6.0, 90.0),
    "one joint rests": straight([0.0, 1.0, 0.0], 2.0, 9.0, 80.0),
}


def motion_of(case: Case, **more) -> Motion:
    n = case.path.joints
    limits = (two_sided(x, n, "limit") for x in case[1:])
    return Motion(case.path, np.eye(n), *limits, **more)


def seven_phases(distance: float, velocity: float, acceleration: float, jerk: float) -> float:
    """Least time from rest to rest of one axis: closed form of the seven-phase (double-S) motion.

    Biagiotti & Melchiorri 2008, sec. 3.4.
    """
    if velocity * jerk < acceleration**2:
        to_speed = 2 * np.sqrt(velocity / jerk)
    else:
        to_speed = acceleration / jerk + velocity / acceleration
    cruise = distance / velocity - to_speed
    if cruise >= 0:
        return 2 * to_speed + cruise
    if distance >= 2 * acceleration**3 / jerk**2:
        ramp = acceleration / jerk
        return ramp + 2 * np.sqrt(ramp**2 / 4 + distance / acceleration)
    return 4 * np.cbrt(distance / (2 * jerk))
