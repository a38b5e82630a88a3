"""Forward kinematics, Jacobian and joint derivatives over a batch of configurations.

The chain is walked once for the whole batch. Every joint frame is turned by a constant rotation so that its
axis is its own z: a fixed transform is then one small matrix product over the batch and a joint motion only
mixes two columns. Internally the batch is the last, contiguous index: rotations are (3 columns, 3 rows, N),
points (3, N).

Source of the derivative formulas: Murray, Li & Sastry 1994, ch. 3 (product of exponentials, spatial
Jacobian, adjoint).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.model import Array, Kind
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = [
    "Chain",
    "forward",
    "jacobian",
    "joint_derivatives",
    "joint_frame",
    "smallest_singular_value",
    "spatial_axes",
]

CHUNK = 1024  # rows walked at a time: the working arrays then stay in the processor's cache


@dataclass(frozen=True)
class Chain:
    """Constants of the walk from base to tool, derived once from an arm."""

    n: int
    path: tuple[int, ...]  # joints from base to tip
    revolute: tuple[bool, ...]  # of the joints in path
    steps: tuple[Array, ...]  # (4, 3) each: rotation transposed above translation, one per joint in path
    end: Array  # (4, 3) from the last joint (axis along z) to the tool
    untwist: tuple[Array, ...]  # (3, 3) each: turned joint frame back to the arm's own joint frame

    @classmethod
    def build(
        cls,
        kinds: tuple[Kind, ...],
        parents: tuple[int, ...],
        parent_from_joint: Array,
        axes: Array,
        tip: int,
        tip_from_tool: Array,
    ) -> Chain:
        path = [tip]
        while parents[path[0]] >= 0:
            path.insert(0, parents[path[0]])
        twist = np.eye(3)
        steps, untwist = [], []
        for i in path:
            joint_twist = z_onto(axes[i])
            steps.append(
                _packed(
                    twist.T @ parent_from_joint[i, :3, :3] @ joint_twist,
                    twist.T @ parent_from_joint[i, :3, 3],
                )
            )
            untwist.append(joint_twist.T.copy())
            twist = joint_twist
        end = _packed(twist.T @ tip_from_tool[:3, :3], twist.T @ tip_from_tool[:3, 3])
        revolute = tuple(kinds[i] == "revolute" for i in path)
        return cls(len(kinds), tuple(path), revolute, tuple(steps), end, tuple(untwist))


def z_onto(axis: Array) -> Array:
    """(3, 3) rotation that carries z onto a unit axis; exactly the identity for z itself."""
    x, y, z = axis
    if x == 0.0 and y == 0.0:
        return np.diag([1.0, 1.0 if z > 0 else -1.0, 1.0 if z > 0 else -1.0])
    k = np.array([-y, x, 0.0])  # z cross axis
    cross = np.array([[0.0, 0.0, k[1]], [0.0, 0.0, -k[0]], [-k[1], k[0], 0.0]])
    if z > -0.5:
        return np.eye(3) + cross + cross @ cross / (1.0 + z)
    return np.asarray(z_onto(-axis) @ np.diag([1.0, -1.0, -1.0]))


def _packed(rotation: Array, translation: Array) -> Array:
    return np.vstack([rotation.T, translation])


def checked(q: Array, n: int) -> tuple[Array, tuple[int, ...]]:
    """q as (N, n) float and the leading shape it came with."""
    q = np.asarray(q, dtype=float)
    if q.ndim == 0 or q.shape[-1] != n:
        got = "a scalar" if q.ndim == 0 else f"{q.shape[-1]}"
        raise InputError(f"expected {n} joint values in the last dimension, got {got}")
    return q.reshape(-1, n), q.shape[:-1]


def walk(chain: Chain, q: Array, axes_at: list[tuple[Array, Array]] | None = None) -> tuple[Array, Array]:
    """Tool rotation (3 columns, 3 rows, N) and position (3, N) for q (N, n).

    Where `axes_at` is given, every joint of the path appends its axis (3, N) and a point on it (3, N).
    """
    m = q.shape[0]
    columns = np.repeat(np.eye(3).reshape(3, 3, 1), m, axis=2)
    point = np.zeros((3, m))
    for k, i in enumerate(chain.path):
        moved = (chain.steps[k] @ columns.reshape(3, 3 * m)).reshape(4, 3, m)
        columns = moved[:3]
        point = point + moved[3]
        if chain.revolute[k]:
            c, s = np.cos(q[:, i]), np.sin(q[:, i])
            turned = np.empty_like(columns)
            turned[0] = c * columns[0] + s * columns[1]
            turned[1] = c * columns[1] - s * columns[0]
            turned[2] = columns[2]
            columns = turned
        else:
            point = point + columns[2] * q[:, i]
        if axes_at is not None:
            axes_at.append((columns[2], point))
    moved = (chain.end @ columns.reshape(3, 3 * m)).reshape(4, 3, m)
    return moved[:3], point + moved[3]


def _pose(columns: Array, point: Array, out: Array) -> None:
    out[:, :3, :3] = columns.transpose(2, 1, 0)
    out[:, :3, 3] = point.T
    out[:, 3, :3] = 0.0
    out[:, 3, 3] = 1.0


def forward(arm: Arm, q: Array) -> Array:
    """Tool pose base_from_tool (..., 4, 4) of configurations q (..., n)."""
    rows, shape = checked(q, arm.n)
    out = np.empty((rows.shape[0], 4, 4))
    for start in range(0, rows.shape[0], CHUNK):
        part = slice(start, start + CHUNK)
        _pose(*walk(arm.chain, rows[part]), out[part])
    return out.reshape(*shape, 4, 4)


def jacobian(arm: Arm, q: Array) -> Array:
    """Jacobian (..., 6, n) of the tool centre point: rows linear x y z, angular x y z, in the base frame."""
    rows, shape = checked(q, arm.n)
    out = np.zeros((rows.shape[0], 6, arm.n))
    chain = arm.chain
    for start in range(0, rows.shape[0], CHUNK):
        part = slice(start, start + CHUNK)
        axes_at: list[tuple[Array, Array]] = []
        _, tcp = walk(chain, rows[part], axes_at)
        for k, i in enumerate(chain.path):
            axis, point = axes_at[k]
            if chain.revolute[k]:
                out[part, :3, i] = _cross(axis, tcp - point).T
                out[part, 3:, i] = axis.T
            else:
                out[part, :3, i] = axis.T
    return out.reshape(*shape, 6, arm.n)


def joint_frame(arm: Arm, joint: int, q: Array) -> Array:
    """(..., 4, 4) base_from_joint: the moving frame of one joint at configurations q (..., n)."""
    rows, shape = checked(q, arm.n)
    pose = np.tile(np.eye(4), (len(rows), 1, 1))
    lineage = [joint]
    while arm.parents[lineage[0]] >= 0:
        lineage.insert(0, arm.parents[lineage[0]])
    for i in lineage:
        pose = pose @ arm.parent_from_joint[i] @ joint_motion(arm.joints[i].kind, arm.axes[i], rows[:, i])
    return pose.reshape(*shape, 4, 4)


def joint_motion(kind: str, axis: Array, value: Any) -> Array:
    """(..., 4, 4) motions (...) of one joint about or along a unit axis through the origin of its frame."""
    value = np.asarray(value, dtype=float)[..., None, None]
    motion = np.tile(np.eye(4), (*value.shape[:-2], 1, 1))
    if kind == "revolute":
        cross = np.array([[0.0, -axis[2], axis[1]], [axis[2], 0.0, -axis[0]], [-axis[1], axis[0], 0.0]])
        motion[..., :3, :3] += np.sin(value) * cross + (1.0 - np.cos(value)) * cross @ cross
    else:
        motion[..., :3, 3] = value[..., 0] * axis
    return motion


def _cross(a: Array, b: Array) -> Array:
    """Cross product over the leading index of two (3, N) arrays."""
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])


def spatial_axes(arm: Arm, q: Array) -> tuple[Array, Array]:
    """Spatial Jacobian columns (n, 6, N) and tool position (3, N) for q (N, n).

    A column holds (v_o, w): the velocity of the point of the moving body at the base origin, and the
    turning rate.
    """
    columns = np.zeros((arm.n, 6, q.shape[0]))
    axes_at: list[tuple[Array, Array]] = []
    _, tcp = walk(arm.chain, q, axes_at)
    for k, i in enumerate(arm.chain.path):
        axis, point = axes_at[k]
        if arm.chain.revolute[k]:
            columns[i, :3] = _cross(point, axis)
            columns[i, 3:] = axis
        else:
            columns[i, :3] = axis
    return columns, tcp


def _ad(twist: Array, column: Array) -> Array:
    """Lie bracket ad(twist) column of two (6, N) spatial twists."""
    v, w = twist[:3], twist[3:]
    return np.concatenate([_cross(w, column[:3]) + _cross(v, column[3:]), _cross(w, column[3:])])


def joint_derivatives(
    arm: Arm, q: Array, twists: Array, held: tuple[int, ...] = (), rates: Array | None = None
) -> tuple[Array, Array]:
    """Joint derivatives q', q'', q''' that follow a tool path, and what they can't follow.

    Parameters: q (N, n) on the path; twists (N, 3, 6) the spatial twist of the tool in the base frame and
    its first two derivatives with respect to the path parameter: (v_o, w), v_o = p' - w x p. Joints `held`
    move as they are told, rates (N, 3, len(held)) are their derivatives, and the others follow.
    Returns: derivatives (N, 3, n); residual (N, 3), the norm of what is left of the k-th equation, taken at
    the tool centre point, angular rows scaled by `arm.length` (m per parameter^k). Fewer than six axes:
    least squares in that norm; more than six: least joint norm in which prismatic joints count by
    `arm.length`. At a singularity the answer is the least-squares one of least norm, and the residual
    tells.

    With S the spatial Jacobian, V = S q', V' = S q'' + S' q', V'' = S q''' + 2 S' q'' + S'' q', where a
    column changes as S_i' = ad(V_{i-1}) S_i and V_{i-1} is the partial sum of S_j q'_j over the joints
    before i.
    """
    q, _ = checked(q, arm.n)
    twists = np.asarray(twists, dtype=float)
    if twists.shape != (q.shape[0], 3, 6):
        raise InputError(f"expected twists of shape {(q.shape[0], 3, 6)}, got {twists.shape}")
    derivatives = np.empty((q.shape[0], 3, arm.n))
    residual = np.empty((q.shape[0], 3))
    for start in range(0, q.shape[0], CHUNK):
        part = slice(start, start + CHUNK)
        told = None if rates is None else rates[part].transpose(1, 0, 2)
        derivatives[part], residual[part] = _derivatives(arm, q[part], twists[part].transpose(1, 2, 0), held, told)
    return derivatives, residual


def _derivatives(arm: Arm, q: Array, twists: Array, held: tuple[int, ...], rates: Array | None) -> tuple[Array, Array]:
    """As `joint_derivatives`, one chunk, with twists (3, 6, N) and rates (3, N, len(held))."""
    m = q.shape[0]
    columns, tcp = spatial_axes(arm, q)
    at_tcp = np.empty((m, 6, arm.n))
    at_tcp[:, :3] = (columns[:, :3] + np.stack([_cross(column[3:], tcp) for column in columns])).transpose(2, 1, 0)
    at_tcp[:, 3:] = columns[:, 3:].transpose(2, 1, 0) * arm.length
    scale = np.array([1.0 if joint.kind == "revolute" else arm.length for joint in arm.joints])
    free = [i for i in range(arm.n) if i not in held]
    solve = _solver(at_tcp[:, :, free], scale[free]) if held else _solver(at_tcp, scale)

    def answer(spatial: Array, order: int) -> tuple[Array, Array]:
        asked = np.empty((m, 6))
        asked[:, :3] = (spatial[:3] + _cross(spatial[3:], tcp)).T
        asked[:, 3:] = spatial[3:].T * arm.length
        if held:
            assert rates is not None
            found = np.empty((m, arm.n))
            found[:, held] = rates[order]
            found[:, free] = solve(asked - np.einsum("mij,mj->mi", at_tcp[:, :, held], rates[order]))
        else:
            found = solve(asked)
        left = asked - np.einsum("mij,mj->mi", at_tcp, found)
        return found, np.sqrt(np.einsum("mi,mi->m", left, left))

    first, residual_1 = answer(twists[0], 0)
    before = np.zeros((6, m))  # V_{i-1}
    change = np.zeros_like(columns)  # S_i'
    for i in arm.chain.path:
        change[i] = _ad(before, columns[i])
        before = before + columns[i] * first[:, i]
    second, residual_2 = answer(twists[1] - np.einsum("jkm,mj->km", change, first), 1)
    before = np.zeros((6, m))
    rate_before = np.zeros((6, m))  # V'_{i-1}
    rest = twists[2].copy()
    for i in arm.chain.path:
        change_2 = _ad(rate_before, columns[i]) + _ad(before, change[i])  # S_i''
        rest -= 2.0 * change[i] * second[:, i] + change_2 * first[:, i]
        before = before + columns[i] * first[:, i]
        rate_before = rate_before + columns[i] * second[:, i] + change[i] * first[:, i]
    third, residual_3 = answer(rest, 2)
    return np.stack([first, second, third], axis=1), np.stack([residual_1, residual_2, residual_3], axis=1)


class _solver:
    """Solves matrix @ x = rhs for a batch, the matrices (m, 6, n) factored once."""

    def __init__(self, matrix: Array, scale: Array) -> None:
        self.scale = scale
        self.inverse = self._inverse(matrix * scale)

    @staticmethod
    def _inverse(matrix: Array) -> Array:
        if matrix.shape[-1] == 6:
            try:
                inverse = np.linalg.inv(matrix)
                # A nearly singular matrix inverts to rounding noise: there the pseudo-inverse is the honest
                # answer.
                size = np.abs(inverse).max(axis=(1, 2)) * np.abs(matrix).max(axis=(1, 2))
                poor = ~(size < 1e12)
                if poor.any():
                    inverse[poor] = np.linalg.pinv(matrix[poor], rcond=1e-12)
                return np.asarray(inverse)
            except np.linalg.LinAlgError:
                pass  # one matrix of the batch is exactly singular
        return np.asarray(np.linalg.pinv(matrix, rcond=1e-12))

    def __call__(self, rhs: Array) -> Array:
        return np.einsum("mij,mj->mi", self.inverse, rhs) * self.scale


def smallest_singular_value(arm: Arm, q: Array, held: tuple[int, ...] = ()) -> Array:
    """Distance from singularity (N,), dimensionless, for q (N, n).

    The smallest singular value (of fewer than six joints between base and tool, the last) of the Jacobian at the tool
    centre point, its linear rows divided by `arm.length` and its prismatic columns multiplied by it; of the joints that
    are not `held`.
    """
    matrix = jacobian(arm, checked(q, arm.n)[0])
    matrix[:, :3] /= arm.length
    prismatic = [i for i, joint in enumerate(arm.joints) if joint.kind == "prismatic"]
    matrix[:, :, prismatic] *= arm.length
    count = len(arm.chain.path)
    if held:
        matrix = np.delete(matrix, held, axis=2)
        count = sum(i not in held for i in arm.chain.path)
    return np.asarray(np.linalg.svd(matrix, compute_uv=False)[:, min(count, 6) - 1])
