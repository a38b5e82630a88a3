"""The fine timing as a barrier problem: the least time under velocity, acceleration, jerk and tool limits.

On the clock tau, p(tau) = q(s(tau)) and b(tau) = (dtau/dt)^2. Velocity p' sqrt(b) and acceleration p' b'/2 + p'' b
are linear limits on b (Verscheure et al., IEEE TAC 2009); jerk is sqrt(b) (p' b''/2 + 1.5 p'' b' + p''' b), so its
limit reads |p' b''/2 + 1.5 p'' b' + p''' b| <= J / sqrt(b). The right side is convex, so its tangent at any b gives a
safe linear limit (convex-concave procedure: Debrouwere et al., IEEE T-RO 2013); so does the tangent of viscous torque,
which grows with sqrt(b) (see `pathplan.timing.torque`). The tangents are renewed at every Newton step: each step lowers
a bound of the true barrier function, hence the true one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import PathplanError
from pathplan.timing.barrier import newton_step, sum_by
from pathplan.timing.mesh import GAUSS_LOBATTO, LOBATTO_WEIGHTS, Mesh, Rows, hermite

Array = NDArray[np.float64]

_CURVATURE_KEPT = 0.1  # at least this share of the cost's own curvature stays in the Newton matrix
_PAIRS = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))  # of b, b_u, b_uu
_CELL_PAIRS = tuple((i, j) for i in range(4) for j in range(i, 4))  # of a cell's four unknowns


@dataclass(frozen=True)
class _State:
    b: Array  # (3, K, cells): b, b_u, b_uu
    root: Array  # (K, cells) 1/sqrt(b)
    acceleration: Array  # (R, K, cells)
    jerk: Array  # divided by sqrt(b)
    tool: Array | None  # (3, K, cells)
    torque: Array | None  # (Q, K, cells), 1 at the limit


class FineProblem:
    """Unknowns: value and slope of b at every node, stretches end to end; see `barrier.BarrierProblem`."""

    def __init__(self, meshes: Sequence[Mesh], rows: Rows) -> None:
        """`rows` are those of the meshes, end to end, at `GAUSS_LOBATTO`."""
        self.meshes = tuple(meshes)
        self.count = len(meshes)
        self.cells = np.array([len(mesh.tau) - 1 for mesh in meshes])
        self.cell_owner = np.repeat(np.arange(self.count), self.cells)
        self.owner = np.repeat(np.arange(self.count), 2 * (self.cells + 1))
        self.first = 2 * (np.arange(len(self.cell_owner)) + self.cell_owner)  # each cell's first unknown
        self.width = np.concatenate([mesh.width for mesh in meshes])
        self.stretch = self.width / np.repeat([mesh.unit for mesh in meshes], self.cells)  # slope unknown -> b_u
        self.duration = np.array([mesh.clock.duration for mesh in meshes])
        self.weights = LOBATTO_WEIGHTS[:, None] * self.width
        self.share = self.weights / self.duration[self.cell_owner]
        self.rows = rows
        torques = 0 if self.rows.torque is None else self.rows.torque.shape[1]
        self.gap = 4.0 * self.rows.acceleration.shape[1] + 2.0 + torques  # barrier terms per unit of time
        basis = hermite(GAUSS_LOBATTO)
        self._basis = basis
        self._to_gradient = basis.reshape(-1, 4).T.copy()
        self._to_matrix = np.stack([_pair_products(basis, i, j) for i, j in _CELL_PAIRS])

    def per_stretch(self, values: Array) -> Array:
        """Sum of (cells,) by stretch."""
        return sum_by(self.cell_owner, values, self.count)

    def by_stretch(self, x: Array) -> list[Array]:
        """The unknowns of every stretch."""
        return np.split(x, np.cumsum(2 * (self.cells + 1))[:-1])

    def durations(self, x: Array) -> Array:
        """(S,) duration of every stretch by the collocation quadrature."""
        return self.per_stretch((self.weights / np.sqrt(self.evaluate(x, self._basis)[0])).sum(axis=0))

    def corners(self, x: Array) -> Array:
        """(4, cells) value and slope by u at the left and right end of every cell."""
        corner = x[self.first + np.arange(4)[:, None]]
        corner[1::2] *= self.stretch
        return corner

    def evaluate(self, x: Array, basis: Array) -> Array:
        """b, b_u, b_uu (3, K, cells) at the points of a Hermite basis (3, K, 4)."""
        return (basis.reshape(-1, 4) @ self.corners(x)).reshape(3, basis.shape[1], -1)

    def state(self, x: Array) -> _State:
        b = self.evaluate(x, self._basis)
        with np.errstate(invalid="ignore", divide="ignore"):
            root = 1.0 / np.sqrt(b[0])
            torque = None if self.rows.torque is None else apply_torque(self.rows.torque, b)
        tool = self.rows.tool
        along = None if tool is None else tool[0] * b[0] + tool[1] * b[1]
        return _State(b, root, *apply_rows(self.rows, b), along, torque)

    def feasible_start(self, share: float) -> Array:
        """b constant on every stretch, so slow that no limit is used beyond about `share`."""
        x = np.zeros(len(self.owner))
        x[::2] = 1.0
        return self.slowed(x, share)

    def slowed(self, x: Array, share: float, only_down: bool = False) -> Array:
        """x scaled, stretch by stretch, so that at the collocation points no limit is used beyond `share` of b.

        Torque has a part that no slowing removes: of what it leaves, 1 - `share` stays free. Raises PathplanError where
        it leaves nothing.
        """
        shares = limit_shares(self.rows, self.evaluate(x, self._basis))
        worst = np.zeros(self.count)
        np.maximum.at(worst, self.cell_owner, shares.needed_slowing().max(axis=0))
        factor = share / worst
        if only_down:
            factor = np.minimum(factor, 1.0)
        if self.rows.torque is None:
            return x * factor[self.owner]
        room = 1.0 - self.rows.torque[3]
        for _ in range(200):
            torque = apply_torque(self.rows.torque, self.evaluate(x * factor[self.owner], self._basis))
            short = np.zeros(self.count, dtype=bool)
            short[self.cell_owner[(1.0 - torque < (1.0 - share) * room).any(axis=(0, 1))]] = True
            if not short.any():
                return x * factor[self.owner]
            factor = np.where(short, 0.8 * factor, factor)
        raise PathplanError("timing: no speed is slow enough for the torque limits")

    def value(self, state: _State) -> tuple[Array, Array]:
        a_low, a_high = self.rows.acceleration_range
        j_low, j_high = self.rows.jerk_range
        root = state.root
        under = 1.0 - state.b[0] / self.rows.wall
        slack = (
            (a_high - state.acceleration) * (state.acceleration - a_low),
            (j_high * root - state.jerk) * (state.jerk - j_low * root),
        )
        # each product of two slacks is negative where exactly one wall is crossed; both can't be
        lowest = np.minimum(under, np.minimum(slack[0].min(axis=0), slack[1].min(axis=0)))
        product = under * slack[0].prod(axis=0) * slack[1].prod(axis=0)
        if state.tool is not None:
            room = 1.0 - (state.tool**2).sum(axis=0)
            lowest, product = np.minimum(lowest, room), product * room
        if state.torque is not None:
            free = 1.0 - state.torque
            lowest, product = np.minimum(lowest, free.min(axis=0)), product * free.prod(axis=0)
        bad = ~((lowest > 0) & (state.b[0] > 0)).all(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            cost, barrier = (self.weights * root).sum(axis=0), -(self.share * np.log(product)).sum(axis=0)
        cost[bad] = barrier[bad] = np.inf
        return self.per_stretch(cost), self.per_stretch(barrier)

    def direction(self, state: _State, mu: Array) -> tuple[Array, Array]:
        gradient, matrix = self._local(state, mu[self.cell_owner] * self.share)
        cells = len(self.cell_owner)
        local = self._to_gradient @ gradient.reshape(-1, cells)
        local[1::2] *= self.stretch
        cell = self._to_matrix @ matrix.reshape(-1, cells)
        size = len(self.owner)
        total, band = np.zeros(size), np.zeros((4, size))
        for i in range(4):
            total[self.first + i] += local[i]
        for entry, (i, j) in zip(cell, _CELL_PAIRS, strict=True):
            power = i % 2 + j % 2
            band[3 - (j - i), self.first + j] += entry if power == 0 else entry * self.stretch**power
        step = newton_step(band, total)
        return step, -sum_by(self.owner, total * step, self.count)

    def _local(self, state: _State, m: Array) -> tuple[Array, Array]:
        """Gradient (3, K, cells) by b, b_u, b_uu and the six second derivatives (6, K, cells) at every point."""
        rows, b, root = self.rows, state.b[0], state.root
        a_low, a_high = rows.acceleration_range
        j_low, j_high = rows.jerk_range
        above, below = 1 / (a_high - state.acceleration), 1 / (state.acceleration - a_low)
        slope, bend = above - below, above * above + below * below
        above, below = 1 / (j_high * root - state.jerk), 1 / (state.jerk - j_low * root)
        # slack of the jerk limit: range x root(b) -+ row; `pull` is -d log(slack) / d root(b) with its sign turned
        up, down = above * j_high, below * j_low
        pull = (up - down).sum(axis=0)
        spread = (up * up + down * down).sum(axis=0)
        jerk_slope, jerk_bend = above - below, above * above + below * below
        cross = -(below * down + above * up)
        droot = -0.5 * root / b
        under = 1 / (rows.wall - b)

        a, j = rows.acceleration, rows.jerk
        gradient = np.empty((3, *b.shape))
        gradient[0] = m * ((slope * a[0]).sum(axis=0) + (jerk_slope * j[0]).sum(axis=0) - pull * droot + under)
        gradient[0] += self.weights * droot
        gradient[1] = m * ((slope * a[1]).sum(axis=0) + (jerk_slope * j[1]).sum(axis=0))
        gradient[2] = m * (jerk_slope * j[2]).sum(axis=0)

        ba0, bj0, bj1 = bend * a[0], jerk_bend * j[0], jerk_bend * j[1]
        matrix = np.empty((6, *b.shape))
        matrix[0] = (ba0 * a[0]).sum(axis=0) + (bj0 * j[0]).sum(axis=0) + under * under
        matrix[0] += droot * (spread * droot + 2 * (cross * j[0]).sum(axis=0))
        matrix[1] = (ba0 * a[1]).sum(axis=0) + (bj0 * j[1]).sum(axis=0) + droot * (cross * j[1]).sum(axis=0)
        matrix[2] = (bj0 * j[2]).sum(axis=0) + droot * (cross * j[2]).sum(axis=0)
        matrix[3] = (bend * a[1] * a[1]).sum(axis=0) + (bj1 * j[1]).sum(axis=0)
        matrix[4] = (bj1 * j[2]).sum(axis=0)
        matrix[5] = (jerk_bend * j[2] * j[2]).sum(axis=0)
        if rows.tool is not None and state.tool is not None:
            _add_tool(rows.tool, state.tool, gradient, matrix, m)
        bent = np.zeros_like(b)
        if rows.torque is not None and state.torque is not None:
            bent = _add_torque(rows.torque, state, gradient, matrix, m)
        matrix *= m
        cost = self.weights * 0.75 * root / (b * b)
        matrix[0] += np.maximum(cost - m * (pull * 0.75 * root / (b * b) - bent), _CURVATURE_KEPT * cost)
        return gradient, matrix

    def reach(self, state: _State, step: Array) -> Array:
        b = self.evaluate(step, self._basis)
        a_low, a_high = self.rows.acceleration_range
        along = self.rows.acceleration[0] * b[0] + self.rows.acceleration[1] * b[1]
        ratio = np.maximum(along / (a_high - state.acceleration), along / (a_low - state.acceleration))
        # root(b) is convex: the tangent says when the jerk wall could be met at the earliest
        j_low, j_high = self.rows.jerk_range
        root, fall = state.root, -0.5 * state.root / state.b[0] * b[0]
        along = self.rows.jerk[0] * b[0] + self.rows.jerk[1] * b[1] + self.rows.jerk[2] * b[2]
        above = (along - j_high * fall) / (j_high * root - state.jerk)
        below = (j_low * fall - along) / (state.jerk - j_low * root)
        ratio = np.maximum(ratio, np.maximum(above, below))
        if state.torque is not None and self.rows.torque is not None:
            f = self.rows.torque
            change = (f[0] + 0.5 * state.root * f[2]) * b[0] + f[1] * b[1]
            ratio = np.concatenate([ratio, change / (1.0 - state.torque)])
        walls = np.maximum(b[0] / (self.rows.wall - state.b[0]), -b[0] / state.b[0])
        worst = np.full(self.count, 1e-9)
        np.maximum.at(worst, self.cell_owner, np.maximum(ratio.max(axis=0), walls).max(axis=0))
        return 1.0 / worst


def _pair_products(basis: Array, i: int, j: int) -> Array:
    """(6 K,) what each second derivative at each point adds to entry i, j of a cell's matrix."""
    parts = []
    for d, e in _PAIRS:
        product = basis[d, :, i] * basis[e, :, j]
        parts.append(product if d == e else product + basis[e, :, i] * basis[d, :, j])
    return np.concatenate(parts)


