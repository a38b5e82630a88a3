"""A first, coarse timing without jerk limits: where the path is slow and where it is fast.

Its speed profile is the clock that the fine timing and the lower bound are computed on, so it need not be exact.
b(s) = (ds/dt)^2 is linear between nodes, velocity limits are walls for b and acceleration limits are linear rows
(Verscheure et al., IEEE TAC 2009), solved by a barrier method for all stretches together.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.barrier import follow_central_path, newton_step, sum_by
from pathplan.timing.motion import Along, Motion

Array = NDArray[np.float64]

_CELLS = 60  # a stretch has about this many cells, and every piece of its path at least _CELLS_PER_PIECE
_CELLS_PER_PIECE = 8
_NO_LOW = -1e9  # low side of a one-sided row


@dataclass(frozen=True)
class CoarseTiming:
    """s(t) of one stretch with constant acceleration of s between nodes."""

    s: Array  # (N+1,) nodes, borders of the motion among them
    piece: NDArray[np.intp]  # (N,) piece of the path that each cell lies in
    time: Array  # (N+1,)
    speed: Array  # (N+1,) ds/dt at the nodes, zero at both ends

    @property
    def acceleration(self) -> Array:
        """(N,) d2s/dt2 in each cell."""
        return np.diff(self.speed) / np.diff(self.time)

    def at(self, cell: NDArray[np.intp], time: Array) -> tuple[Array, Array, Array]:
        """s, ds/dt and d2s/dt2 inside given cells."""
        local = time - self.time[cell]
        acceleration = self.acceleration[cell]
        speed = self.speed[cell] + acceleration * local
        return self.s[cell] + (self.speed[cell] + 0.5 * acceleration * local) * local, speed, acceleration

    def __call__(self, time: Array) -> Array:
        """s at time; at rest before the start and after the end."""
        time = np.clip(time, 0.0, self.time[-1])
        cell = np.clip(np.searchsorted(self.time, time, side="right") - 1, 0, len(self.piece) - 1)
        return self.at(cell, time)[0]


def coarse_timing(motions: Sequence[Motion], *, accuracy: float = 3e-3) -> list[CoarseTiming]:
    """Near time-optimal timings by velocity and acceleration limits and caps on the tool's speeds, one per motion."""
    meshes = [_mesh(motion) for motion in motions]
    problem = _Coarse(motions, meshes)
    reference = problem.per_stretch(problem.feasible_start())
    gap = problem.rows_per_length
    weight = reference / gap
    b, _ = follow_central_path(
        problem, problem.feasible_start(), start=0.3 * weight, final=accuracy * weight, factor=0.1, centred=1.0
    )
    return problem.timings(b, meshes)


def _mesh(motion: Motion) -> tuple[Array, NDArray[np.intp]]:
    borders = motion.borders()
    width = np.diff(borders)
    piece = motion.path.locate(0.5 * (borders[:-1] + borders[1:]))[0]
    cells = np.maximum(_CELLS_PER_PIECE, np.ceil(_CELLS * width / borders[-1])).astype(int)
    nodes, pieces = [], []
    for i, count in enumerate(cells):
        share = np.arange(count) / count
        first, last = i == 0, i == len(cells) - 1
        if first and last:  # near rest s grows with the square of time: crowd the nodes there
            share = 0.5 * (1.0 - np.cos(np.pi * share))
        elif first:
            share = share**2
        elif last:
            share = 1.0 - (1.0 - share) ** 2
        nodes.append(borders[i] + width[i] * share)
        pieces.append(np.full(count, piece[i]))
    return np.concatenate([*nodes, borders[-1:]]), np.concatenate(pieces)


def _end_rows(along: Along) -> tuple[Array, Array, Array, Array]:
    """Coefficients on db/ds and b, and low and high, each (N, R): acceleration rows, then torque rows.

    Viscous torque is left out: this timing is only a clock, and a starting point for the bound.
    """
    acceleration, points = along.motion.acceleration, len(along.s)
    half = 0.5 * (acceleration[:, 1] - acceleration[:, 0])
    slope, level = along.rows[0] / (2 * half), along.rows[1] / half
    low, high = (np.broadcast_to(acceleration[:, k] / half, slope.shape) for k in range(2))
    torque = along.torque_rows(np.ones(points), np.zeros(points))
    if torque is None:
        return slope, level, low, high
    return (
        np.hstack([slope, torque.on_slope.T]),
        np.hstack([level, torque.on_b.T]),
        np.hstack([low, np.full_like(torque.on_b.T, _NO_LOW)]),
        np.hstack([high, 1.0 - torque.constant.T]),
    )


