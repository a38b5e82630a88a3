"""A lower bound of the duration of any motion along a path, with its proof.

Leave out the jerk limits. What is left limits b(tau) = (dtau/dt)^2 on a clock tau with s(tau) at rest at both ends
(Verscheure et al., IEEE TAC 2009): 0 < b <= wall (velocity, tool speed, turning speed), and for every row, with
coefficients that depend on tau alone,

    low <= slope b' + level b + root sqrt(b) <= high        (acceleration; torque, whose viscous part has a root)
    |slope b' + level b| <= high, a norm over three rows    (tool acceleration)

For any multipliers lambda(tau), continuous and piecewise linear, and any motion that keeps the limits,

    duration >= integral of 1/sqrt(b) + sum lambda (slope b' + level b + root sqrt(b)) - price
              = integral of 1/sqrt(b) + c b + d sqrt(b) - price,
    c = sum lambda (level - slope') - lambda' slope,    d = sum lambda root,
    price = sum (lambda+ high - lambda- low), or |lambda| high for a norm,

by integration by parts; the boundary terms vanish because slope is zero where the clock is at rest. The right side is
least where at every tau by itself b makes 1/sqrt(b) + c b + d sqrt(b) least in (0, wall]. That least value is the bound
(weak duality: Boyd & Vandenberghe 2004, sec. 5.2): it holds whatever the multipliers are and whether or not the problem
is convex; good multipliers only make it tight. They come from a barrier method on the weak form of the same problem (b
constant in cells, the rows tested with hat functions and integrated by parts), whose multipliers are such functions.
The integral is taken by Gauss-Legendre quadrature of two orders, and their difference, cell by cell, is taken off.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.quadrature import gauss_legendre
from pathplan.timing.barrier import follow_central_path, newton_step, sum_by
from pathplan.timing.coarse import CoarseTiming, coarse_timing
from pathplan.timing.motion import Along, Motion

Array = NDArray[np.float64]

_ORDERS = (5, 8)  # Gauss-Legendre points of the two quadratures
_TEST_POINTS = 3
_GAP = 3e-4
_CELLS = 160
_SMOOTHINGS = 3
_FAR = 1e9  # a limit that is none, in half ranges


@dataclass(frozen=True)
class _Field:
    """Coefficients at P Gauss points of N cells; rows are normalised by half their range."""

    slope: Array  # (R, P, N)
    change: Array  # slope' by tau
    level: Array
    root: Array
    low: Array  # (R, P, N), -inf where there is none
    high: Array
    tool_slope: Array  # (3, P, N), m per tau
    tool_level: Array
    tool_high: Array  # (P, N) m/s^2, inf where there is no cap
    wall: Array  # (P, N)
    weight: Array  # (P, N) of the quadrature


@dataclass(frozen=True)
class _Mesh:
    motion: Motion
    coarse: CoarseTiming
    tau: Array  # (N+1,)
    cell: NDArray[np.intp]  # (N,) cell of the coarse timing

    def field(self, points: int) -> _Field:
        """Coefficients at the Gauss-Legendre points of every cell."""
        motion, h = self.motion, np.diff(self.tau)
        x, w = gauss_legendre(points)
        tau = self.tau[:-1] + h * (0.5 * (x + 1.0))[:, None]
        cell = np.tile(self.cell, points)
        s, s1, s2 = self.coarse.at(cell, tau.ravel())
        piece = self.coarse.piece[cell]
        along = motion.along(piece, s, 2)
        q1, q2 = along.rows
        wall = along.wall() / s1**2
        shape = (-1, points, len(h))
        half = 0.5 * (motion.acceleration[:, 1] - motion.acceleration[:, 0])[:, None, None]
        first, second = (q1.T * s1).reshape(shape) / half, (q2.T * s1**2 + q1.T * s2).reshape(shape) / half
        limits = [np.broadcast_to(motion.acceleration[:, k, None, None] / half, first.shape) for k in range(2)]
        rows = [(0.5 * first, 0.5 * second, second, np.zeros_like(first), limits[0], limits[1])]
        torque = along.torque_rows(s1, s2)
        if torque is not None:
            slope = torque.on_slope.reshape(shape)
            change = np.einsum("pk,rkn->rpn", _differentiation(x), slope) * (2.0 / h)
            high = 1.0 - torque.constant.reshape(shape)
            never = np.full_like(slope, -np.inf)
            rows.append((slope, change, torque.on_b.reshape(shape), torque.on_root.reshape(shape), never, high))
        tool = _tool(along, s1, s2, shape)
        on_slope, change, level, root, low, high = (np.concatenate(parts) for parts in zip(*rows, strict=True))
        weight = 0.5 * w[:, None] * h
        return _Field(on_slope, change, level, root, low, high, *tool, wall.reshape(shape[1:]), weight)


def _tool(along: Along, s1: Array, s2: Array, shape: tuple[int, ...]) -> tuple[Array, Array, Array]:
    """Coefficients on slope and level (3, P, N) of the tool's acceleration, and its cap (P, N)."""
    cap = along.tool_acceleration_cap
    x1, x2 = (np.where(np.isfinite(cap), value.T, 0.0) for value in along.tool)
    slope, level = 0.5 * x1 * s1, x2 * s1**2 + x1 * s2
    return slope.reshape(shape), level.reshape(shape), cap.reshape(shape[1:])


