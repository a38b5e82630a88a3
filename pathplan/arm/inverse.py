"""Inverse kinematics: all branches of a batch of poses, and all answers of one pose within the position
limits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.kinematics import forward
from pathplan.arm.model import Array
from pathplan.arm.refine import pose_errors
from pathplan.arm.structure import COMPONENTS
from pathplan.errors import InputError, UnreachableError
from pathplan.units import format_quantity

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm
    from pathplan.arm.solver import Answers

__all__ = [
    "ANGLE_TOLERANCE",
    "POSITION_TOLERANCE",
    "TILT_TOLERANCE",
    "Branches",
    "inverse",
    "inverse_batch",
    "rigid_pose",
]

POSITION_TOLERANCE = 1e-9  # m
ANGLE_TOLERANCE = 1e-9  # rad
TILT_TOLERANCE = np.deg2rad(0.001)  # rad: of the components that an arm with fewer than six axes does not serve
LIMIT_TOLERANCE = 1e-10  # rad or m: an answer this far beyond a position limit is the limit, rounded
SAME = 1e-7  # rad or m: answers closer than this are one (where two branches meet they differ by sqrt(eps))


@dataclass(frozen=True)
class Branches:
    """Every branch of a batch of N poses; from `Arm.inverse_free`, with M values of the held joints, (N, M, B) in place
    of (N, B). What the branch index means: see `inverse_batch`.
    """

    q: Array  # (N, B, n) rad and m, revolute joints in (-pi, pi]; the nearest answer where not valid
    valid: Any  # (N, B) bool: the tool stands at the pose, position limits left aside
    labels: tuple[Mapping[str, str], ...]  # of length B: {"shoulder": "left", "elbow": "up", "wrist": "positive"}
    position_error: Array  # (N, B) m, measured through the forward kinematics
    angle_error: Array  # (N, B) rad


def inverse_batch(arm: Arm, poses: Any, outside: Any = None) -> Branches:
    """All branches for tool poses base_from_tool (N, 4, 4), rigid transforms; position limits are left aside.

    Which method serves an arm, and how many branches there are, hangs on its axes (`pathplan.arm.structure`): closed
    form for a gantry (one branch), a SCARA (2), three slides with three turns (2), axes that meet (8 of six revolute
    ones) and three parallel axes (8); elimination for any other six revolute axes (16 places); numeric search for the
    rest (16 places, some tens of milliseconds a pose). A place without an answer has infinite errors, where a closed
    form has nothing it holds the nearest one. Where a pose leaves a joint free (axes 4 and 6 in line) joint 4 stays at
    0. Arms with more than six axes: see `pathplan.arm.redundant`.

    Where `Arm.steady_branches` is True the branch index means the same for every pose and follows a path
    continuously; elsewhere a branch keeps its index from one pose to the next within the batch while it can be told,
    and labels are empty. What the labels mean, "up" being the side of axis 1 that opposes gravity:

    - shoulder left or right: facing from axis 1 to the wrist centre (three parallel axes: to where axes 5 and 6 meet),
      the side to which the arm is set off along axis 2; where it is not set off, the side to which axis 2 points (left
      if a positive joint 2 lowers the arm);
    - elbow up or down: axis 3 above or below the line from axis 2 to the wrist centre (to axis 4);
    - wrist positive or negative: sign of sin q5, q5 counted from the straight wrist nearest to its zero;
    - SCARA, elbow left or right: facing from axis 1 to the last revolute axis;
    - joint 3 positive or negative: of its two answers the one above or below their middle;
    - branch 1, 2, ...: told apart, but without a meaning of their own.

    `outside` (n,) or (N, n): where joints stand that don't carry the tool (a turntable); only those entries count.
    They are NaN in the answers if it is not given. Raises InputError for a wrong shape and for numbers that aren't
    finite.
    """
    poses = np.asarray(poses, dtype=float)
    if poses.ndim != 3 or poses.shape[1:] != (4, 4):
        raise InputError(f"expected poses of shape (N, 4, 4), got {poses.shape}")
    if not np.isfinite(poses).all():
        raise InputError("poses: expected finite numbers, got NaN or infinity")
    joints = list(arm.tool_joints)
    if len(joints) > 6:
        from pathplan.arm.redundant import some_branches

        answers = some_branches(arm, poses)
        labels: tuple[Mapping[str, str], ...] = ({},) * answers.q.shape[1]
    else:
        answers, labels = arm.solver.solve(poses), arm.solver.labels
    q = np.full((*answers.q.shape[:2], arm.n), np.nan)
    if outside is not None:
        q[:] = np.broadcast_to(np.asarray(outside, dtype=float), (len(poses), arm.n))[:, None]
    q[:, :, joints] = answers.q
    return branches_of(arm, q, answers, labels)


def branches_of(arm: Arm, q: Array, answers: Answers, labels: tuple[Mapping[str, str], ...]) -> Branches:
    """`Branches` with joint values q (..., B, n), read-only."""
    angle_tolerance = ANGLE_TOLERANCE if len(arm.tool_joints) >= 6 else TILT_TOLERANCE
    valid = (answers.position_error <= POSITION_TOLERANCE) & (answers.angle_error <= angle_tolerance)
    for array in (q, valid, answers.position_error, answers.angle_error):
        array.flags.writeable = False
    return Branches(q, valid, labels, answers.position_error, answers.angle_error)


def rigid_pose(pose: Any) -> Array:
    """A 4x4 rigid transform from an array or a spatialmath SE3, its rotation made exactly orthonormal.

    Raises InputError for another shape, numbers that are not finite, or what is more than 1e-6 off a rigid
    transform.
    """
    matrix = np.array(getattr(pose, "A", pose), dtype=float)
    if matrix.shape != (4, 4):
        raise InputError(f"pose: expected a 4x4 rigid transform, got shape {matrix.shape}")
    if not np.isfinite(matrix).all():
        raise InputError("pose: expected finite numbers, got NaN or infinity")
    if np.abs(matrix[3] - (0, 0, 0, 1)).max() > 1e-12:
        raise InputError(f"pose: expected the last row 0 0 0 1, got {' '.join(f'{x:g}' for x in matrix[3])}")
    left, size, right = np.linalg.svd(matrix[:3, :3])
    if np.abs(size - 1.0).max() > 1e-6:
        raise InputError("pose: expected a rotation, its columns are not unit length and square to each other")
    if np.linalg.det(left @ right) < 0:
        raise InputError("pose: expected a right-handed rotation, got a mirror image")
    matrix[:3, :3] = left @ right
    return matrix


def inverse(arm: Arm, pose: Any, outside: Any = None) -> Array:
    """See `Arm.inverse`."""
    matrix = rigid_pose(pose)
    branches = inverse_batch(arm, matrix[None], outside)
    if not branches.valid.any():
        raise _out_of_reach(arm, matrix, branches)
    answers: list[Array] = []
    for q, valid in zip(branches.q[0], branches.valid[0], strict=True):
        if valid:
            answers += sorted(_turns(arm, q), key=tuple)
    distinct: list[Array] = []
    moving = list(arm.tool_joints)
    for q in _verified(arm, answers, matrix):
        if all(np.abs((q - other)[moving]).max() > SAME for other in distinct):
            distinct.append(q)
    if not distinct:
        raise _excluded(arm, matrix, branches)
    return np.array(distinct)


def _turns(arm: Arm, q: Array) -> list[Array]:
    """The turn equivalents of one answer that lie within the position limits. NaN is no joint's position: it may be
    anywhere.
    """
    choices = []
    for value, joint in zip(q, arm.joints, strict=True):
        low, high = joint.position
        if np.isnan(value):
            choices.append([np.nan])
            continue
        if joint.kind == "prismatic" or (low == -np.inf and high == np.inf):
            turns = [float(value)]
        elif np.isfinite([low, high]).all():
            first = np.ceil((low - LIMIT_TOLERANCE - value) / (2 * np.pi))
            last = np.floor((high + LIMIT_TOLERANCE - value) / (2 * np.pi))
            turns = [value + 2 * np.pi * k for k in np.arange(first, last + 1)]
        else:  # limited on one side only: the turn nearest to the limit, or the answer itself
            k = np.ceil((low - value) / (2 * np.pi)) if low > value else np.floor((high - value) / (2 * np.pi))
            turns = [value if low <= value <= high else value + 2 * np.pi * k]
        choices.append(
            [float(np.clip(t, low, high)) for t in turns if low - LIMIT_TOLERANCE <= t <= high + LIMIT_TOLERANCE]
        )
    low, high = arm.limits.position.T
    answers = [np.array(choice) for choice in product(*choices)]
    return [
        answer
        for answer in answers
        if not ((rows := limited(arm, answer)) < low - LIMIT_TOLERANCE).any()
        and not (rows > high + LIMIT_TOLERANCE).any()
    ]


def limited(arm: Arm, q: Array) -> Array:
    """(R,) what the rows of the limits come to at q (n,); NaN where a joint that counts in one is NaN."""
    known = np.isfinite(q)
    rows = arm.limits.matrix[:, known] @ q[known]
    return np.where((arm.limits.matrix[:, ~known] != 0.0).any(axis=1), np.nan, rows)


def _verified(arm: Arm, answers: list[Array], pose: Array) -> list[Array]:
    """The answers that put the tool at the pose."""
    if not answers:
        return []
    distance, angle = pose_errors(forward(arm, np.array(answers)), pose)
    good = (distance <= POSITION_TOLERANCE) & (
        angle <= (ANGLE_TOLERANCE if len(arm.tool_joints) >= 6 else TILT_TOLERANCE)
    )
    return [q for q, is_good in zip(answers, good, strict=True) if is_good]


def _out_of_reach(arm: Arm, pose: Array, branches: Branches) -> UnreachableError:
    """Why no branch stands at a pose: a component that the arm does not serve, or how far off the best one
    is."""
    best = int(np.argmin(np.hypot(branches.position_error[0], arm.length * branches.angle_error[0])))
    q = branches.q[0, best]
    data = {
        "pose": pose,
        "best": q,
        "configuration": dict(branches.labels[best]),
        "position_error": float(branches.position_error[0, best]),
        "angle_error": float(branches.angle_error[0, best]),
    }
    # A closed form with four axes serves position and turn exactly: what is left of the angle is tilt.
    if arm.structure in ("gantry", "scara") and data["angle_error"] > TILT_TOLERANCE:
        tilt = _tilt(arm, q, pose)
        return UnreachableError(
            f"{arm.name}: the pose is tilted {tilt}; {arm.name} serves {_served(arm)}; tolerance 0.001 deg",
            data=data,
        )
    axes = len(arm.tool_joints)
    off = []
    if data["position_error"] > POSITION_TOLERANCE:
        off.append(format_quantity(data["position_error"], "length"))
    if data["angle_error"] > (ANGLE_TOLERANCE if axes >= 6 else TILT_TOLERANCE):
        off.append(format_quantity(data["angle_error"], "angle"))
    few = axes < 6 and arm.structure not in ("gantry", "scara")
    why = f" (an arm with {axes} axes can't serve every pose{_instead(arm)})" if few else ""
    return UnreachableError(
        f"{arm.name}: the pose is out of reach{why}: the nearest answer is off by {' and '.join(off)}",
        data=data,
    )


def _instead(arm: Arm) -> str:
    """What an arm with fewer than six axes does serve, if it has a name."""
    if arm.serves_pointing:
        return "; it serves places and directions of the tool's z axis, with a roll that follows"
    return f"; it serves {_served(arm)}" if arm.serves else ""


def _tilt(arm: Arm, q: Array, pose: Array) -> str:
    """The part of the angle error about base axes that the arm does not serve, in words."""
    relative = pose[:3, :3] @ forward(arm, q)[:3, :3].T
    skew = np.array([relative[2, 1] - relative[1, 2], relative[0, 2] - relative[2, 0], relative[1, 0] - relative[0, 1]])
    sine, cosine = float(np.linalg.norm(skew)) / 2.0, (np.trace(relative) - 1.0) / 2.0
    angle = float(np.arctan2(sine, cosine))
    names = [name for name in "xyz" if f"rotation about {name}" not in arm.serves]
    if angle > np.deg2rad(179.0):  # which axis it is about hangs on where the turning joint stands
        return f"{format_quantity(angle, 'angle')} about {' or '.join(names)}"
    vector = dict(zip("xyz", np.abs(skew) / (2.0 * sine) * angle, strict=True))
    large = sorted((vector[name], name) for name in names if vector[name] > TILT_TOLERANCE / 2.0)
    return " and ".join(f"{format_quantity(value, 'angle')} about {name}" for value, name in large[::-1])


def _served(arm: Arm) -> str:
    """The served components in words."""
    names = [name for name in COMPONENTS if name in arm.serves]
    turning = arm.structure in ("gantry", "scara") and not any(name.startswith("rotation") for name in names)
    names += ["rotation about its turning axis"] * turning
    return ", ".join(names[:-1]) + " and " + names[-1] if len(names) > 1 else names[0]


def _excluded(arm: Arm, pose: Array, branches: Branches) -> UnreachableError:
    """Which position limit excludes each branch; the nearest miss is named first and in `data`."""
    misses = []
    for q, valid, label in zip(branches.q[0], branches.valid[0], branches.labels, strict=True):
        if valid:
            misses.append((*_worst_miss(arm, q), ", ".join(f"{key} {word}" for key, word in label.items()), q))
    misses.sort(key=lambda miss: miss[0])
    beyond, joint, text, _, q = misses[0]
    if len(misses) == 1:
        message = f"{arm.name}: the pose needs {text}"
    else:
        listed = "; ".join(f"{words}: {miss}" if words else miss for _, _, miss, words, _ in misses)
        message = f"{arm.name}: every branch that reaches the pose breaks a position limit: {listed}"
    return UnreachableError(message, data={"pose": pose, "best": q, "joint": joint, "beyond": beyond})


def _worst_miss(arm: Arm, q: Array) -> tuple[float, str, str]:
    """(how far beyond, joint or limit name, words) of the limit that an answer breaks most, nearest turn."""
    worst = (-1.0, "", "")
    nearest = q.copy()
    for i, joint in enumerate(arm.joints):
        low, high = joint.position
        if joint.kind == "revolute" and np.isfinite(low) and np.isfinite(high):
            nearest[i] += 2 * np.pi * np.round(((low + high) / 2 - q[i]) / (2 * np.pi))
    values = limited(arm, nearest)
    for name, row, value, (low, high) in zip(
        arm.limits.names, arm.limits.matrix, values, arm.limits.position, strict=True
    ):
        beyond = float(max(low - value, value - high))
        if beyond > worst[0]:
            slides = all(joint.kind == "prismatic" for joint, c in zip(arm.joints, row, strict=True) if c)
            dimension = "length" if slides else "angle"
            limit = format_quantity(low if value < low else high, dimension)
            worst = (beyond, name, f"{name} at {format_quantity(value, dimension)}, limit {limit}")
    return worst