@dataclass(frozen=True)
class _State:
    b: Array
    root: Array
    acceleration: Array  # (cells, 2, R) share of the half range, both ends of each cell


class _Coarse:
    """b at the nodes of all stretches, end to end; each stretch's first and last node are fixed at zero."""

    def __init__(self, motions: Sequence[Motion], meshes: Sequence[tuple[Array, NDArray[np.intp]]]) -> None:
        self.count = len(motions)
        sizes = np.array([len(s) for s, _ in meshes])
        self.owner = np.repeat(np.arange(self.count), sizes)
        self.cell_owner = np.repeat(np.arange(self.count), sizes - 1)
        cells = np.arange(len(self.cell_owner))
        self.left = cells + self.cell_owner
        self.right = self.left + 1
        first = np.concatenate([[0], np.cumsum(sizes)[:-1]])
        self.fixed = np.zeros(len(self.owner), dtype=bool)
        self.fixed[first] = self.fixed[first + sizes - 1] = True
        self.h = np.concatenate([np.diff(s) for s, _ in meshes])
        self.shape = np.concatenate([s * (s[-1] - s) / s[-1] ** 2 for s, _ in meshes])
        self.wall = np.full(len(self.owner), np.inf)
        coefficients, low, high = [], [], []
        for k, (motion, (s, piece)) in enumerate(zip(motions, meshes, strict=True)):
            h = np.diff(s)[:, None]
            ends = []
            for side, at in enumerate((s[:-1], s[1:])):
                along = motion.along(piece, at, 2)
                target = self.wall[first[k] + side : first[k] + side + len(at)]
                np.minimum(target, along.wall(), out=target)
                ends.append(_end_rows(along))
            slope = np.stack([end[0] for end in ends], axis=1) / h[:, None, :]
            both = np.stack([-slope, slope])
            both[0, :, 0] += ends[0][1]
            both[1, :, 1] += ends[1][1]
            coefficients.append(both)
            low.append(np.stack([end[2] for end in ends], axis=1))
            high.append(np.stack([end[3] for end in ends], axis=1))
        self.coefficients = _stack(coefficients, axis=1)  # (2, cells, 2, R)
        self.low = _stack(low, axis=0, fill=-1.0)  # (cells, 2, R)
        self.high = _stack(high, axis=0, fill=1.0)
        self.weight = 0.5 * self.h / self.per_stretch_cells(self.h)[self.cell_owner]
        self.node_weight = np.zeros(len(self.owner))
        np.add.at(self.node_weight, self.left, self.weight)
        np.add.at(self.node_weight, self.right, self.weight)
        self.rows_per_length = 2.0 * self.coefficients.shape[3] + 1.0

    def per_stretch_cells(self, values: Array) -> Array:
        return sum_by(self.cell_owner, values, self.count)

    def per_stretch(self, b: Array) -> Array:
        root = np.sqrt(b)
        return self.per_stretch_cells(2 * self.h / (root[self.left] + root[self.right]))

    def rows(self, b: Array) -> Array:
        c = self.coefficients
        return c[0] * b[self.left, None, None] + c[1] * b[self.right, None, None]

    def feasible_start(self) -> Array:
        rows = self.rows(self.shape)
        share = np.maximum(rows / self.high, rows / self.low).reshape(len(self.h), -1).max(axis=1)
        worst = np.zeros(self.count)
        np.maximum.at(worst, self.cell_owner, share)
        np.maximum.at(worst, self.owner, self.shape / self.wall)
        return self.shape / (1.3 * worst[self.owner])

    def state(self, b: Array) -> _State:
        return _State(b, np.sqrt(np.maximum(b, 0.0)), self.rows(b))

    def value(self, state: _State) -> tuple[Array, Array]:
        above, below = self.high - state.acceleration, state.acceleration - self.low
        under = 1.0 - state.b / self.wall
        bad = ((above <= 0) | (below <= 0)).any(axis=(1, 2))
        bad_node = (under <= 0) | ((state.b <= 0) & ~self.fixed)
        with np.errstate(divide="ignore", invalid="ignore"):
            barrier = -np.log(above * below).sum(axis=(1, 2)) * self.weight
            node_barrier = -np.log(under) * self.node_weight
            time = 2 * self.h / (state.root[self.left] + state.root[self.right])
        barrier[bad] = node_barrier[bad_node] = np.inf
        return (
            self.per_stretch_cells(time),
            self.per_stretch_cells(barrier) + sum_by(self.owner, node_barrier, self.count),
        )

    def direction(self, state: _State, mu: Array) -> tuple[Array, Array]:
        b, root = state.b, state.root
        gradient, diagonal, coupling = cell_cost(self.h, b, root, self.left, self.right, len(b))
        above, below = 1 / (self.high - state.acceleration), 1 / (state.acceleration - self.low)
        m = (mu[self.cell_owner] * self.weight)[:, None, None]
        slope, bend = m * (above - below), m * (above * above + below * below)
        c = self.coefficients
        for k, end in enumerate((self.left, self.right)):
            gradient += sum_by(end, (slope * c[k]).sum(axis=(1, 2)), len(b))
            diagonal += sum_by(end, (bend * c[k] * c[k]).sum(axis=(1, 2)), len(b))
        coupling += (bend * c[0] * c[1]).sum(axis=(1, 2))
        under = 1 / (self.wall - b)
        gradient += mu[self.owner] * self.node_weight * under
        diagonal += mu[self.owner] * self.node_weight * under * under
        gradient[self.fixed] = 0.0
        diagonal[self.fixed] = 1.0
        coupling[self.fixed[self.left] | self.fixed[self.right]] = 0.0
        band = np.zeros((2, len(b)))
        band[1] = diagonal
        band[0, self.right] = coupling
        step = newton_step(band, gradient)
        return step, -sum_by(self.owner, gradient * step, self.count)

    def reach(self, state: _State, step: Array) -> Array:
        rows = self.rows(step)
        ratio = np.maximum(rows / (self.high - state.acceleration), -rows / (state.acceleration - self.low))
        worst = np.full(self.count, 1e-9)
        np.maximum.at(worst, self.cell_owner, ratio.max(axis=(1, 2)))
        node = np.maximum(step / (self.wall - state.b), -step / np.where(self.fixed, 1.0, state.b))
        np.maximum.at(worst, self.owner, node)
        return 1.0 / worst

    def timings(self, b: Array, meshes: Sequence[tuple[Array, NDArray[np.intp]]]) -> list[CoarseTiming]:
        out, at = [], 0
        for s, piece in meshes:
            speed = np.sqrt(b[at : at + len(s)])
            at += len(s)
            time = np.concatenate([[0.0], np.cumsum(2 * np.diff(s) / (speed[:-1] + speed[1:]))])
            out.append(CoarseTiming(s, piece, time, speed))
        return out