def bound_durations(motions: Sequence[Motion], coarse: Sequence[CoarseTiming] | None = None) -> Array:
    """(S,) lower bounds in s, one a motion. `coarse` spares computing the coarse timings anew."""
    timings = coarse_timing(motions) if coarse is None else coarse
    meshes = [_mesh(motion, timing) for motion, timing in zip(motions, timings, strict=True)]
    problem = _Weak(meshes)
    start = problem.feasible_start()
    weight = problem.durations(start) / problem.gap
    b, _ = follow_central_path(problem, start, start=0.1 * weight, final=_GAP * weight, factor=0.15, last=1e-6)
    multipliers = problem.multipliers(b, _GAP * weight)
    return np.array([_best_bound(mesh, *m) for mesh, m in zip(meshes, multipliers, strict=True)])


def _mesh(motion: Motion, coarse: CoarseTiming) -> _Mesh:
    width = np.diff(coarse.time)
    count = np.maximum(1, np.round(width / (coarse.time[-1] / _CELLS))).astype(int)
    cell = np.repeat(np.arange(len(width)), count)
    share = (np.arange(len(cell)) - np.repeat(np.cumsum(count) - count, count)) / count[cell]
    tau = np.append(coarse.time[:-1][cell] + width[cell] * share, coarse.time[-1])
    return _Mesh(motion, coarse, tau, cell)


def _differentiation(x: Array) -> Array:
    """(P, P) derivative at points x of the polynomial through values there (barycentric: Berrut & Trefethen 2004)."""
    difference = x[:, None] - x + np.eye(len(x))
    weight = 1.0 / difference.prod(axis=1)
    matrix = weight / weight[:, None] / difference
    np.fill_diagonal(matrix, 0.0)
    np.fill_diagonal(matrix, -matrix.sum(axis=1))
    return matrix


