"""Joint positions at poses from a near guess: Newton steps over a batch, for any arm.

The closed forms choose the branch; from there on every point of a path has a good guess (its neighbours),
and Newton's method lands on the same branch to rounding, whatever the structure of the arm.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.arm.relative import ROLL
from pathplan.path.joint import Array
from pathplan.path.rotations import rotation_vector

__all__ = ["CONVERGED", "joint_weights", "pose_error", "solve_near"]

CONVERGED = 1e-12  # of position error over arm length, and rad
_ROUNDS = 12
# Largest joint change of one round (rad, or arm lengths): further, the linear model means nothing.
_STRIDE = 0.5
_RANK = 1e-9


def joint_weights(arm: Arm) -> Array:
    """(n,) what one unit of each joint counts in the path parameter: 1 a rad, 1 / arm length a metre; a virtual roll of
    the tool counts nothing.
    """
    weights = _scales(arm)
    weights[[joint.name == ROLL for joint in arm.joints]] = 0.0
    return weights


def _scales(arm: Arm) -> Array:
    return np.array([1.0 if joint.kind == "revolute" else 1.0 / arm.length for joint in arm.joints])


def pose_error(reached: Array, asked: Array) -> Array:
    """(N, 6) what is missing from `reached` to `asked` (N, 4, 4): metres and rotation vector in the base
    frame.
    """
    missing = np.empty((len(asked), 6))
    missing[:, :3] = asked[:, :3, 3] - reached[:, :3, 3]
    missing[:, 3:] = rotation_vector(asked[:, :3, :3] @ reached[:, :3, :3].transpose(0, 2, 1))
    return missing


def solve_near(arm: Arm, poses: Array, guess: Array, held: tuple[int, ...] = ()) -> tuple[Array, NDArray[np.bool_]]:
    """Joint positions (N, n) near guesses (N, n) that put the arm's tool at poses (N, 4, 4), and which of
    them converged. Joints `held` stay where the guess has them.

    Least squares where the arm has fewer than six axes, the nearest answer where it has more. A row counts as
    converged when the pose is met to `CONVERGED`, or as near to it as rounding lets a step come.
    """
    q = np.array(guess, dtype=float)
    weights = _scales(arm)
    metric = np.array([1.0 / arm.length] * 3 + [1.0] * 3)
    free = [i for i in range(arm.n) if i not in held]
    error = np.full(len(q), np.inf)
    active = np.arange(len(q))
    for _ in range(_ROUNDS):
        missing = pose_error(arm.forward(q[active]), poses[active]) * metric
        error[active] = np.abs(missing).max(axis=1)
        going = error[active] > CONVERGED * 1e-2
        active, missing = active[going], missing[going]
        if not len(active):
            break
        matrix = arm.jacobian(q[active]) * metric[:, None] / weights
        if held:
            step = np.zeros((len(active), arm.n))
            step[:, free] = _least_squares(matrix[:, :, free], missing)
        else:
            step = _least_squares(matrix, missing)
        size = np.abs(step).max(axis=1)
        step *= np.minimum(1.0, _STRIDE / np.maximum(size, 1e-300))[:, None]
        q[active] += step / weights
        # A step at the size of rounding can't be bettered by another one.
        active = active[size > 1e-15]
        if not len(active):
            break
    rest = error > CONVERGED * 1e-2
    if rest.any():
        missing = pose_error(arm.forward(q[rest]), poses[rest]) * metric
        error[rest] = np.abs(missing).max(axis=1)
    return q, error <= CONVERGED


def _least_squares(matrix: Array, rhs: Array) -> Array:
    """Solutions (N, n) of matrix (N, 6, n) x = rhs (N, 6), least squares and least norm."""
    if matrix.shape[2] == 6:
        try:
            return np.asarray(np.linalg.solve(matrix, rhs[:, :, None])[:, :, 0], dtype=float)
        except np.linalg.LinAlgError:
            pass  # exactly singular somewhere
    return np.einsum("mij,mj->mi", np.linalg.pinv(matrix, rcond=_RANK), rhs)
