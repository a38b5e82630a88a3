"""One motion from stop to stop: a joint path and everything that limits how fast it may be followed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pathplan.errors import InputError
from pathplan.path.joint import JointPath
from pathplan.timing.torque import TorqueLimits, TorqueRows, Unheld, torque_rows

Array = NDArray[np.float64]
_HELD_POINTS = 33  # a piece of the path is looked at in this many places, its ends included
_LEAST_ROOM = 2e-3  # of a torque limit must be left to accelerate with
_APART = 1e-6  # of the path: a cap that ends this near to a break of the path ends on it
_NEVER = 1e-12  # a row or a tool that moves less than this (relative to its limit) does not limit the speed
ToolDerivatives = Callable[[Array, Array, Array], tuple[Array, Array]]
ToolTurning = Callable[[Array, Array], Array]


@dataclass(frozen=True)
class Cap:
    """Caps on the tool on part of the path, None for none: speed in m/s, acceleration in m/s^2, turning speed in rad/s.

    All three are norms: |x'| of the tool centre point, |x''|, and |omega| of the tool. A speed that is `held` is to be
    constant, so that its ripple counts for more than the time it takes.
    """

    begin: float
    end: float
    speed: float | None = None
    acceleration: float | None = None
    turning_speed: float | None = None
    held: bool = False


@dataclass(frozen=True)
class Motion:
    """A joint path, the rows that are limited (low, high apart), and the caps on the tool.

    The limited quantities are `matrix @ q`: with the identity each joint by itself, with a coupling matrix the
    motors. Every row has finite limits of velocity, acceleration and jerk, low < 0 < high.
    """

    path: JointPath
    matrix: Array  # (R, n)
    velocity: Array  # (R, 2)
    acceleration: Array
    jerk: Array
    caps: tuple[Cap, ...] = ()
    tool: ToolDerivatives | None = None  # (q, q', q'') each (N, n) -> tool position x', x'' each (N, 3)
    torque: TorqueLimits | None = None
    turning: ToolTurning | None = None  # (q, q') each (N, n) -> derivative of the orientation (N, 3), rad

    def borders(self) -> Array:
        """Where the path or a cap changes, from 0 to the path's length: cells of a timing end there."""
        breaks = self.path.breaks
        ends = np.array([end for cap in self.caps for end in (cap.begin, cap.end)])
        between = ends[(ends > breaks[0]) & (ends < breaks[-1])]
        apart = np.abs(between[:, None] - breaks).min(axis=1, initial=np.inf) > _APART * breaks[-1]
        return np.union1d(breaks, between[apart])

    def along(self, piece: NDArray[np.intp], s: Array, highest: int = 3) -> Along:
        """The motion at path parameters s (N,); `piece` (N,) says which side of a break."""
        return Along(self, piece, s, highest)

    def tool_speed_cap(self, s: Array) -> Array:
        """(N,) the lowest speed cap at each s, inf where there is none."""
        return _lowest(s, [(c.begin, c.end, c.speed) for c in self.caps])

    def tool_turning_cap(self, s: Array) -> Array:
        """(N,) the lowest cap on the turning speed at each s, inf where there is none."""
        return _lowest(s, [(c.begin, c.end, c.turning_speed) for c in self.caps])

    def tool_acceleration_cap(self, s: Array) -> Array:
        """(N,) the lowest acceleration cap at each s, inf where there is none."""
        return _lowest(s, [(c.begin, c.end, c.acceleration) for c in self.caps])

    def held(self, s: Array) -> NDArray[np.bool_]:
        """(N,) whether a tool speed is to be held at each s."""
        return np.isfinite(_lowest(s, [(c.begin, c.end, c.speed if c.held else None) for c in self.caps]))

    def unheld(self) -> Unheld | None:
        """The worst place where gravity, or gravity and the friction of slow motion, take all the torque there is."""
        if self.torque is None:
            return None
        breaks = self.path.breaks
        share = np.linspace(0.0, 1.0, _HELD_POINTS)
        s = (breaks[:-1, None] + np.diff(breaks)[:, None] * share).ravel()
        piece = np.repeat(np.arange(len(breaks) - 1), _HELD_POINTS)
        rows = self.along(piece, s, 2).torque_rows(np.ones(len(s)), np.zeros(len(s)))
        if rows is None or not rows.constant.size:
            return None
        moving = rows.gravity.max() < 1.0
        used = rows.constant if moving else rows.gravity
        row, at = np.unravel_index(int(np.argmax(used)), used.shape)
        if used[row, at] < 1.0 - _LEAST_ROOM:
            return None
        joint = int(rows.joint[row])
        limit = float(self.torque.peak[joint, 1 if rows.sign[row] > 0 else 0])
        return Unheld(float(s[at]), joint, float(used[row, at]) * limit, limit, bool(moving))

    @property
    def capped(self) -> bool:
        """Whether any cap on the tool applies."""
        return any((c.speed, c.acceleration, c.turning_speed) != (None, None, None) for c in self.caps)