@dataclass(frozen=True)
class _State:
    b: Array  # (cells,)
    root: Array  # sqrt(b)
    rows: Array  # (R, nodes)
    tool: Array  # (3, nodes)


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
        nodes = len(self.node_owner)
        self.node_width = sum_by(self.left, self.h / 2, nodes) + sum_by(self.right, self.h / 2, nodes)
        total = sum_by(self.owner, self.h, self.count)
        self.share, self.node_share = self.h / total[self.owner], self.node_width / total[self.node_owner]
        self._test([mesh.field(_TEST_POINTS) for mesh in meshes])
        self.gap = 2.0 * len(self.low) + 3.0

    def _test(self, fields: Sequence[_Field]) -> None:
        """Test the rows of all stretches with the hat functions."""
        widest = max(len(field.slope) for field in fields)
        cells, nodes = len(self.owner), len(self.node_owner)
        # what b, and its root, in a cell add to the rows of its left (0) and right (1) node
        self.on_b, self.on_root = np.zeros((2, 2, widest, cells))
        self.tool_on_b = np.zeros((2, 3, cells))
        self.low, self.high = np.zeros((2, widest, nodes))
        self.wall = np.concatenate([field.wall.min(axis=0) for field in fields])
        capped = np.ones(nodes, dtype=bool)
        cap = np.zeros(nodes)
        x = 0.5 * (gauss_legendre(_TEST_POINTS)[0] + 1.0)[:, None]
        at = 0
        for k, field in enumerate(fields):
            here = slice(at, at + field.wall.shape[1])
            rows = slice(0, len(field.slope))
            h = self.h[here]
            for end, (hat, steep) in enumerate(((1.0 - x, -1.0 / h), (x, 1.0 / h))):
                node = slice(at + k + end, at + k + end + len(h))
                tested = field.weight * hat
                b = (tested * (field.level - field.change) - field.weight * steep * field.slope).sum(axis=1)
                self.on_b[end, rows, here] = b / self.node_width[node]
                self.on_root[end, rows, here] = (tested * field.root).sum(axis=1) / self.node_width[node]
                self.low[rows, node] += (tested * np.maximum(field.low, -_FAR)).sum(axis=1) / self.node_width[node]
                self.high[rows, node] += (tested * field.high).sum(axis=1) / self.node_width[node]
                tool = (tested * 0.5 * field.tool_level - field.weight * steep * field.tool_slope).sum(axis=1)
                self.tool_on_b[end, :, here] = tool / self.node_width[node]
                whole = np.isfinite(field.tool_high).all(axis=0)
                capped[node] &= whole
                top = np.where(np.isfinite(field.tool_high), field.tool_high, 0.0)
                cap[node] += (tested * top).sum(axis=0) / self.node_width[node]
            empty = slice(len(field.slope), widest)
            self.low[empty, at + k : at + k + len(h) + 1], self.high[empty, at + k : at + k + len(h) + 1] = -1.0, 1.0
            at += len(h)
        self.cap = np.where(capped, cap, np.inf)  # m/s^2; a node next to an uncapped cell has no cap
        self.tool_on_b[0] /= self.cap[self.left]
        self.tool_on_b[1] /= self.cap[self.right]

    def durations(self, b: Array) -> Array:
        return sum_by(self.owner, self.h / np.sqrt(b), self.count)

    def _at_nodes(self, left: Array, right: Array) -> Array:
        out = np.zeros((len(left), len(self.node_owner)))
        out[:, self.left] = left
        out[:, self.right] += right
        return out

    def feasible_start(self) -> Array:
        """b constant on every stretch, no limit used beyond about 0.9 of the room it leaves."""
        factor = np.ones(self.count)
        for _ in range(400):
            state = self.state(factor[self.owner])
            used = np.maximum(state.rows / np.where(self.rows_up(state), self.high, self.low), 0.0).max(axis=0)
            used = np.maximum(used, np.sqrt((state.tool**2).sum(axis=0)))
            worst = np.zeros(self.count)
            np.maximum.at(worst, self.node_owner, used)
            np.maximum.at(worst, self.owner, state.b / self.wall)
            if not np.any(worst > 0.9):
                return factor[self.owner]
            factor = np.where(worst > 0.9, factor / np.clip(worst / 0.85, 1.05, 1e6), factor)
        raise ArithmeticError("timing: no speed is slow enough for the limits")

    @staticmethod
    def rows_up(state: _State) -> NDArray[np.bool_]:
        return state.rows > 0

    def state(self, b: Array) -> _State:
        root = np.sqrt(np.maximum(b, 0.0))
        rows = self._at_nodes(*(self.on_b[end] * b + self.on_root[end] * root for end in range(2)))
        return _State(b, root, rows, self._at_nodes(*(self.tool_on_b[end] * b for end in range(2))))

    def value(self, state: _State) -> tuple[Array, Array]:
        under = 1.0 - state.b / self.wall
        slack = (self.high - state.rows) * (state.rows - self.low)
        room = 1.0 - (state.tool**2).sum(axis=0)
        bad_node = ~((slack > 0).all(axis=0) & (room > 0))
        bad = ~((under > 0) & (state.b > 0))
        with np.errstate(invalid="ignore", divide="ignore"):
            cost, barrier = self.h / state.root, -self.share * np.log(under)
            node_barrier = -self.node_share * (np.log(slack).sum(axis=0) + np.log(room))
        barrier[bad] = node_barrier[bad_node] = np.inf
        return (
            sum_by(self.owner, cost, self.count),
            sum_by(self.owner, barrier, self.count) + sum_by(self.node_owner, node_barrier, self.count),
        )

    def direction(self, state: _State, mu: Array) -> tuple[Array, Array]:
        m, m_node = mu[self.owner] * self.share, mu[self.node_owner] * self.node_share
        above, below = 1 / (self.high - state.rows), 1 / (state.rows - self.low)
        slope, bend = m_node * (above - below), m_node * (above * above + below * below)
        # rows are linear in b but for the root, whose tangent stands for it
        tangent = [self.on_b[end] + self.on_root[end] * (0.5 / state.root) for end in range(2)]
        room = 2.0 * m_node / (1.0 - (state.tool**2).sum(axis=0))
        ends = (self.left, self.right)
        under = 1 / (self.wall - state.b)
        time = self.h / state.root / state.b
        gradient = m * under - 0.5 * time
        band = np.zeros((2, len(state.b)))
        band[1] = 0.75 * time / state.b + m * under * under
        pull = []
        for end, node in enumerate(ends):
            tool = self.tool_on_b[end]
            pull.append((state.tool[:, node] * tool).sum(axis=0))
            gradient += (slope[:, node] * tangent[end]).sum(axis=0) + room[node] * pull[end]
            band[1] += (bend[:, node] * tangent[end] ** 2).sum(axis=0)
            band[1] += room[node] * (tool**2).sum(axis=0) + room[node] ** 2 / m_node[node] * pull[end] ** 2
        neighbours = self.owner[1:] == self.owner[:-1]
        node = self.left[1:]
        shared = (bend[:, node] * tangent[1][:, :-1] * tangent[0][:, 1:]).sum(axis=0)
        shared += room[node] * (self.tool_on_b[1][:, :-1] * self.tool_on_b[0][:, 1:]).sum(axis=0)
        shared += room[node] ** 2 / m_node[node] * pull[1][:-1] * pull[0][1:]
        band[0, 1:] = np.where(neighbours, shared, 0.0)
        step = newton_step(band, gradient)
        return step, -sum_by(self.owner, gradient * step, self.count)

    def reach(self, state: _State, step: Array) -> Array:
        tangent = (self.on_b[end] + self.on_root[end] * (0.5 / state.root) for end in range(2))
        rows = self._at_nodes(*(side * step for side in tangent))
        ratio = np.maximum(rows / (self.high - state.rows), rows / (self.low - state.rows)).max(axis=0)
        worst = np.full(self.count, 1e-9)
        np.maximum.at(worst, self.node_owner, ratio)
        np.maximum.at(worst, self.owner, np.maximum(step / (self.wall - state.b), -step / state.b))
        return 1.0 / worst

    def multipliers(self, b: Array, mu: Array) -> list[tuple[Array, Array]]:
        """For every stretch, per unit of tau: signed multipliers of the rows (R, nodes) and of the tool (3, nodes)."""
        state = self.state(b)
        weight = mu[self.node_owner] * self.node_share / self.node_width
        density = weight * (1 / (self.high - state.rows) - 1 / (state.rows - self.low))
        tool = weight * 2 * state.tool / (1.0 - (state.tool**2).sum(axis=0)) / self.cap
        one_sided = self.low <= -0.5 * _FAR
        density = np.where(one_sided, np.maximum(density, 0.0), density)
        borders = np.cumsum(self.nodes)[:-1]
        return list(zip(np.split(density, borders, axis=1), np.split(tool, borders, axis=1), strict=True))


