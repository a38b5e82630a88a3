"""Closed-form inverses of arms with four axes: gantry and SCARA, vectorised over poses.

What such an arm does not serve, a tilt, is left out of its turn: the tool centre point is reached exactly whatever
the tilt is. How far off an answer is, `pathplan.arm.inverse` measures through the forward kinematics.
"""

from __future__ import annotations

from functools import partial
from itertools import pairwise

import numpy as np

from pathplan.arm.geometry import SHORT, Geometry, across
from pathplan.arm.inverse_form import Form
from pathplan.arm.model import Array
from pathplan.arm.subproblems import dot, planar, rotate, rotation_about, wrapped

__all__ = ["gantry", "scara"]


def gantry(g: Geometry) -> Form | None:
    """Three independent prismatic joints and one revolute one, in any order: one branch."""
    slides = [i for i in range(g.m) if g.kinds[i] == "prismatic"]
    if g.m != 4 or len(slides) != 3 or abs(np.linalg.det(g.axes[slides])) < 1e-3:
        return None
    return Form("gantry", "three slides and a turn", ({},), True, partial(_gantry, g, slides))


def _gantry(g: Geometry, slides: list[int], rotation: Array, shift: Array) -> Array:
    tool_point = g.zero_pose[:3, 3]
    (turning,) = (i for i in range(4) if i not in slides)
    axis, centre = g.axes[turning], g.points[turning]
    angle = rotation_about(axis, rotation)
    point = np.einsum("ijn,j->in", rotation, tool_point) + shift
    arm = np.repeat((tool_point - centre)[:, None], angle.shape[-1], axis=1)
    travel = point - centre[:, None] - rotate(axis, angle, arm)
    joints = np.empty((4, 1, angle.shape[-1]))
    joints[turning, 0] = angle
    if max(slides) < turning:
        moved = np.linalg.inv(g.axes[slides].T) @ travel
    else:  # slides beyond the turning joint turn with it
        directions = np.empty((angle.shape[-1], 3, 3))
        for k, i in enumerate(slides):
            direction = np.repeat(g.axes[i][:, None], angle.shape[-1], axis=1)
            directions[:, :, k] = (direction if i < turning else rotate(axis, angle, direction)).T
        moved = np.linalg.solve(directions, travel.T[:, :, None])[:, :, 0].T
    joints[slides, 0] = moved
    return joints


def scara(g: Geometry) -> Form | None:
    """Three parallel revolute joints and a prismatic one along them, in any order: elbow left, elbow right."""
    turns = [i for i in range(g.m) if g.kinds[i] == "revolute"]
    if g.m != 4 or len(turns) != 3 or not all(g.parallel(0, i) for i in range(1, 4)):
        return None
    if min(g.link(0, g.points[i], g.points[j]) for i, j in pairwise(turns)) < SHORT:
        return None
    labels = ({"elbow": "left"}, {"elbow": "right"})
    return Form("scara", "three parallel turns and a slide along them", labels, True, partial(_scara, g))


def _scara(g: Geometry, rotation: Array, shift: Array) -> Array:
    tool_point = g.zero_pose[:3, 3]
    r1, r2, r3 = (i for i in range(4) if g.kinds[i] == "revolute")
    (slide,) = (i for i in range(4) if g.kinds[i] == "prismatic")
    axis = g.axes[r1]
    signs = np.sign(g.axes @ axis)
    total = rotation_about(axis, rotation)
    point = np.einsum("ijn,j->in", rotation, tool_point) + shift
    hand = np.repeat((tool_point - g.points[r3])[:, None], total.shape[-1], axis=1)
    to_wrist = point - rotate(axis, total, hand) - g.points[r1][:, None]
    first = across(g.points[r2] - g.points[r1], axis)
    second = across(g.points[r3] - g.points[r2], axis)
    # Facing from axis 1 to the wrist axis, the elbow is on the left where (wrist x elbow) . up > 0.
    left = -g.upward(r1)
    q1, bend = planar(axis, first, second, to_wrist[:, None], np.array([left, -left])[:, None])
    joints = np.empty((4, 2, total.shape[-1]))
    joints[r1] = q1
    joints[r2] = signs[r2] * bend
    joints[r3] = signs[r3] * (total - q1 - bend)
    joints[slide] = signs[slide] * (dot(axis, point) - axis @ tool_point)
    joints[[r1, r2, r3]] = wrapped(joints[[r1, r2, r3]])
    return joints
