"""Newton and damped least-squares steps over a batch of joint values, each row towards a pose of its own."""

from __future__ import annotations

import numpy as np

from pathplan.arm.geometry import Geometry
from pathplan.arm.kinematics import walk
from pathplan.arm.model import Array
from pathplan.arm.subproblems import wrapped

__all__ = ["apart", "canonical", "descend", "missing", "pose_errors", "reached", "refine"]

CHUNK = 2048
STRIDE = 0.3  # rad, or lengths of the arm: a larger step left the neighbourhood in which Newton's method is good
ROUNDS = 10
IDLE = 3  # rounds in a row without progress that end a row
ENOUGH = 2e-15  # of a metre over the arm's length, and rad: rounding
# On an arm with fewer than six axes the position comes first: what a pose is tilted by is not to move the tool.
POSITION_FIRST = 1e3


def pose_errors(reached: Array, asked: Array) -> tuple[Array, Array]:
    """Distance (m) and angle (rad) between poses (..., 4, 4)."""
    apart = reached[..., :3, :] - asked[..., :3, :]
    squares = apart * apart
    distance = np.sqrt(squares[..., 3].sum(axis=-1))
    # |R1 - R2| (Frobenius) = 2 sqrt 2 sin(angle / 2): as exact for small angles as the rotations are.
    half = np.sqrt(squares[..., :3].sum(axis=(-2, -1))) / (2.0 * np.sqrt(2.0))
    return distance, 2.0 * np.arcsin(np.minimum(half, 1.0))


def reached(g: Geometry, q: Array) -> Array:
    """Poses (..., 4, 4) of joint values (..., m)."""
    rows = q.reshape(-1, g.m)
    out = np.zeros((len(rows), 4, 4))
    out[:, 3, 3] = 1.0
    for start in range(0, len(rows), CHUNK):
        part = slice(start, start + CHUNK)
        columns, point = walk(g.chain, rows[part])
        out[part, :3, :3], out[part, :3, 3] = columns.transpose(2, 1, 0), point.T
    return out.reshape(*q.shape[:-1], 4, 4)


def canonical(g: Geometry, q: Array) -> Array:
    """Revolute joints (..., m) brought into (-pi, pi]."""
    return np.where([kind == "revolute" for kind in g.kinds], wrapped(q), q)


def apart(g: Geometry, q: Array, other: Array) -> Array:
    """Largest difference (...) between joint values (..., m), revolute ones in (-pi, pi], whole turns left aside,
    metres over the arm's length.
    """
    gap = np.abs(q - other)
    for k, kind in enumerate(g.kinds):
        if kind == "revolute":
            np.minimum(gap[..., k], 2.0 * np.pi - gap[..., k], out=gap[..., k])
        else:
            gap[..., k] /= g.length
    return np.asarray(gap.max(axis=-1))


def missing(rotation: Array, point: Array, poses: Array) -> Array:
    """Twist (K, 6) from where tools stand, rotations (3 columns, 3 rows, K) and points (3, K), to poses (K, 4, 4)."""
    turn = np.einsum("kia,aik->k", poses[:, :3, :3], rotation)  # trace of asked @ reached^T
    skew = np.empty((len(poses), 3))
    for i, (j, k) in enumerate(((2, 1), (0, 2), (1, 0))):
        # Element (j, k) of asked @ reached^T less element (k, j).
        skew[:, i] = np.einsum("na,an->n", poses[:, j, :3], rotation[:, k]) - np.einsum(
            "na,an->n", poses[:, k, :3], rotation[:, j]
        )
    sine = np.sqrt(np.sum(skew * skew, axis=1)) / 2.0
    angle = np.arctan2(sine, (turn - 1.0) / 2.0)
    # angle / sine tends to 1; at a half turn the axis is lost, any push away from it will do.
    factor = np.where(sine > 1e-8, angle / np.maximum(sine, 1e-8), 1.0) / 2.0
    return np.concatenate([poses[:, :3, 3] - point.T, factor[:, None] * skew], axis=1)


def _linear(g: Geometry, q: Array, poses: Array) -> tuple[Array, Array]:
    """Scaled errors (K, 6) and Jacobians (K, 6, m): metres over the arm's length, prismatic joints in lengths."""
    axes_at: list[tuple[Array, Array]] = []
    columns, tcp = walk(g.chain, q, axes_at)
    error = missing(columns, tcp, poses)
    matrix = np.zeros((len(q), 6, g.m))
    for k, (axis, point) in enumerate(axes_at):
        if g.kinds[k] == "revolute":
            arm = tcp - point
            matrix[:, 0, k] = axis[1] * arm[2] - axis[2] * arm[1]
            matrix[:, 1, k] = axis[2] * arm[0] - axis[0] * arm[2]
            matrix[:, 2, k] = axis[0] * arm[1] - axis[1] * arm[0]
            matrix[:, 3:, k] = axis.T
        else:
            matrix[:, :3, k] = axis.T * g.length
    error[:, :3] /= g.length
    matrix[:, :3] /= g.length
    return error, matrix