def cell_cost(
    h: Array, b: Array, root: Array, left: NDArray[np.intp], right: NDArray[np.intp], size: int
) -> tuple[Array, Array, Array]:
    """Gradient (size,), diagonal (size,) and cell coupling of the time sum 2 h / (sqrt b_left + sqrt b_right).

    Entries of nodes at b = 0 (fixed ends) are not defined; the caller overwrites them.
    """
    x, y = root[left], root[right]
    total = x + y
    first, second = -2 * h / total**2, 4 * h / total**3
    x, y = np.where(x > 0, x, 1.0), np.where(y > 0, y, 1.0)
    gradient = sum_by(left, first / (2 * x), size) + sum_by(right, first / (2 * y), size)
    diagonal = sum_by(left, second / (4 * x * x) - first / (4 * x**3), size)
    diagonal += sum_by(right, second / (4 * y * y) - first / (4 * y**3), size)
    return gradient, diagonal, second / (4 * x * y)


def _stack(parts: list[Array], axis: int, fill: float = 0.0) -> Array:
    """Concatenate along axis, padding the last axis to the widest (stretches may have different row counts)."""
    widest = max(p.shape[-1] for p in parts)
    padded = []
    for part in parts:
        extra = np.full((*part.shape[:-1], widest - part.shape[-1]), fill)
        padded.append(np.concatenate([part, extra], axis=-1))
    return np.concatenate(padded, axis=axis)