def _add_tool(rows: Array, tool: Array, gradient: Array, matrix: Array, m: Array) -> None:
    """Barrier of the cone |tool| <= 1: -log(1 - |tool|^2), |tool|^2 convex in b and b_u."""
    room = 2 / (1 - (tool**2).sum(axis=0))
    inner = [(tool * rows[k]).sum(axis=0) * room for k in range(2)]
    for entry, (k, other) in ((0, (0, 0)), (1, (0, 1)), (3, (1, 1))):
        matrix[entry] += inner[k] * inner[other] + room * (rows[k] * rows[other]).sum(axis=0)
    for k in range(2):
        gradient[k] += m * inner[k]


def apply_rows(rows: Rows, b: Array) -> tuple[Array, Array]:
    """Acceleration, and jerk / sqrt(b), in half ranges (R, K, cells) for b, b_u, b_uu (3, K, cells)."""
    acceleration = rows.acceleration[0] * b[0] + rows.acceleration[1] * b[1]
    return acceleration, rows.jerk[0] * b[0] + rows.jerk[1] * b[1] + rows.jerk[2] * b[2]


def _add_torque(rows: Array, state: _State, gradient: Array, matrix: Array, m: Array) -> Array:
    """Barrier of the torque rows; returns (K, cells) what their square roots add to the curvature by b."""
    assert state.torque is not None
    free = 1 / (1.0 - state.torque)
    by_b = rows[0] + 0.5 * state.root * rows[2]
    gradient[0] += m * (free * by_b).sum(axis=0)
    gradient[1] += m * (free * rows[1]).sum(axis=0)
    square = free * free
    matrix[0] += (square * by_b * by_b).sum(axis=0)
    matrix[1] += (square * by_b * rows[1]).sum(axis=0)
    matrix[3] += (square * rows[1] * rows[1]).sum(axis=0)
    bent: Array = -0.25 * state.root**3 * (free * rows[2]).sum(axis=0)
    return bent