@dataclass(frozen=True)
class Along:
    """A motion at N points of its path: what limits it there. Worked out as it is asked for, and once."""

    motion: Motion
    piece: NDArray[np.intp]  # (N,)
    s: Array  # (N,)
    highest: int  # order of the derivatives by s that are worked out

    @cached_property
    def joints(self) -> list[Array]:
        """Joint positions and their derivatives by s, each (N, n)."""
        path = self.motion.path
        return path.all_at(self.piece, self.s - path.breaks[self.piece], self.highest)

    @cached_property
    def rows(self) -> list[Array]:
        """Derivatives 1, 2, .. of the limited rows by s, each (N, R)."""
        return [value @ self.motion.matrix.T for value in self.joints[1:]]

    @cached_property
    def tool(self) -> tuple[Array, Array]:
        """First and second derivative of the tool position by s, each (N, 3), m; zero where it has no such cap."""
        capped = np.isfinite(self.tool_speed_cap) | np.isfinite(self.tool_acceleration_cap)
        first, second = np.zeros((2, len(self.s), 3))
        if capped.any():
            if self.motion.tool is None:
                raise ValueError("motion has caps on the tool but no way to compute the tool's motion")
            first[capped], second[capped] = self.motion.tool(*(value[capped] for value in self.joints[:3]))
        return first, second

    @cached_property
    def tool_speed_cap(self) -> Array:
        """(N,) the lowest cap on the tool's speed, inf where there is none; so the other two."""
        return self.motion.tool_speed_cap(self.s)

    @cached_property
    def tool_turning_cap(self) -> Array:
        return self.motion.tool_turning_cap(self.s)

    @cached_property
    def tool_acceleration_cap(self) -> Array:
        return self.motion.tool_acceleration_cap(self.s)

    def speed_walls(self) -> Array:
        """(N, R) largest (ds/dt)^2 by each velocity limit."""
        rows, velocity = self.rows[0], self.motion.velocity
        limit = np.where(rows > 0, velocity[:, 1], -velocity[:, 0])
        walls: Array = 1.0 / np.maximum(np.abs(rows) / limit, _NEVER) ** 2
        return walls

    def tool_walls(self) -> Array:
        """(2, N) largest (ds/dt)^2 by the caps on the tool's speed and turning speed, inf where there is none."""
        walls = np.full((2, len(self.s)), np.inf)
        capped = np.isfinite(self.tool_speed_cap)
        if capped.any():
            walls[0, capped] = _wall(self.tool_speed_cap[capped], self.tool[0][capped])
        capped = np.isfinite(self.tool_turning_cap)
        if capped.any():
            if self.motion.turning is None:
                raise ValueError("motion has caps on the tool but no way to compute how it turns")
            turning = self.motion.turning(*(value[capped] for value in self.joints[:2]))
            walls[1, capped] = _wall(self.tool_turning_cap[capped], turning)
        return walls

    def wall(self) -> Array:
        """(N,) largest (ds/dt)^2 by any of them."""
        wall: Array = np.minimum(self.speed_walls().min(axis=1), self.tool_walls().min(axis=0))
        return wall

    def torque_rows(self, s1: Array, s2: Array) -> TorqueRows | None:
        """Torque limits on a clock with ds/dtau and d2s/dtau2 (N,); None without torque limits."""
        if self.motion.torque is None:
            return None
        q, q1, q2 = self.joints[:3]
        c1, c2 = s1[:, None], s2[:, None]
        return torque_rows(self.motion.torque, q, q1 * c1, q2 * c1**2 + q1 * c2)


def _wall(cap: Array, rate: Array) -> Array:
    wall: Array = (cap / np.maximum(np.linalg.norm(rate, axis=1), _NEVER)) ** 2
    return wall


def _lowest(s: Array, caps: list[tuple[float, float, float | None]]) -> Array:
    lowest = np.full(s.shape, np.inf)
    for begin, end, cap in caps:
        if cap is not None:
            inside = (s >= begin - 1e-12) & (s <= end + 1e-12)
            lowest = np.where(inside, np.minimum(lowest, cap), lowest)
    return lowest


def two_sided(limit: ArrayLike, count: int, name: str) -> Array:
    """A limit given as one number, one a joint or low and high a joint, as (count, 2) low, high.

    Raises InputError unless every low is finite and negative and every high finite and positive.
    """
    given = np.asarray(limit, dtype=float)
    if given.ndim == 0:
        given = np.full(count, float(given))
    if given.shape == (count,):
        given = np.stack([-given, given], axis=1)
    if given.shape != (count, 2):
        raise InputError(
            f"{name}: expected one number, {count} numbers or {count} pairs low, high, got shape {given.shape}"
        )
    if not np.all(np.isfinite(given)) or np.any(given[:, 0] >= 0) or np.any(given[:, 1] <= 0):
        row = int(np.flatnonzero(~(np.isfinite(given).all(axis=1) & (given[:, 0] < 0) & (given[:, 1] > 0)))[0])
        raise InputError(
            f"{name}: joint {row + 1}: expected finite limits on both sides of zero, got {given[row].tolist()}"
        )
    return given
