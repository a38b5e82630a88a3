"""Torque limits along a path, as rows on b = (dtau/dt)^2 and its slope.

On a clock tau with p(tau) = q(s(tau)), joint torque is M p' b'/2 + (M p'' + h(p, p')) b + viscous p' sqrt(b) + Coulomb
friction + gravity: linear in b and b' but for the square root (Bobrow, Dubowsky & Gibson 1985). Where peak torque falls
with speed, the fall is one more term in sqrt(b).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Terms = Callable[[Array, Array, Array], Any]  # (q, p', p'') each (N, n) -> PathTorque


@dataclass(frozen=True)
class TorqueLimits:
    """Limits of joint torque: `peak` (n, 2) low < 0 < high, +-inf for none.

    Above the speed `corner` (n,) rad/s or m/s (inf: never) the peak falls by `fall` (n,) for every rad/s or m/s.
    """

    terms: Terms
    peak: Array
    corner: Array
    fall: Array


@dataclass(frozen=True)
class TorqueRows:
    """One-sided rows: on_b b + on_slope b' + on_root sqrt(b) + constant <= 1, each (Q, N); 1 is the limit.

    `joint` (Q,) and `sign` (Q,) say whose torque and on which side; rows that fall with speed come after the others.
    """

    on_b: Array
    on_slope: Array
    on_root: Array
    constant: Array
    gravity: Array  # what holding still takes, in shares of the limit
    joint: NDArray[np.intp]
    sign: NDArray[np.int64]


def torque_rows(limits: TorqueLimits, q: Array, p1: Array, p2: Array) -> TorqueRows:
    """Rows of all limited joints at points with q, p', p'' (N, n)."""
    terms = limits.terms(q, p1, p2)
    parts: list[tuple[Array, ...]] = []
    joints: list[int] = []
    signs: list[int] = []
    for falling in (False, True):
        for joint in np.flatnonzero(np.isfinite(limits.peak).all(axis=1)):
            if falling and not np.isfinite(limits.corner[joint]):
                continue
            for side, sign in ((1, 1), (0, -1)):
                extra = limits.fall[joint] * limits.corner[joint] if falling else 0.0
                top = sign * limits.peak[joint, side] + extra
                slowed = limits.fall[joint] * np.abs(p1[:, joint]) if falling else 0.0
                viscous = sign * terms.viscous[:, joint] + slowed
                held = sign * terms.gravity[:, joint]
                parts.append(
                    tuple(
                        value / top
                        for value in (
                            sign * terms.speed[:, joint],
                            sign * 0.5 * terms.inertia[:, joint],
                            viscous,
                            held + sign * terms.coulomb[:, joint],
                            held,
                        )
                    )
                )
                joints.append(int(joint))
                signs.append(sign)
    stacked = [np.stack([part[k] for part in parts]) if parts else np.zeros((0, len(q))) for k in range(5)]
    on_b, on_slope, on_root, constant, gravity = stacked
    which, sides = np.array(joints, dtype=np.intp), np.array(signs, dtype=np.int64)
    return TorqueRows(on_b, on_slope, on_root, constant, gravity, which, sides)


@dataclass(frozen=True)
class Unheld:
    """Where torque runs out whatever the speed: path parameter, joint, torque needed and torque there is (SI)."""

    s: float
    joint: int
    needed: float
    limit: float
    moving: bool  # True: holding would do, but friction of the slowest motion comes on top