def _step(matrix: Array, error: Array, damping: Array | float) -> Array:
    """Damped least squares: (J^T J + damping) step = J^T error."""
    normal = np.einsum("kij,kil->kjl", matrix, matrix)
    diagonal = np.arange(matrix.shape[2])
    normal[:, diagonal, diagonal] += np.reshape(damping, (-1, 1))
    return np.asarray(np.linalg.solve(normal, np.einsum("kij,ki->kj", matrix, error)[..., None])[..., 0])


def _newton_step(matrix: Array, error: Array) -> Array:
    """J step = error; damped a hair, which only tells where J is singular to rounding."""
    if matrix.shape[2] != 6:
        return _step(matrix, error, 1e-15)
    determined = np.abs(np.linalg.det(matrix)) > 1e-12
    if determined.all():
        return np.asarray(np.linalg.solve(matrix, error[..., None])[..., 0])
    step = np.empty(error.shape)
    step[determined] = np.linalg.solve(matrix[determined], error[determined][..., None])[..., 0]
    step[~determined] = _step(matrix[~determined], error[~determined], 1e-14)
    return step


def refine(g: Geometry, q: Array, poses: Array, rounds: int = ROUNDS) -> Array:
    """Newton steps from joint values (K, m) to poses (K, 4, 4), until rounding. A row that does not converge keeps the
    best it came to; no row moves by more than `STRIDE` in one step.
    """
    q = np.array(q, dtype=float)
    scale = np.array([1.0 if kind == "revolute" else g.length for kind in g.kinds])
    weight = np.array([POSITION_FIRST if g.m < 6 else 1.0] * 3 + [1.0] * 3)
    best, least = q.copy(), np.full(len(q), np.inf)
    active, idle = np.arange(len(q)), np.zeros(len(q), dtype=int)
    for _ in range(rounds + 1):
        error, matrix = _linear(g, q[active], poses[active])
        error *= weight
        size = np.sqrt(np.sum(error * error, axis=1))
        better = size < least[active]
        kept = active[better]
        # Where steps bring nothing any more, rounding or a minimum is reached.
        idle[active] = np.where(size < 0.9 * least[active], 0, idle[active] + 1)
        least[kept], best[kept] = size[better], q[kept]
        going = (idle[active] < np.where(size < 1e-9, 1, IDLE)) & (size > ENOUGH)
        active = active[going]
        if not len(active):
            break
        step = _newton_step(matrix[going] * weight[:, None], error[going])
        largest = np.abs(step).max(axis=1)
        step *= np.minimum(1.0, STRIDE / np.maximum(largest, 1e-300))[:, None]
        q[active] += step * scale
    return best


def descend(g: Geometry, q: Array, poses: Array, rounds: int = 40, enough: float = 1e-7) -> tuple[Array, Array]:
    """Damped least squares (Levenberg 1944, Marquardt 1963) from joint values (K, m), far from poses (K, 4, 4).

    Returns joint values and what is missing (K,): metres over the arm's length and rad together. Rows that stand
    nearer than `enough`, and rows that stopped moving, are left alone.
    """
    q = np.array(q, dtype=float)
    scale = np.array([1.0 if kind == "revolute" else g.length for kind in g.kinds])
    damping = np.full(len(q), 1e-2)
    error, matrix = _linear(g, q, poses)
    cost = np.sum(error * error, axis=1)
    active = np.arange(len(q))
    quiet = np.zeros(len(q), dtype=int)
    for _ in range(rounds):
        going = (cost[active] > enough * enough) & (quiet[active] < 6)
        active, error, matrix = active[going], error[going], matrix[going]
        if not len(active):
            break
        tried = q[active] + _step(matrix, error, damping[active]) * scale
        new_error, new_matrix = _linear(g, tried, poses[active])
        new_cost = np.sum(new_error * new_error, axis=1)
        better = new_cost < cost[active]
        gain = 1.0 - new_cost / np.maximum(cost[active], 1e-300)
        quiet[active] = np.where(better & (gain > 1e-3), 0, quiet[active] + 1)
        q[active[better]], cost[active[better]] = tried[better], new_cost[better]
        error[better], matrix[better] = new_error[better], new_matrix[better]
        damping[active] = np.clip(np.where(better, damping[active] / 5.0, damping[active] * 6.0), 1e-10, 1e4)
    return q, np.sqrt(cost)
