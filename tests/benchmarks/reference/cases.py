"""The fixed joint paths and limits that the referee of the timing room is solved for.

Everything here is made from seeds and closed formulas with numpy and scipy alone, so that the referee
shares no code with the planner. A path is a scipy BSpline q(s), s in [0, length], in rad.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline


Range = tuple[float, float]


@dataclass(frozen=True)
class Case:
    """One path with its limits: spline (-> rad), limits (n,) each in rad/s, rad/s^2, rad/s^3."""

    name: str
    about: str
    spline: BSpline
    velocity: np.ndarray
    acceleration: np.ndarray
    jerk: np.ndarray


def through_waypoints(seed: int, count: int, amplitude: float = 1.2, joints: int = 6) -> BSpline:
    """Spline through random waypoints, parameter = accumulated chord in joint space (rad).

    Quintic from six waypoints on; fewer are joined by the one polynomial of degree count - 1.
    """
    points = np.random.default_rng(seed).uniform(-amplitude, amplitude, (count, joints))
    chords = np.linalg.norm(np.diff(points, axis=0), axis=1)
    return make_interp_spline(np.concatenate([[0.0], np.cumsum(chords)]), points, k=min(5, count - 1))


def straight(start: np.ndarray, end: np.ndarray) -> BSpline:
    """Straight joint line written as a quintic spline of one span, s from 0 to its joint-space length."""
    length = float(np.linalg.norm(end - start))
    # A Bezier polygon with equally spaced points on the line is the line at constant speed.
    share = np.linspace(0.0, 1.0, 6)[:, None]
    return BSpline(np.repeat([0.0, length], 6), start + share * (end - start), 5)


def near_corner(start: np.ndarray, corner: np.ndarray, end: np.ndarray, reach: float) -> BSpline:
    """Line, C2 quartic blend within `reach` (rad) before and after the corner, line.

    With unit directions u, w and x = s - s_corner the path is corner + u x + (w - u) r(x), where r replaces
    the ramp max(x, 0) by the double integral of the bump r'' = 3 (1 - (x/reach)^2) / (4 reach); r'' vanishes
    at both ends of the blend, so q is C2 there, and r''' jumps by 3 / (2 reach^2).
    """
    before, after = float(np.linalg.norm(corner - start)), float(np.linalg.norm(end - corner))
    u, w = (corner - start) / before, (end - corner) / after

    def position(s: np.ndarray) -> np.ndarray:
        x = s - before
        z = np.clip(x / reach, -1.0, 1.0)
        # r = reach (3/16 + z/2 + 3 z^2/8 - z^4/16) inside, 0 before and x after
        ramp = np.where(x >= reach, x, reach * (3 / 16 + z / 2 + 3 * z**2 / 8 - z**4 / 16))
        return corner + u * x[:, None] + (w - u) * ramp[:, None]

    a, b, total = before - reach, before + reach, before + after
    knots = np.concatenate([[0.0] * 5, [a] * 2, [b] * 2, [total] * 5])
    # The path lies in the span of these nine B-splines, so interpolation at nine points returns it exactly.
    greville = np.array([knots[i + 1 : i + 5].mean() for i in range(9)])
    return make_interp_spline(greville, position(greville), k=4, t=knots)


def _limits(seed: int, velocity: Range, acceleration: Range, jerk: Range) -> tuple[np.ndarray, ...]:
    rng = np.random.default_rng(1000 + seed)
    return tuple(np.round(rng.uniform(*span, 6), 2) for span in (velocity, acceleration, jerk))


WIDE = ((2.0, 5.0), (8.0, 25.0), (60.0, 250.0))  # ranges of velocity, acceleration, jerk
SLOW = ((2.0, 2.6), (18.0, 25.0), (180.0, 250.0))
SOFT = ((4.0, 5.0), (16.0, 25.0), (60.0, 90.0))
HARD = ((4.0, 5.0), (8.0, 12.0), (180.0, 250.0))

SPLINES = (
    ("spline_4", "4 waypoints, one cubic, mixed limits", 4, 4, WIDE),
    ("spline_5", "5 waypoints, one quartic, jerk sets the pace", 5, 5, SOFT),
    ("spline_6", "6 waypoints, one quintic, mixed limits", 6, 6, WIDE),
    ("spline_7_soft", "7 waypoints, jerk sets the pace", 7, 7, SOFT),
    ("spline_8_slow", "8 waypoints, velocity sets the pace", 8, 8, SLOW),
    ("spline_9_hard", "9 waypoints, acceleration sets the pace", 9, 9, HARD),
    ("spline_10", "10 waypoints, mixed limits", 10, 10, WIDE),
)


def liu_lai_wu() -> Case:
    """Six joints from Liu, Lai & Wu 2013 (after Lin, Chang & Luh 1983), as in the project's check values.

    Alone the joints need 3.268, 2.000, 2.059, 4.000, 2.575, 3.515 s; joint 4 sets the pace of the straight line.
    """
    start, end = np.deg2rad([[-10, 20, 15, 150, 30, 120], [55, 35, 30, 10, 70, 25]]).astype(float)
    velocity, acceleration, jerk = np.deg2rad(
        [[100, 95, 100, 150, 130, 110], [45, 40, 75, 70, 90, 80], [60, 60, 55, 70, 75, 70]]
    )
    return Case("liu_lai_wu", "straight joint line, 4.000 s", straight(start, end), velocity, acceleration, jerk)


def all_cases() -> list[Case]:
    """Every case of the table, in its order."""
    line = straight(np.array([0.3, -0.9, 1.1, -0.2, 0.6, -1.3]), np.array([-1.2, 0.4, -0.5, 0.9, -0.6, 0.8]))
    corner = near_corner(
        np.array([-0.8, 0.5, -0.4, 0.9, -0.3, 0.2]),
        np.array([0.7, 0.9, 0.3, 0.5, 0.4, -0.6]),
        np.array([0.2, -0.6, 0.9, -0.5, -0.8, 0.3]),
        reach=0.12,
    )
    return [
        Case("line", "straight joint line, six joints", line, *_limits(1, *WIDE)),
        liu_lai_wu(),
        Case("corner", "line, short C2 quartic blend, line", corner, *_limits(2, *WIDE)),
        *(
            Case(name, about, through_waypoints(seed, count), *_limits(seed, *spans))
            for name, about, seed, count, spans in SPLINES
        ),
    ]