def apply_torque(rows: Array, b: Array) -> Array:
    """Torque (Q, K, cells) in shares of the limit for b, b_u, b_uu (3, K, cells)."""
    total: Array = rows[0] * b[0] + rows[1] * b[1] + rows[2] * np.sqrt(np.maximum(b[0], 0.0)) + rows[3]
    return total


class Shares(NamedTuple):
    """Shares of the limits that are used, 1 at the limit."""

    speed: Array  # (K, cells), of the square of the velocity limits and the caps on the tool's speeds
    acceleration: Array  # (R, K, cells)
    jerk: Array  # (R, K, cells)
    tool: Array  # (K, cells), tool acceleration
    torque: Array  # (Q, K, cells)

    def needed_slowing(self) -> Array:
        """The factor by which b must fall for all limits but torque to be kept, where above 1; like `speed`."""
        need: Array = np.max(
            [self.speed, self.acceleration.max(axis=0), self.jerk.max(axis=0) ** (2 / 3), self.tool], axis=0
        )
        return need

    def largest(self) -> Array:
        """(K, cells) the largest share of any limit."""
        parts = [np.sqrt(self.speed), self.acceleration.max(axis=0), self.jerk.max(axis=0), self.tool]
        if len(self.torque):
            parts.append(self.torque.max(axis=0))
        largest: Array = np.max(parts, axis=0)
        return largest


def limit_shares(rows: Rows, b: Array) -> Shares:
    """Shares used for b, b_u, b_uu (3, K, cells)."""
    acceleration, jerk = apply_rows(rows, b)
    acceleration = np.maximum(acceleration / rows.acceleration_range[0], acceleration / rows.acceleration_range[1])
    jerk = np.maximum(jerk / rows.jerk_range[0], jerk / rows.jerk_range[1]) * np.sqrt(np.maximum(b[0], 0.0))
    tool = np.zeros_like(b[0])
    if rows.tool is not None:
        tool = np.sqrt(((rows.tool[0] * b[0] + rows.tool[1] * b[1]) ** 2).sum(axis=0))
    torque = np.zeros((0, *b[0].shape)) if rows.torque is None else apply_torque(rows.torque, b)
    return Shares(b[0] / rows.wall, acceleration, jerk, tool, torque)
