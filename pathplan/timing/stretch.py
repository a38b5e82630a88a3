"""The timing of one stretch as a function of its own local time, exact to rounding."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from pathplan.quadrature import gauss_legendre
from pathplan.timing.clock import Clock
from pathplan.timing.mesh import hermite
from pathplan.timing.motion import Motion

Array = NDArray[np.float64]

_POINTS = 12  # Gauss-Legendre points of the time integral over (part of) a cell: b is a cubic there
_NEWTON = 30


@dataclass(frozen=True)
class StretchTiming:
    """s(tau(t)) with dtau/dt = sqrt(b(tau)), b a cubic Hermite spline: rest to rest in `duration` seconds.

    tau(t) is twice continuously differentiable with a bounded third derivative, so joint velocity and acceleration
    are continuous and jerk is bounded. Nothing is refitted: the map from t to tau is solved at every t.
    """

    motion: Motion
    clock: Clock
    tau: Array  # (N+1,) nodes
    b: Array  # (N+1,) value at the nodes
    slope: Array  # (N+1,) db/dtau at the nodes

    @cached_property
    def corners(self) -> Array:
        """(4, N) value and slope of b over the cell, at the left and right end of every cell."""
        h = np.diff(self.tau)
        return np.stack([self.b[:-1], self.slope[:-1] * h, self.b[1:], self.slope[1:] * h])

    @cached_property
    def _piece(self) -> NDArray[np.intp]:
        centre = self.clock.derivatives(0.5 * (self.tau[:-1] + self.tau[1:]), 0)[0]
        return self.motion.path.locate(centre)[0]

    @cached_property
    def node_times(self) -> Array:
        """(N+1,) time at which every node is passed."""
        cells = np.arange(len(self.tau) - 1)
        return np.concatenate([[0.0], np.cumsum(self._time_in_cell(cells, np.ones(len(cells))))])

    @property
    def duration(self) -> float:
        """s, rest to rest, not rounded to ticks."""
        return float(self.node_times[-1])

    def _time_in_cell(self, cell: NDArray[np.intp], u: Array) -> Array:
        """Time from the start of a cell to the place u (0..1) in it."""
        x, w = gauss_legendre(_POINTS)
        places = u[:, None] * (0.5 * (x + 1.0))
        corner = self.corners[:, cell]
        b = sum(corner[i][:, None] * value for i, value in enumerate(_values(places)))
        return (0.5 * w / np.sqrt(b)).sum(axis=1) * u * np.diff(self.tau)[cell]

    def locate(self, t: Array) -> tuple[NDArray[np.intp], Array]:
        """Cell and place u (0..1) in it at times t (N,), by Newton's method on the time integral."""
        times = self.node_times
        cell = np.clip(np.searchsorted(times, t, side="right") - 1, 0, len(times) - 2)
        local = np.clip(t, 0.0, times[-1]) - times[cell]
        width = np.diff(self.tau)[cell]
        u = np.clip(local / np.diff(times)[cell], 0.0, 1.0)
        corner = self.corners[:, cell]
        open_ = np.arange(len(u))  # settled rows are left alone: a row does not depend on those it is computed with
        for _ in range(_NEWTON):
            b = sum(corner[i, open_] * value for i, value in enumerate(_values(u[open_])))
            missing = local[open_] - self._time_in_cell(cell[open_], u[open_])
            moved = np.clip(u[open_] + missing * np.sqrt(b) / width[open_], 0.0, 1.0)
            going = np.abs(moved - u[open_]) > 1e-13
            u[open_] = moved
            open_ = open_[going]
            if not len(open_):
                return cell, u
        raise ArithmeticError("timing: the time integral could not be inverted")

    def parameter(self, t: Array) -> Array:
        """Path parameter s at times t (N,)."""
        return self.place(*self.locate(np.asarray(t, dtype=float)))

    def place(self, cell: NDArray[np.intp], u: Array) -> Array:
        """Path parameter s (N,) at places u in given cells."""
        return self.clock.derivatives(self.tau[cell] + u * np.diff(self.tau)[cell], 0)[0]

    def times(self, tau: Array) -> Array:
        """Times (N,) at which the clock shows tau (N,)."""
        cell = np.clip(np.searchsorted(self.tau, tau, side="right") - 1, 0, len(self.tau) - 2)
        return self.cell_times(cell, (tau - self.tau[cell]) / np.diff(self.tau)[cell])

    def cell_times(self, cell: NDArray[np.intp], u: Array) -> Array:
        """Times (N,) at places u in given cells."""
        return self.node_times[cell] + self._time_in_cell(cell, u)

    def derivatives(self, t: Array, highest: int = 3) -> list[Array]:
        """Joint positions and time derivatives up to `highest` (at most 3) at times t (N,), each (N, n)."""
        return self.at(*self.locate(np.asarray(t, dtype=float)), highest)

    def at(self, cell: NDArray[np.intp], u: Array, highest: int = 3) -> list[Array]:
        """The same at places u in given cells: one-sided at nodes."""
        h = np.diff(self.tau)[cell]
        basis = hermite(u)  # (3, N, 4)
        b, b1, b2 = np.einsum("dni,in->dn", basis, self.corners[:, cell])
        speed = np.sqrt(b)
        rate = (speed, 0.5 * b1 / h, 0.5 * speed * b2 / h**2)  # tau by t
        s, s1, s2, s3 = self.clock.derivatives(self.tau[cell] + u * h)
        t1 = s1 * rate[0]
        t2 = s2 * rate[0] ** 2 + s1 * rate[1]
        t3 = s3 * rate[0] ** 3 + 3 * s2 * rate[0] * rate[1] + s1 * rate[2]
        path, piece = self.motion.path, self._piece[cell]
        local = s - path.breaks[piece]
        q = path.all_at(piece, local, highest)
        out = q[:1]
        if highest >= 1:
            out.append(q[1] * t1[:, None])
        if highest >= 2:
            out.append(q[2] * (t1**2)[:, None] + q[1] * t2[:, None])
        if highest >= 3:
            out.append(q[3] * (t1**3)[:, None] + q[2] * (3 * t1 * t2)[:, None] + q[1] * t3[:, None])
        return out

    def slowed(self, factor: float) -> StretchTiming:
        """The same motion with all speeds scaled by `factor` (accelerations by its square, jerks by its cube)."""
        return StretchTiming(self.motion, self.clock, self.tau, self.b * factor**2, self.slope * factor**2)


def _values(u: Array) -> tuple[Array, Array, Array, Array]:
    rest = 1.0 - u
    return (1 + 2 * u) * rest * rest, u * rest * rest, u * u * (3 - 2 * u), -u * u * rest
