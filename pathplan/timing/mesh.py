"""The fine timing's unknowns and points: b(tau) as a cubic Hermite spline, and the limited rows on the clock."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.clock import Clock
from pathplan.timing.motion import Along, Motion

Array = NDArray[np.float64]

GAUSS_LOBATTO = np.array([0.0, 0.5 - np.sqrt(0.05), 0.5 + np.sqrt(0.05), 1.0])  # on [0, 1]
LOBATTO_WEIGHTS = np.array([1.0, 5.0, 5.0, 1.0]) / 12.0
LOOKED = np.sort(np.concatenate([GAUSS_LOBATTO, 0.5 * (GAUSS_LOBATTO[:-1] + GAUSS_LOBATTO[1:])]))
_FAR = 1e12  # a wall that is no wall


def hermite(u: Array) -> Array:
    """Cubic Hermite basis at u (K,) in [0, 1] of a cell: (3, K, 4).

    First axis: value, first and second derivative by u. Last: value and slope at the left end, then at the right.
    """
    value = [(1 + 2 * u) * (1 - u) ** 2, u * (1 - u) ** 2, u * u * (3 - 2 * u), u * u * (u - 1)]
    first = [6 * u * u - 6 * u, 3 * u * u - 4 * u + 1, 6 * u - 6 * u * u, 3 * u * u - 2 * u]
    second = [12 * u - 6, 6 * u - 4, 6 - 12 * u, 6 * u - 2]
    return np.stack([np.stack(value, -1), np.stack(first, -1), np.stack(second, -1)])


@dataclass(frozen=True)
class Mesh:
    """Cells of one stretch on its clock; the motion's borders are cell borders, so each cell is smooth inside."""

    motion: Motion
    clock: Clock
    tau: Array  # (N+1,)
    unit: float  # of tau, that slopes of b are expressed in

    @property
    def width(self) -> Array:
        """(N,) cell widths."""
        return np.diff(self.tau)


@dataclass(frozen=True)
class Rows:
    """Limited rows at K points of every cell, points before cells so that sums run over whole arrays.

    Coefficients are on b and its derivatives by u, the place in the cell (0..1), in shares of each row's half range.
    velocity: b <= wall.   acceleration: low <= a[0] b + a[1] b_u <= high.
    jerk: low / sqrt(b) <= j[0] b + j[1] b_u + j[2] b_uu <= high / sqrt(b).
    tool: |t[0] b + t[1] b_u| <= 1 (a norm over three axes), zero rows where there is no cap.
    torque: f[0] b + f[1] b_u + f[2] sqrt(b) + f[3] <= 1, one-sided.
    """

    wall: Array  # (K, cells)
    acceleration: Array  # (2, R, K, cells)
    acceleration_range: Array  # (2, R, 1, cells or 1): low, high
    jerk: Array  # (3, R, K, cells)
    jerk_range: Array
    tool: Array | None  # (2, 3, K, cells)
    torque: Array | None = None  # (4, Q, K, cells)

    def collocated(self) -> Rows:
        """Rows at `LOOKED` as rows at `GAUSS_LOBATTO`, every second of them."""
        return self._each(lambda values: values[..., ::2, :] if values.shape[-2] > 1 else values)

    def divided(self, parts: NDArray[np.intp], fresh: Rows) -> Rows:
        """Rows of a mesh whose cells have been divided into `parts` (cells,); `fresh` are those of the new cells."""
        old = np.repeat(np.arange(len(parts)), parts)
        new = np.flatnonzero(np.repeat(parts > 1, parts))

        def mixed(values: Array, renewed: Array) -> Array:
            if values.shape[-1] == 1:
                return values
            out = values[..., old]
            out[..., new] = renewed
            return out

        return self._each(mixed, fresh)

    def _each(self, change: Callable[..., Array], *others: Rows) -> Rows:
        """Rows with every array changed, together with those of other rows."""
        changed: dict[str, Array | None] = {}
        for field in fields(self):
            values = [getattr(rows, field.name) for rows in (self, *others)]
            changed[field.name] = None if values[0] is None else change(*values)
        return Rows(**changed)  # type: ignore[arg-type]

    def tightened(self, wall: Array, acceleration: Array, jerk: Array, tool: Array, torque: Array) -> Rows:
        """Rows multiplied by factors >= 1 for each cell: wall and tool (cells,), acceleration and jerk (R, cells).

        Torque (Q, cells) has a constant part, which stays: what its factor exceeds 1 by is taken off its limit.
        """
        return Rows(
            self.wall / wall,
            self.acceleration * acceleration[:, None],
            self.acceleration_range,
            self.jerk * jerk[:, None],
            self.jerk_range,
            None if self.tool is None else self.tool * tool,
            None if self.torque is None else _shrunk(self.torque, torque - 1.0),
        )


def _shrunk(torque: Array, less: Array) -> Array:
    """Torque rows whose limit is lower by `less` (Q, cells), but never by more than most of the room there is."""
    room = 1.0 - torque[3].max(axis=1)
    shrunk = torque.copy()
    shrunk[3] += np.minimum(less, 0.8 * np.maximum(room, 0.0))[:, None]
    return shrunk


def make_mesh(motion: Motion, clock: Clock, cells: int, cells_per_piece: int) -> Mesh:
    """About `cells` equal cells, at least `cells_per_piece` between two borders of the motion."""
    inner = motion.borders()[1:-1]
    borders = np.concatenate([[0.0], clock.inverse(inner) if len(inner) else [], [clock.duration]])
    width = np.diff(borders)
    count = np.maximum(cells_per_piece, np.round(cells * width / clock.duration)).astype(int)
    start = np.repeat(borders[:-1], count)
    share = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    tau = np.append(start + np.repeat(width / count, count) * share, clock.duration)
    return Mesh(motion, clock, tau, clock.duration / cells)


