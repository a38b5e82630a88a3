"""Joint paths through taught points, by a parameter that counts rad, and metres over the arm's length."""

from __future__ import annotations

import numpy as np

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.path.joint import Array, JointPath
from pathplan.path.newton import joint_weights
from pathplan.path.states import LIMIT_SLACK
from pathplan.task.model import Taught
from pathplan.task.smoothing import knots_of, pieces_of, smoothed_sparsely
from pathplan.units import format_quantity, joint_dimension

_FINER = (1.0, 0.1, 0.01, 1e-3)  # of the tolerance: a path that swings beyond a limit is kept nearer to its points
_LOOKS = 9  # at every piece

__all__ = ["smooth_joint_path", "taught_path"]


def taught_path(taught: Taught, arm: Arm) -> tuple[JointPath, str]:
    """The joint path of a task's taught points, and what there is to say of it."""
    weights = joint_weights(arm)
    if taught.tolerance == 0.0:
        path = JointPath.through(taught.points * weights)
        return JointPath.from_pieces(path.breaks, path.coefficients / _divisors(weights)), taught.note
    path, off = smooth_joint_path(taught.points, arm, taught.tolerance)
    note = f'taught path "{taught.name}" is at most {_off_text(off, arm)} off its {len(taught.points)} points'
    return path, f"{taught.note}; {note}" if taught.note else note


def smooth_joint_path(points: Array, arm: Arm, tolerance: float) -> tuple[JointPath, Array]:
    """The smoothest quintic path that passes joint points (m, n) within `tolerance`, and (m, n) how far it passes them.

    The distance in joint space counts a rad as 1 and a metre as 1 over the arm's length. Points may lie as close as
    the rows of a table. Raises InputError where no smooth path comes near enough.
    """
    weights = joint_weights(arm)
    scaled = points * weights
    u = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(scaled, axis=0), axis=1))])
    for finer in _FINER:

        def excess(values: Array, allowed: float = tolerance * finer) -> Array:
            return np.asarray(np.linalg.norm(values - scaled, axis=1) / allowed)

        try:
            spline = smoothed_sparsely(u, scaled, excess)
        except InputError:
            if finer == 1.0:
                raise
            break  # what there was keeps to the points, if not to the limits
        breaks = knots_of(spline)
        path = JointPath.from_pieces(breaks, pieces_of(spline, breaks) / _divisors(weights))
        off = np.abs(spline(u) - scaled) / _divisors(weights)
        if _within_limits(path, arm):
            break
    return path, off


def _divisors(weights: Array) -> Array:
    """The weights; of a virtual joint, which counts nothing and does not move, one."""
    return np.where(weights > 0.0, weights, 1.0)


def _within_limits(path: JointPath, arm: Arm) -> bool:
    """Whether a path through points within the limits does not swing beyond them."""
    width = np.diff(path.breaks)
    at = (path.breaks[:-1, None] + width[:, None] * np.linspace(0.0, 1.0, _LOOKS)).ravel()
    rows = path(at) @ arm.limits.matrix.T
    low, high = arm.limits.position.T
    return bool((rows >= low - LIMIT_SLACK).all() and (rows <= high + LIMIT_SLACK).all())


def _off_text(off: Array, arm: Arm) -> str:
    """The largest deviation of (m, n) by joint weight: '0.12 deg (elbow, row 7)'."""
    row, j = np.unravel_index(int(np.argmax(off * joint_weights(arm))), off.shape)
    joint = arm.joints[j]
    return f"{format_quantity(float(off[row, j]), joint_dimension(joint.kind, 'position'), 3)} ({joint.name})"
