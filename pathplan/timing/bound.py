"""A lower bound of the duration of any motion along a path, with its proof.

Leave out the jerk limits and the caps on tool acceleration: what is left is convex in b(tau) = (dtau/dt)^2 on any
clock tau with s(tau) at rest at both ends (Verscheure et al., IEEE TAC 2009):

    minimise the integral of 1/sqrt(b)   subject to   low <= r' b'/2 + r'' b <= high for every row r,   0 < b <= wall.

For any multipliers lambda(tau) of the rows, continuous and piecewise linear, and any motion that keeps the limits,

    duration >= integral of 1/sqrt(b) + sum lambda (r' b'/2 + r'' b) - sum (lambda+ high - lambda- low)
              = integral of 1/sqrt(b) + c b - sum (lambda+ high - lambda- low),   c = sum (lambda r'' - lambda' r') / 2,

by integration by parts; the boundary terms vanish because r' is zero where the clock is at rest. The right side is
least, at every tau by itself, at b = min(wall, (2c)^(-2/3)), or at the wall where c <= 0. That least value is the
bound: it holds whatever the multipliers are, and good multipliers only make it tight. They come from a barrier method
on the weak form of the same problem (the rows tested with hat functions), whose multipliers are such functions. The
integral is taken by Gauss-Legendre quadrature of two orders, and their difference is taken off.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.barrier import follow_central_path, sum_by
from pathplan.timing.coarse import CoarseTiming, coarse_timing, speed_wall, tool_wall
from pathplan.timing.motion import Motion

Array = NDArray[np.float64]

_ORDERS = (5, 8)  # Gauss-Legendre points of the two quadratures
_TEST_POINTS = 3
_GAP = 3e-4
_CELLS = 160
_SMOOTHINGS = 3


@dataclass(frozen=True)
class _Mesh:
    motion: Motion
    coarse: CoarseTiming
    tau: Array  # (N+1,)
    cell: NDArray[np.intp]  # (N,) cell of the coarse timing

    def rows(self, points: int) -> tuple[Array, Array, Array, Array]:
        """r' and r'' by tau (R, points, N), the wall (points, N), quadrature weights (points, N)."""
        x, w = np.polynomial.legendre.leggauss(points)
        h = np.diff(self.tau)
        tau = self.tau[:-1] + h * (0.5 * (x + 1.0))[:, None]
        cell = np.tile(self.cell, points)
        s, s1, s2 = self.coarse.at(cell, tau.ravel())
        piece = self.coarse.piece[cell]
        q1, q2 = self.motion.rows(piece, s, 2)
        wall = np.minimum(speed_wall(q1, self.motion.velocity), tool_wall(self.motion, piece, s)) / s1**2
        shape = (-1, points, len(h))
        first, second = (q1.T * s1).reshape(shape), (q2.T * s1**2 + q1.T * s2).reshape(shape)
        return first, second, wall.reshape(shape[1:]), 0.5 * w[:, None] * h


def bound_durations(motions: Sequence[Motion], coarse: Sequence[CoarseTiming] | None = None) -> Array:
    """(S,) lower bounds in s, one a motion. `coarse` spares computing the coarse timings anew."""
    timings = coarse_timing(motions) if coarse is None else coarse
    meshes = [_mesh(motion, timing) for motion, timing in zip(motions, timings, strict=True)]
    problem = _Weak(meshes)
    start = problem.feasible_start()
    weight = problem.durations(start) / problem.gap
    b, _ = follow_central_path(problem, start, start=0.1 * weight, final=_GAP * weight, factor=0.15, centred=0.01)
    multipliers = problem.multipliers(b, _GAP * weight)
    return np.array([_best_bound(mesh, m) for mesh, m in zip(meshes, multipliers, strict=True)])


def _mesh(motion: Motion, coarse: CoarseTiming) -> _Mesh:
    width = np.diff(coarse.time)
    count = np.maximum(1, np.round(width / (coarse.time[-1] / _CELLS))).astype(int)
    cell = np.repeat(np.arange(len(width)), count)
    share = (np.arange(len(cell)) - np.repeat(np.cumsum(count) - count, count)) / count[cell]
    tau = np.append(coarse.time[:-1][cell] + width[cell] * share, coarse.time[-1])
    return _Mesh(motion, coarse, tau, cell)


