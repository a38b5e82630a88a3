"""Numeric inverse for arms without a closed form: all branches by many seeded starts.

Each start is solved by roboticstoolbox (Levenberg-Marquardt, `ETS.ik_LM`) and polished by our own Newton
steps. The starts come from our own fixed generator, so the same pose always gets the same answers.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.closed_form import wrapped
from pathplan.arm.kinematics import forward, jacobian
from pathplan.arm.model import Array

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["BRANCHES", "all_branches"]

BRANCHES = 16  # a 6R arm has at most 16 (Raghavan & Roth 1993)
STARTS = 240
QUIET = 80  # starts in a row that bring nothing new end the search
SAME = 1e-5  # rad or m, between answers of the search
NEAREST_STARTS = 24
NEAREST_ROUNDS = 60


def all_branches(arm: Arm, poses: Array) -> tuple[Array, Any]:
    """Answers (N, 16, n) for poses (N, 4, 4) and what each is (N, 16): 1 answer, 0 nearest, -1 nothing.

    A branch keeps its index from one pose to the next where it can be followed by Newton steps. An arm with
    more than six axes has answers without end: 16 of them are given.
    """
    q, kind = np.zeros((len(poses), BRANCHES, arm.n)), np.full((len(poses), BRANCHES), -1)
    starts = _starts(arm, STARTS)
    for k, pose in enumerate(poses):
        if k > 0:
            moved, good = _polished(arm, q[k - 1], pose)
            followed = (kind[k - 1] == 1) & good & (_apart(arm, moved, q[k - 1]) < 0.5)
            for b in np.flatnonzero(followed):  # where two branches met, one goes on
                if (_apart(arm, q[k, :b][kind[k, :b] == 1], moved[b]) > SAME).all():
                    q[k, b], kind[k, b] = moved[b], 1
        _search(arm, pose, starts, q[k], kind[k])
        if not (kind[k] == 1).any():
            q[k, 0], kind[k, 0] = _nearest(arm, pose), 0
        q[k] = _canonical(arm, q[k])
    return q, kind


def _starts(arm: Arm, count: int) -> Array:
    """Joint vectors (count, n) all over the turn of revolute joints and the travel of prismatic ones."""
    low, high = np.full(arm.n, -np.pi), np.full(arm.n, np.pi)
    for i, joint in enumerate(arm.joints):
        if joint.kind == "prismatic":
            low[i], high[i] = joint.position if np.isfinite(joint.position).all() else (-arm.length, arm.length)
    return np.random.default_rng(20_240_229).uniform(low, high, (count, arm.n))


def _search(arm: Arm, pose: Array, starts: Array, q: Array, kind: Any) -> None:
    """Put every answer that the starts lead to into the free slots of q (16, n) and kind (16,)."""
    quiet = 0
    for start in starts:
        free = np.flatnonzero(kind != 1)
        if quiet >= QUIET or not free.size:
            return
        quiet += 1
        # slimit=1: a restart would be random; joint_limits=False: limits are ours to judge.
        found = arm.numeric_chain.ik_LM(pose, q0=start, ilimit=60, slimit=1, tol=1e-18, joint_limits=False)
        if not found.success:
            continue
        polished, good = _polished(arm, np.asarray(found.q, dtype=float)[None], pose)
        if good[0] and (_apart(arm, q[kind == 1], polished[0]) > SAME).all():
            q[free[0]], kind[free[0]] = polished[0], 1
            quiet = 0


def _apart(arm: Arm, q: Array, other: Array) -> Array:
    """Largest difference (...) between joint vectors (..., n), whole turns left aside."""
    return np.abs(_canonical(arm, q - other)).max(axis=-1)


def _canonical(arm: Arm, q: Array) -> Array:
    """Revolute joints brought into (-pi, pi]."""
    return np.where([joint.kind == "revolute" for joint in arm.joints], wrapped(q), q)


def _error(arm: Arm, q: Array, pose: Array) -> Array:
    """Twist (S, 6) from where the tool stands to the pose, angular part scaled by the length of the arm."""
    reached = forward(arm, q)
    turn = pose[:3, :3] @ reached[:, :3, :3].transpose(0, 2, 1)
    skew = np.stack(
        [turn[:, 2, 1] - turn[:, 1, 2], turn[:, 0, 2] - turn[:, 2, 0], turn[:, 1, 0] - turn[:, 0, 1]], axis=1
    )
    sine = np.linalg.norm(skew, axis=1) / 2.0
    angle = np.arctan2(sine, (np.trace(turn, axis1=1, axis2=2) - 1.0) / 2.0)
    # angle / sine tends to 1; at a half turn the axis is lost, any push away from it will do.
    factor = np.where(sine > 1e-8, angle / np.maximum(sine, 1e-8), 1.0) / 2.0
    return np.concatenate([pose[:3, 3] - reached[:, :3, 3], arm.length * factor[:, None] * skew], axis=1)


def _scaled_jacobian(arm: Arm, q: Array) -> Array:
    scaled = jacobian(arm, q)
    scaled[:, 3:] *= arm.length
    return scaled


def _polished(arm: Arm, q: Array, pose: Array) -> tuple[Array, Array]:
    """Newton steps on q (S, n): answers, and which came within 1e-11 m (angles scaled by the length of the
    arm)."""
    for _ in range(8):
        error = _error(arm, q, pose)
        size = np.linalg.norm(error, axis=1)
        if (size < 1e-14).all():
            break
        step = np.einsum("sij,sj->si", np.linalg.pinv(_scaled_jacobian(arm, q), rcond=1e-10), error)
        # A step of more than half a radian left the neighbourhood in which Newton's method can be trusted.
        step *= np.minimum(1.0, 0.5 / np.maximum(np.abs(step).max(axis=1), 1e-300))[:, None]
        q = np.where((size < 1e-14)[:, None], q, q + step)
    return q, np.linalg.norm(_error(arm, q, pose), axis=1) < 1e-11


def _nearest(arm: Arm, pose: Array) -> Array:
    """The joint vector (n,) that brings the tool nearest to a pose out of reach: damped least squares, many
    starts."""
    q = _starts(arm, NEAREST_STARTS)
    damping = np.full(len(q), 1e-2 * arm.length**2)
    error = _error(arm, q, pose)
    cost = np.sum(error * error, axis=1)
    for _ in range(NEAREST_ROUNDS):
        jac = _scaled_jacobian(arm, q)
        normal = np.einsum("ski,skj->sij", jac, jac) + damping[:, None, None] * np.eye(arm.n)
        step = np.linalg.solve(normal, np.einsum("ski,sk->si", jac, error)[:, :, None])[:, :, 0]
        tried = q + step
        new_error = _error(arm, tried, pose)
        new_cost = np.sum(new_error * new_error, axis=1)
        better = new_cost < cost
        q[better], error[better], cost[better] = tried[better], new_error[better], new_cost[better]
        damping = np.clip(np.where(better, damping / 4.0, damping * 8.0), 1e-9 * arm.length**2, 1e6)
    return np.asarray(q[np.argmin(cost)])
