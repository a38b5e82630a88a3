"""Joint paths through taught points, by a parameter that counts rad, and metres over the arm's length."""

from __future__ import annotations

import numpy as np

from pathplan.arm import Arm
from pathplan.path.joint import Array, JointPath
from pathplan.path.newton import joint_weights
from pathplan.task.model import Taught
from pathplan.task.smoothing import knots_of, pieces_of, smoothed
from pathplan.units import format_quantity, joint_dimension

__all__ = ["smooth_joint_path", "taught_path"]


def taught_path(taught: Taught, arm: Arm) -> tuple[JointPath, str]:
    """The joint path of a task's taught points, and what there is to say of it."""
    weights = joint_weights(arm)
    if taught.tolerance == 0.0:
        path = JointPath.through(taught.points * weights)
        return JointPath.from_pieces(path.breaks, path.coefficients / weights), taught.note
    path, off = smooth_joint_path(taught.points, arm, taught.tolerance)
    note = f'taught path "{taught.name}" is at most {_off_text(off, arm)} off its {len(taught.points)} points'
    return path, f"{taught.note}; {note}" if taught.note else note


def smooth_joint_path(points: Array, arm: Arm, tolerance: float) -> tuple[JointPath, Array]:
    """The smoothest quintic path that passes joint points (m, n) within `tolerance`, and (m, n) how far it passes them.

    The distance in joint space counts a rad as 1 and a metre as 1 over the arm's length.
    """
    weights = joint_weights(arm)
    scaled = points * weights
    u = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(scaled, axis=0), axis=1))])

    def excess(values: Array) -> float:
        return float(np.linalg.norm(values - scaled, axis=1).max() / tolerance)

    spline = smoothed(u, scaled, excess)
    breaks = knots_of(spline)
    path = JointPath.from_pieces(breaks, pieces_of(spline, breaks) / weights)
    return path, np.abs(spline(u) - scaled) / weights


def _off_text(off: Array, arm: Arm) -> str:
    """The largest deviation of (m, n) by joint weight: '0.12 deg (elbow, row 7)'."""
    row, j = np.unravel_index(int(np.argmax(off * joint_weights(arm))), off.shape)
    joint = arm.joints[j]
    return f"{format_quantity(float(off[row, j]), joint_dimension(joint.kind, 'position'), 3)} ({joint.name})"