@dataclass(frozen=True)
class _State:
    b: Array  # (cells,)
    rows: Array  # (R, nodes)


class _Weak:
    """b in every cell, stretches end to end. Row i of a node: the limit averaged with the node's hat function.

    Cells and nodes are staggered, which keeps multipliers free of the checkerboard that b at the nodes would leave.
    """

    def __init__(self, meshes: Sequence[_Mesh]) -> None:
        self.count = len(meshes)
        self.nodes = np.array([len(mesh.tau) for mesh in meshes])
        self.owner = np.repeat(np.arange(self.count), self.nodes - 1)
        self.node_owner = np.repeat(np.arange(self.count), self.nodes)
        self.left = np.arange(len(self.owner)) + self.owner
        self.right = self.left + 1
        self.h = np.concatenate([np.diff(mesh.tau) for mesh in meshes])
        cells, nodes = len(self.owner), len(self.node_owner)
        widest = max(len(mesh.motion.matrix) for mesh in meshes)
        self.at_left, self.at_right = np.zeros((2, widest, cells))  # what b of a cell adds to the rows of its nodes
        self.low, self.high = -np.ones((widest, nodes)), np.ones((widest, nodes))
        self.wall = np.empty(cells)
        self.node_width = sum_by(self.left, self.h / 2, nodes) + sum_by(self.right, self.h / 2, nodes)
        total = sum_by(self.owner, self.h, self.count)
        self.share, self.node_share = self.h / total[self.owner], self.node_width / total[self.node_owner]
        at = 0
        for k, mesh in enumerate(meshes):
            here = slice(at, at + len(mesh.tau) - 1)
            node = slice(at + k, at + k + len(mesh.tau))
            limits = mesh.motion.acceleration
            half = 0.5 * (limits[:, 1] - limits[:, 0])[:, None]
            rows = slice(0, len(half))
            self.at_left[rows, here], self.at_right[rows, here], self.wall[here] = _tested_rows(mesh)
            self.at_left[rows, here] /= half
            self.at_right[rows, here] /= half
            self.low[rows, node], self.high[rows, node] = limits[:, :1] / half, limits[:, 1:] / half
            at += len(mesh.tau) - 1
        self.at_left /= self.node_width[self.left]
        self.at_right /= self.node_width[self.right]
        self.gap = 2.0 * widest + 1.0

    def durations(self, b: Array) -> Array:
        return sum_by(self.owner, self.h / np.sqrt(b), self.count)

    def rows(self, b: Array) -> Array:
        out = np.zeros_like(self.low)
        out[:, self.left] = self.at_left * b
        out[:, self.right] += self.at_right * b
        return out

    def feasible_start(self) -> Array:
        b = np.ones(len(self.owner))
        rows = self.rows(b)
        worst = np.zeros(self.count)
        np.maximum.at(worst, self.node_owner, np.maximum(rows / self.low, rows / self.high).max(axis=0))
        np.maximum.at(worst, self.owner, b / self.wall)
        return b / (1.05 * worst[self.owner])

    def state(self, b: Array) -> _State:
        return _State(b, self.rows(b))

    def value(self, state: _State, mu: Array) -> Array:
        under = 1.0 - state.b / self.wall
        slack = (self.high - state.rows) * (state.rows - self.low)
        bad_node = ~(slack > 0).all(axis=0)
        bad = ~((under > 0) & (state.b > 0))
        with np.errstate(invalid="ignore", divide="ignore"):
            cost = np.where(bad, 0.0, self.h / np.sqrt(state.b) - mu[self.owner] * self.share * np.log(under))
            logs = np.where(bad_node, 0.0, self.node_share * np.log(slack.prod(axis=0)))
        total = sum_by(self.owner, cost, self.count) - mu * sum_by(self.node_owner, logs, self.count)
        total[self.owner[bad]] = np.inf
        total[self.node_owner[bad_node]] = np.inf
        return total

    def direction(self, state: _State, mu: Array) -> tuple[Array, Array]:
        from scipy.linalg import solveh_banded

        m, m_node = mu[self.owner] * self.share, mu[self.node_owner] * self.node_share
        above, below = 1 / (self.high - state.rows), 1 / (state.rows - self.low)
        slope, bend = m_node * (above - below), m_node * (above * above + below * below)
        under = 1 / (self.wall - state.b)
        time = self.h / np.sqrt(state.b) / state.b
        gradient = m * under - 0.5 * time
        gradient += (slope[:, self.left] * self.at_left + slope[:, self.right] * self.at_right).sum(axis=0)
        band = np.zeros((2, len(state.b)))
        band[1] = 0.75 * time / state.b + m * under * under
        band[1] += (bend[:, self.left] * self.at_left**2 + bend[:, self.right] * self.at_right**2).sum(axis=0)
        neighbours = self.owner[1:] == self.owner[:-1]
        shared = (bend[:, self.left[1:]] * self.at_right[:, :-1] * self.at_left[:, 1:]).sum(axis=0)
        band[0, 1:] = np.where(neighbours, shared, 0.0)
        step = -solveh_banded(band, gradient, check_finite=False)
        return step, -sum_by(self.owner, gradient * step, self.count)

    def reach(self, state: _State, step: Array) -> Array:
        rows = self.rows(step)
        ratio = np.maximum(rows / (self.high - state.rows), rows / (self.low - state.rows)).max(axis=0)
        worst = np.full(self.count, 1e-9)
        np.maximum.at(worst, self.node_owner, ratio)
        np.maximum.at(worst, self.owner, np.maximum(step / (self.wall - state.b), -step / state.b))
        return 1.0 / worst

    def multipliers(self, b: Array, mu: Array) -> list[Array]:
        """Signed multipliers (R, nodes) of every stretch, per unit of tau and half range."""
        rows = self.rows(b)
        density = (mu[self.node_owner] * self.node_share / self.node_width) * (
            1 / (self.high - rows) - 1 / (rows - self.low)
        )
        return np.split(density, np.cumsum(self.nodes)[:-1], axis=1)


