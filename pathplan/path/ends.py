"""Lines that start or end in a singularity, where the inverse leaves joints open that the line itself decides.

With axes 4 and 6 in line any share of their turn puts the tool at the pose, but a line that goes on from there has
joint positions that run into one of them, smoothly: the limit along the line. An arm that stands in it can start.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from pathplan.arm.refine import pose_errors
from pathplan.path.crossing import JUMP, Inverse
from pathplan.path.follower import Course
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array

__all__ = ["SingularEnd", "limits_at_ends"]

_STEP = 0.004  # path parameter between the samples that a limit is drawn from
_WEIGHTS = np.array([6.0, -15.0, 20.0, -15.0, 6.0, -1.0])  # of values at 1, 2, .. 6: the quintic through them at 0
_MET = 1e-8  # m and rad: a limit that stands further off its pose is none


@dataclass(frozen=True)
class SingularEnd:
    """A branch (slot of the tracks) starts or ends in a singularity: segment, and whether at its last sample."""

    segment: int
    slot: int
    last: bool


def limits_at_ends(
    course: Course,
    inverse: Inverse,
    poses: Callable[[Index, Array], Array],
    length: Array,
    singular: Mask,
    last: bool,
    revolute: Mask,
) -> tuple[Index, Index, Array]:
    """Segments (E,), slots (E,) and joint vectors (E, n): limits of branches `singular` (K, B) at one end of segments.

    Slots are those of the inverse near that end.
    """
    k = np.flatnonzero(singular.any(axis=1))
    none = np.zeros(0, dtype=np.intp)
    if not len(k):
        return none, none, np.zeros((0, course.follower.arm.n))
    count = len(_WEIGHTS)
    away = np.minimum(_STEP, length[k] / (2 * count))[:, None] * np.arange(1.0, count + 1.0)
    at = np.asarray(length[k, None] - away if last else away)
    found, reached = inverse(np.repeat(k, count), at.ravel())
    q, valid = found.reshape(len(k), count, *found.shape[1:]), reached.reshape(len(k), count, -1)
    change = np.diff(q, axis=1)
    change -= np.where(revolute, 2.0 * np.pi * np.round(change / (2.0 * np.pi)), 0.0)
    smooth = singular[k] & valid.all(axis=1) & (np.abs(change[..., revolute]) < JUMP).all(axis=(1, 3))
    q = np.concatenate([q[:, :1], q[:, :1] + np.cumsum(change, axis=1)], axis=1)
    limit = np.einsum("j,kjbn->kbn", _WEIGHTS, q)
    row, slot = np.nonzero(smooth)
    end = poses(k, np.where(last, length[k], 0.0))[row]
    distance, angle = pose_errors(course.follower.forward(course.view[k][row], limit[row, slot]), end)
    met = (distance < _MET) & (angle < _MET)
    return k[row[met]], slot[met], limit[row[met], slot[met]]
