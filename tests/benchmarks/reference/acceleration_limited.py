"""Time-optimal timing of a fixed path under velocity and acceleration limits alone: convex in b(s) = s'^2.

b is linear within each interval of a mesh in s, so the time of an interval is 2 ds / (sqrt(b0) + sqrt(b1)) exactly,
and velocity q' sqrt(b) and acceleration q' b'/2 + q'' b make linear rows (Verscheure et al., IEEE TAC 2009).
Solved with casadi and IPOPT; being convex, it has one optimum.
"""

from __future__ import annotations

from dataclasses import dataclass

import casadi as ca
import numpy as np
from cases import Case
from motion import spans

EVERYWHERE = np.array([0.0, 0.25, 0.5, 0.75, 1.0])  # nearly feasible: converges from above, first order
MIDDLE = np.array([0.5])  # collocation: not feasible in between, converges with second order
DENSE = 21


@dataclass(frozen=True)
class Pace:
    """Nodes s (N + 1,), b (N + 1,) there, duration of the NLP and slowed to be feasible everywhere, s."""

    s: np.ndarray
    b: np.ndarray
    duration_nlp: float
    duration_feasible: float


def mesh(case: Case, count: int) -> np.ndarray:
    """About `count` intervals, half of them by length and half shared evenly by the spans of the path.

    They are finer towards both ends of the path, where b grows from 0.
    """
    breaks, _ = spans(case.spline)
    lengths = np.diff(breaks)
    number = np.ceil(count * (0.5 * lengths / lengths.sum() + 0.5 / len(lengths))).astype(int)
    pieces = [np.zeros(1)]
    for k, (start, length, m) in enumerate(zip(breaks[:-1], lengths, number, strict=True)):
        u = np.linspace(0.0, 1.0, m + 1)[1:]
        opens, closes = k == 0, k == len(lengths) - 1
        u = u**2 * (3 - 2 * u) if opens and closes else u**2 if opens else u * (2 - u) if closes else u
        pieces.append(start + length * u)
    return np.concatenate(pieces)


def rows(case: Case, s: np.ndarray, shares: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """q', q'' (N, points, n) at `shares` of every interval, each from the polynomial of the interval's own span."""
    breaks, c = spans(case.spline)
    span_of = np.searchsorted(breaks, (s[:-1] + s[1:]) / 2, side="right") - 1
    d = (s[:-1, None] + np.diff(s)[:, None] * shares - breaks[span_of][:, None])[..., None]
    degree, first, second = len(c) - 1, 0.0, 0.0
    for power in range(degree, 0, -1):
        factor = c[degree - power, span_of][:, None]
        first = first * d + power * factor
        if power >= 2:
            second = second * d + power * (power - 1) * factor
    return first, second + np.zeros_like(first)


def slowing(case: Case, s: np.ndarray, b: np.ndarray) -> float:
    """Factor on time after which b keeps every limit at dense samples."""
    shares = np.linspace(0.0, 1.0, DENSE)
    first, second = rows(case, s, shares)
    value = (b[:-1, None] + np.diff(b)[:, None] * shares)[..., None]
    slope = (np.diff(b) / np.diff(s))[:, None, None]
    velocity = np.abs(first) * np.sqrt(value) / case.velocity
    acceleration = np.abs(first * slope / 2 + second * value) / case.acceleration
    return float(max(velocity.max(), np.sqrt(acceleration.max())))


def solve(case: Case, count: int, points: np.ndarray) -> Pace:
    """Optimum on a mesh of `count` intervals. Raises RuntimeError if IPOPT does not converge.

    points: where in an interval the limits are imposed, EVERYWHERE or MIDDLE.
    """
    s = mesh(case, count)
    first, second = rows(case, s, points)
    ds = np.diff(s)
    unit = float(np.max(np.abs(first) / case.velocity))  # s / unit is a speed of order one
    inner = ca.SX.sym("b", len(s) - 2)
    b = ca.vertcat(0, inner, 0)
    low, high = b[:-1], b[1:]
    value = ca.mtimes(low, ca.DM(1 - points).T) + ca.mtimes(high, ca.DM(points).T)  # (N, points)
    slope = ca.repmat((high - low) / ca.DM(ds), 1, len(points))
    limited = [
        (ca.DM(first[..., i]) * slope / 2 + ca.DM(second[..., i]) * value) / (case.acceleration[i] * unit**2)
        for i in range(first.shape[2])
    ]
    # The speed limits bound b at the points; a row is kept only where it can matter beside its neighbours.
    ceiling = np.min((case.velocity * unit / np.maximum(np.abs(first), 1e-12)) ** 2, axis=2)
    roots = ca.vertcat(0, ca.sqrt(inner), 0)
    time = ca.sum1(2 * ca.DM(ds) / (roots[:-1] + roots[1:]))
    nlp = {"x": inner, "f": time, "g": ca.veccat(*limited, value)}
    options = {
        "print_time": False,
        "ipopt.print_level": 0,
        "ipopt.sb": "yes",
        "ipopt.tol": 1e-10,
        "ipopt.max_iter": 500,
    }
    solver = ca.nlpsol("pace", "ipopt", nlp, options)
    bound = np.ones(sum(row.numel() for row in limited))
    capped = np.minimum(ceiling, 1e6).ravel(order="F")
    u = s[1:-1] / s[-1]
    answer = solver(
        x0=0.01 * u * (1 - u) + 1e-6,
        lbx=1e-12,
        lbg=np.concatenate([-bound, np.zeros_like(capped)]),
        ubg=np.concatenate([bound, capped]),
    )
    if not solver.stats()["success"]:
        raise RuntimeError(f"{case.name}: {count} intervals: IPOPT: {solver.stats()['return_status']}")
    found = np.concatenate([[0.0], np.asarray(answer["x"]).ravel(), [0.0]]) / unit**2
    duration = float(answer["f"]) * unit
    return Pace(s, found, duration, duration * slowing(case, s, found))