def _tested_rows(mesh: _Mesh) -> tuple[Array, Array, Array]:
    """What b of a cell adds to the rows of its left and right node, (R, cells) each, and the wall (cells,)."""
    x = 0.5 * (np.polynomial.legendre.leggauss(_TEST_POINTS)[0] + 1.0)[:, None]
    first, second, wall, weight = mesh.rows(_TEST_POINTS)
    h = np.diff(mesh.tau)
    left = 0.5 * (weight * ((1.0 - x) * second + first / h)).sum(axis=1)
    right = 0.5 * (weight * (x * second - first / h)).sum(axis=1)
    return left, right, wall.min(axis=0)


def _best_bound(mesh: _Mesh, multipliers: Array) -> float:
    """The largest bound over the multipliers and smoothed versions of them (the weak form leaves them jagged)."""
    fields = [mesh.rows(points) for points in _ORDERS]
    best = 0.0
    for _ in range(_SMOOTHINGS):
        coarse, fine = (_bound_density(mesh, multipliers, *field) for field in fields)
        best = max(best, float(fine.sum() - np.abs(fine - coarse).sum()))
        smooth = multipliers.copy()
        smooth[:, 1:-1] = 0.25 * (multipliers[:, :-2] + 2 * multipliers[:, 1:-1] + multipliers[:, 2:])
        multipliers = smooth
    return best


def _bound_density(mesh: _Mesh, multipliers: Array, first: Array, second: Array, wall: Array, weight: Array) -> Array:
    """(N,) what every cell adds to the bound."""
    points = len(weight)
    limits = mesh.motion.acceleration
    half = 0.5 * (limits[:, 1] - limits[:, 0])[:, None, None]
    x = 0.5 * (np.polynomial.legendre.leggauss(points)[0] + 1.0)[:, None]
    change = np.diff(multipliers, axis=1)[:, None, :]
    value = multipliers[:, None, :-1] + change * x
    c = ((value * second - change / np.diff(mesh.tau) * first) / half).sum(axis=0) / 2
    price = np.maximum(value * limits[:, 1, None, None] / half, value * limits[:, 0, None, None] / half)
    with np.errstate(divide="ignore", invalid="ignore"):
        free = (2 * c) ** (-2.0 / 3.0)
    b = np.where((c > 0) & (free < wall), free, wall)
    return ((1 / np.sqrt(b) + c * b - price.sum(axis=0)) * weight).sum(axis=0)
