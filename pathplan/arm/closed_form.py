"""Closed-form inverses of a gantry, a SCARA and a spherical wrist, vectorised over poses.

Each takes the poses base_from_tool as rotations (3, 3, N) and points (3, N) and returns joint values (n, B,
N). The axes, not DH rows, are what they work on, after Elias & Wen 2022 (canonical subproblems). A pose out
of reach gets the nearest answer; how far off it is, `pathplan.arm.inverse` measures through the forward
kinematics.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from pathplan.arm.model import Array
from pathplan.arm.structure import ClosedForm
from pathplan.arm.subproblems import (
    angle_about,
    cross,
    dot,
    rotate,
    rotation_about,
    two_angles,
    two_link,
)

__all__ = ["branch_labels", "gantry", "scara", "solve_closed_form", "spherical_wrist"]

STRAIGHT = 1e-11  # sine of q5 below which axes 4 and 6 count as one line; joint 4 then stays at zero


def branch_labels(structure: str) -> tuple[Mapping[str, str], ...]:
    """Words for the branches of a structure, in the order of the branch index."""
    if structure == "spherical wrist":
        return tuple(
            {"shoulder": shoulder, "elbow": elbow, "wrist": wrist}
            for shoulder in ("left", "right")
            for elbow in ("up", "down")
            for wrist in ("positive", "negative")
        )
    if structure == "scara":
        return ({"elbow": "left"}, {"elbow": "right"})
    return ({},)


def solve_closed_form(form: ClosedForm, rotation: Array, point: Array) -> Array:
    """Joint values (n, B, N), revolute ones in (-pi, pi]."""
    solve = {"gantry": gantry, "scara": scara, "spherical wrist": spherical_wrist}[form.structure]
    return solve(form, rotation, point)


def _turn(form: ClosedForm, rotation: Array) -> Array:
    """Rotations (3, 3, N) that bring the tool from q = 0 to the pose."""
    return np.einsum("ikn,jk->ijn", rotation, form.zero_pose[:3, :3])


def gantry(form: ClosedForm, rotation: Array, point: Array) -> Array:
    """Three independent prismatic joints and one revolute one, in any order: one branch."""
    turning = form.order[3]
    axis, centre = form.axes[turning], form.points[turning]
    angle = rotation_about(axis, _turn(form, rotation))
    arm = np.repeat((form.zero_pose[:3, 3] - centre)[:, None], angle.shape[-1], axis=1)
    travel = point - centre[:, None] - rotate(axis, angle, arm)
    joints = np.empty((4, 1, angle.shape[-1]))
    joints[turning, 0] = angle
    slides = form.order[:3]
    if max(slides) < turning:
        moved = np.linalg.inv(form.axes[list(slides)].T) @ travel
    else:  # slides beyond the turning joint turn with it
        directions = np.empty((angle.shape[-1], 3, 3))
        for k, i in enumerate(slides):
            direction = np.repeat(form.axes[i][:, None], angle.shape[-1], axis=1)
            directions[:, :, k] = (direction if i < turning else rotate(axis, angle, direction)).T
        moved = np.linalg.solve(directions, travel.T[:, :, None])[:, :, 0].T
    joints[list(slides), 0] = moved
    return joints


def scara(form: ClosedForm, rotation: Array, point: Array) -> Array:
    """Three parallel revolute joints and a prismatic one along them, in any order: elbow left, elbow
    right."""
    r1, r2, r3, slide = form.order
    axis = form.axes[r1]
    signs = [np.sign(axis @ form.axes[i]) for i in form.order]
    total = rotation_about(axis, _turn(form, rotation))
    hand = np.repeat((form.zero_pose[:3, 3] - form.points[r3])[:, None], total.shape[-1], axis=1)
    to_wrist = point - rotate(axis, total, hand) - form.points[r1][:, None]
    first = _square_to(axis, form.points[r2] - form.points[r1])
    second = _square_to(axis, form.points[r3] - form.points[r2])
    # Facing from axis 1 to the wrist axis, the elbow is on the left where (wrist x elbow) . up > 0.
    left = -np.sign(form.up @ axis)
    q1, bend = _planar(axis, first, second, to_wrist[:, None], np.array([left, -left])[:, None])
    joints = np.empty((4, 2, total.shape[-1]))
    joints[r1] = q1
    joints[r2] = signs[1] * bend
    joints[r3] = signs[2] * (total - q1 - bend)
    joints[slide] = signs[3] * (dot(axis, point) - axis @ form.zero_pose[:3, 3])
    joints[[r1, r2, r3]] = wrapped(joints[[r1, r2, r3]])
    return joints


def spherical_wrist(form: ClosedForm, rotation: Array, point: Array) -> Array:
    """Six revolute joints, axes 2 and 3 parallel, the last three meeting in a point: 8 branches."""
    a1, a2, a3, a4, a5, a6 = form.axes
    o1, o2, o3 = form.points[:3]
    size = point.shape[-1]
    turn = _turn(form, rotation)
    centre = point + np.einsum("ijn,j->in", turn, form.centre - form.zero_pose[:3, 3]) - o1[:, None]
    joints = np.empty((6, 2, 2, 2, size))  # joint, shoulder, elbow, wrist, pose

    # Shoulder: turning joint 1 back must leave the wrist centre at its distance along axis 2.
    offset = float(a2 @ (form.centre - o1))
    middle, half = two_angles(a1, a2, centre, np.full(size, offset))
    up = np.sign(form.up @ a1)
    ahead = up * (1.0 if offset > -1e-9 else -1.0) * np.array([1.0, -1.0])[:, None]  # left, right
    q1 = wrapped(ahead * half - middle)
    unturned = rotate(a1, -q1, np.repeat(centre[:, None], 2, axis=1))

    # Elbow: a two-link mechanism in the plane square to axes 2 and 3.
    first, second = _square_to(a2, o3 - o2), _square_to(a2, form.centre - o3)
    to_wrist = (unturned - (o2 - o1)[:, None, None])[:, :, None]
    bend_sign = (up * ahead)[:, None] * np.array([1.0, -1.0])[None, :, None]  # elbow up, down
    q2, bend = _planar(a2, first, second, to_wrist, bend_sign)
    joints[0] = q1[:, None, None]
    joints[1] = wrapped(q2)[:, :, None]
    joints[2] = wrapped(np.sign(a2 @ a3) * bend)[:, :, None]

    # Wrist: what is left of the turn, W = Rot(a4, q4) Rot(a5, q5) Rot(a6, q6), as columns.
    left_1 = rotate(a1, -q1[None], np.repeat(turn[:, :, None], 2, axis=2))
    wrist = rotate(a2, -(q2 + bend)[None], np.repeat(left_1[:, :, :, None], 2, axis=3))
    pointing = np.einsum("ijsen,j->isen", wrist, a6)
    middle_5, half_5 = _bend_of_wrist(form, pointing)
    # Positive is sin q5 > 0, q5 counted from the straight wrist nearest to its zero.
    flipped = round(middle_5 / np.pi) % 2 == 1
    q5 = middle_5 + (np.array([-1.0, 1.0]) if flipped else np.array([1.0, -1.0]))[:, None] * half_5[:, :, None]
    bent = rotate(a5, q5, np.broadcast_to(a6[:, None, None, None, None], (3, *q5.shape)))
    pointing = np.broadcast_to(pointing[:, :, :, None], (3, *q5.shape))
    q4 = angle_about(a4, bent, pointing)
    along = cross(a4, pointing)
    q4[np.sum(along * along, axis=0) < STRAIGHT**2] = 0.0
    rest = rotate(a4, -q4[None], np.repeat(wrist[:, :, :, :, None], 2, axis=4))
    rest = rotate(a5, -q5[None], rest)
    joints[3], joints[4], joints[5] = q4, wrapped(q5), rotation_about(a6, rest)
    return joints.reshape(6, 8, size)


def _bend_of_wrist(form: ClosedForm, pointing: Array) -> tuple[float, Array]:
    """Middle and half angle of the two q5 that let axis 6 point along `pointing` (3, ...)."""
    a4, a5, a6 = form.axes[3:]
    level = dot(a4, pointing)
    middle, half = two_angles(a5, a4, a6[:, None], level.reshape(1, -1))
    if abs(a4 @ a5) < 1e-9 and abs(a5 @ a6) < 1e-9:
        # Square axes: q5 is the angle between axes 4 and 6, and its sine is exact even where it is small.
        half = np.arctan2(np.linalg.norm(cross(a4, pointing), axis=0), level)
    return float(middle.reshape(-1)[0]), half.reshape(level.shape)


def _planar(axis: Array, first: Array, second: Array, target: Array, sign: Array) -> tuple[Array, Array]:
    """Two links `first` and `second` (3,), square to `axis`, that end at `target` (3, ...).

    `sign` says which way the second link is bent about the axis. Returns the turn of the first link and of
    the second against it, both about `axis` and from where they stand at q = 0.
    """
    across = target - np.einsum("i,...->i...", axis, dot(axis, target))
    reach = np.sqrt(np.sum(across * across, axis=0))
    angle = sign * two_link(float(np.linalg.norm(first)), float(np.linalg.norm(second)), reach)
    bend = angle - float(angle_about(axis, first, second))
    link = np.broadcast_to(second.reshape(3, *(1,) * bend.ndim), (3, *bend.shape))
    tip = first.reshape(3, *(1,) * bend.ndim) + rotate(axis, bend, link)
    return angle_about(axis, tip, np.broadcast_to(across, tip.shape)), bend


def _square_to(axis: Array, vector: Array) -> Array:
    return np.asarray(vector - axis * (axis @ vector))


def wrapped(angle: Array) -> Array:
    """Angles brought into (-pi, pi]; those already inside are returned unchanged to the last digit."""
    angle = angle - 2.0 * np.pi * np.round(angle / (2.0 * np.pi))
    return np.where(angle <= -np.pi, np.pi, angle)