def _best_bound(mesh: _Mesh, rows: Array, tool: Array) -> float:
    """The largest bound over the multipliers and smoothed versions of them (the weak form leaves them jagged)."""
    fields = [mesh.field(points) for points in _ORDERS]
    rows = rows[: len(fields[0].slope)]
    best = 0.0
    for _ in range(_SMOOTHINGS):
        coarse, fine = (_bound_density(mesh, field, rows, tool) for field in fields)
        best = max(best, float(fine.sum() - np.abs(fine - coarse).sum()))
        rows = _smoothed(rows)
    return best


def _smoothed(values: Array) -> Array:
    smooth = values.copy()
    smooth[:, 1:-1] = 0.25 * (values[:, :-2] + 2 * values[:, 1:-1] + values[:, 2:])
    return smooth


def _bound_density(mesh: _Mesh, field: _Field, rows: Array, tool: Array) -> Array:
    """(N,) what every cell adds to the bound."""
    h = np.diff(mesh.tau)
    x = 0.5 * (gauss_legendre(len(field.weight))[0] + 1.0)[:, None]

    def between(nodes: Array) -> tuple[Array, Array]:
        change = np.diff(nodes, axis=1)[:, None, :]
        return nodes[:, None, :-1] + change * x, change / h

    value, change = between(rows)
    c = (value * (field.level - field.change) - change * field.slope).sum(axis=0)
    d = (value * field.root).sum(axis=0)
    with np.errstate(invalid="ignore"):
        price = np.maximum(value * field.high, np.where(value < 0, value * field.low, 0.0)).sum(axis=0)
    if tool.any():
        value, change = between(tool)
        c += (value * 0.5 * field.tool_level - change * field.tool_slope).sum(axis=0)
        size = np.sqrt((value**2).sum(axis=0))
        price += np.where(size > 0, size * np.where(np.isfinite(field.tool_high), field.tool_high, 0.0), 0.0)
    return ((_least(c, d, np.sqrt(field.wall)) - price) * field.weight).sum(axis=0)


def _least(c: Array, d: Array, wall: Array) -> Array:
    """The least of 1/y + c y^2 + d y over 0 < y <= wall."""

    def value(y: Array) -> Array:
        out: Array = 1 / y + c * y * y + d * y
        return out

    # the slope -1/y^2 + 2 c y + d rises from -inf while 2/y^3 + 2 c > 0: its zero there is the only inner minimum
    with np.errstate(divide="ignore", invalid="ignore"):
        top = np.where(c < 0, np.minimum(wall, np.cbrt(1 / np.abs(c))), wall)
        rising = (-1 / top**2 + 2 * c * top + d) > 0
    low, high = np.zeros_like(top), top
    if not d.any():
        with np.errstate(divide="ignore"):
            high = np.where(rising, np.cbrt(0.5 / np.where(c > 0, c, np.inf)), top)
    else:
        for _ in range(60):
            middle = 0.5 * (low + high)
            with np.errstate(divide="ignore"):
                up = (-1 / middle**2 + 2 * c * middle + d) > 0
            low, high = np.where(up, low, middle), np.where(up, middle, high)
    inner = np.where(rising, value(np.where(rising, high, wall)), np.inf)
    return np.minimum(inner, value(wall))