@dataclass(frozen=True)
class _Points:
    """The points u of cells of a mesh, flat, point by point."""

    width: Array  # (cells,)
    shape: tuple[int, int]  # (K, cells)
    along: Along
    s1: Array
    s2: Array
    s3: Array


def _points(mesh: Mesh, u: Array, cells: NDArray[np.intp] | None, highest: int) -> _Points:
    start, width = mesh.tau[:-1], mesh.width
    if cells is not None:
        start, width = start[cells], width[cells]
    centre = mesh.clock.derivatives(start + 0.5 * width, 0)[0]
    piece = np.tile(mesh.motion.path.locate(centre)[0], len(u))
    s, s1, s2, s3 = mesh.clock.derivatives((start + width * u[:, None]).ravel())
    return _Points(width, (len(u), len(start)), mesh.motion.along(piece, s, highest), s1, s2, s3)


def torque_rows_at(mesh: Mesh, u: Array) -> Array | None:
    """The torque rows (4, Q, K, cells) of a mesh at the points u (K,) of every cell; None without torque limits."""
    return _torque_rows(_points(mesh, u, None, 2))


def rows_at(mesh: Mesh, u: Array, cells: NDArray[np.intp] | None = None) -> Rows:
    """The limited rows of a mesh at the points u (K,) in [0, 1] of every cell, one-sided at cell ends.

    Of some cells only if `cells` (C,) names them.
    """
    points = _points(mesh, u, cells, 3)
    motion, h, shape = mesh.motion, points.width, points.shape
    s1, s2, s3 = points.s1, points.s2, points.s3
    q1, q2, q3 = (rows.T for rows in points.along.rows)
    p1 = q1 * s1
    p2 = q2 * s1**2 + q1 * s2
    p3 = q3 * s1**3 + 3 * q2 * s1 * s2 + q1 * s3
    with np.errstate(divide="ignore"):
        wall = points.along.wall() / s1**2
    half = 0.5 * (motion.acceleration[:, 1] - motion.acceleration[:, 0])
    half_jerk = 0.5 * (motion.jerk[:, 1] - motion.jerk[:, 0])
    p1, p2, p3 = (p.reshape(len(half), *shape) for p in (p1, p2, p3))
    a, j = 1 / half[:, None, None], 1 / half_jerk[:, None, None]
    return Rows(
        wall=np.minimum(wall, _FAR).reshape(shape),
        acceleration=np.stack([p2 * a, p1 * (0.5 * a / h)]),
        acceleration_range=(motion.acceleration / half[:, None]).T[:, :, None, None],
        jerk=np.stack([p3 * j, p2 * (1.5 * j / h), p1 * (0.5 * j / h**2)]),
        jerk_range=(motion.jerk / half_jerk[:, None]).T[:, :, None, None],
        tool=_tool_rows(points),
        torque=_torque_rows(points),
    )


def _torque_rows(points: _Points) -> Array | None:
    rows = points.along.torque_rows(points.s1, points.s2)
    if rows is None or not len(rows.joint):
        return None
    shape = (-1, *points.shape)
    on = [value.reshape(shape) for value in (rows.on_b, rows.on_slope, rows.on_root, rows.constant)]
    return np.stack([on[0], on[1] / points.width, on[2], on[3]])


def _tool_rows(points: _Points) -> Array | None:
    if all(cap.acceleration is None for cap in points.along.motion.caps):
        return None
    cap = points.along.tool_acceleration_cap
    x1, x2 = (value.T / cap for value in points.along.tool)
    rows = np.stack([x2 * points.s1**2 + x1 * points.s2, 0.5 * x1 * points.s1])
    by_cell = rows.reshape(2, 3, *points.shape)
    by_cell[1] /= points.width
    return by_cell


def joined(parts: Sequence[Rows]) -> Rows:
    """Rows of several stretches end to end; stretches with fewer rows are padded with rows that never bind."""
    widest = max(p.acceleration.shape[1] for p in parts)

    def pad(values: Array) -> Array:
        extra = widest - values.shape[1]
        return np.pad(values, [(0, 0), (0, extra), (0, 0), (0, 0)]) if extra else values

    def spread(values: Array, cells: int) -> Array:
        extra = np.tile(np.array([-1.0, 1.0])[:, None, None, None], (1, widest - values.shape[1], 1, values.shape[3]))
        full = np.concatenate([values, extra], axis=1)
        return np.broadcast_to(full, (2, widest, 1, cells))

    tool = None
    if any(p.tool is not None for p in parts):
        tool = np.concatenate([np.zeros((2, 3, *p.wall.shape)) if p.tool is None else p.tool for p in parts], axis=3)
    torque = None
    if any(p.torque is not None for p in parts):
        most = max(p.torque.shape[1] for p in parts if p.torque is not None)
        torque = np.concatenate([_widened(p.torque, most, p.wall.shape) for p in parts], axis=3)
    return Rows(
        np.concatenate([p.wall for p in parts], axis=1),
        np.concatenate([pad(p.acceleration) for p in parts], axis=3),
        np.concatenate([spread(p.acceleration_range, p.wall.shape[1]) for p in parts], axis=3),
        np.concatenate([pad(p.jerk) for p in parts], axis=3),
        np.concatenate([spread(p.jerk_range, p.wall.shape[1]) for p in parts], axis=3),
        tool,
        torque,
    )


def _widened(torque: Array | None, rows: int, shape: tuple[int, ...]) -> Array:
    """Torque rows padded to `rows` with ones that never bind."""
    wide = np.zeros((4, rows, *shape))
    if torque is not None:
        wide[:, : torque.shape[1]] = torque
    return wide
