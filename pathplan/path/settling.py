"""A task in which something is free, made one in which nothing is: courses of the held joints and of the tool's roll.

Where both ends are known and nothing is free between them, a held joint moves evenly along the step. What is free is
chosen (`pathplan.path.ladder`), and a smooth course laid near what was chosen: quintic splines with few pieces, through
the values at the targets. What then is programmed is followed, fitted and judged like any other path.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pathplan.path.cartesian import CartesianPath
from pathplan.path.follower import Course
from pathplan.path.geometry import Mask
from pathplan.path.joint import Array, JointPath
from pathplan.path.rotations import turn_about

if TYPE_CHECKING:
    from scipy.interpolate import BSpline

__all__ = ["TIGHTNESS", "settled"]

TIGHTNESS = (1.0, 0.25, 0.05)
"""How near a course keeps to what was chosen, as factors; a nearer one is tried where the first can't be followed."""
_NEAR = 0.05  # rad, or arm lengths
_PIECES = (1, 2, 4, 8, 16, 32)
_STIFF = 1e-8  # weight of bends against distances, where values alone don't say which course is meant


def settled(path: CartesianPath, way: Array | None, tightness: float = 1.0) -> CartesianPath:
    """The same path with every held joint and roll decided. `way`: the coordinates at the task's rungs; None where
    everything is known.
    """
    free = path.free
    if free is None:
        return path
    from pathplan.path.rungs import rungs_of

    held = len(path.follower.held)
    legs, laws = list(path.legs), []
    rolls: list[JointPath | None] = []
    at_targets = free.known.copy()
    roll_at = np.zeros(len(legs) + 1)
    rungs = rungs_of(path) if way is not None else None
    if rungs is not None and way is not None:
        ends = np.flatnonzero(rungs.target >= 0)
        loose = np.isnan(at_targets)
        at_targets[loose] = way[ends, :held][loose]
        if rungs.rolls:
            roll_at = np.where(free.roll, way[ends, -1], 0.0)
    weights = np.append(_weights(path), 1.0)
    for i, leg in enumerate(legs):
        pose = _turned(leg.end, roll_at[i + 1]) if leg.kind != "none" else _turned(leg.end, roll_at[i])
        legs[i] = replace(leg, start=_turned(leg.start, roll_at[i]), end=pose)
        if leg.segment < 0:
            continue
        length = float(path.segments.length[leg.segment])
        if rungs is None or way is None:
            s = np.array([0.0, length])
            values = np.column_stack([at_targets[[i, i + 1]], np.zeros(2)])
        else:
            mine = np.flatnonzero(rungs.leg == i)
            rows = np.append(mine[0] - 1, mine)
            s = np.append(0.0, rungs.s[mine])
            values = np.zeros((len(rows), held + 1))
            values[:, :held] = way[rows, :held]
            values[[0, -1], :held] = at_targets[[i, i + 1]]
            if free.rolling[i]:
                values[:, -1] = way[rows, -1]
                values[[0, -1], -1] = roll_at[[i, i + 1]]
                values[:, -1] = np.unwrap(values[:, -1])
        even = np.append(~np.isnan(free.known[[i, i + 1]]).any(axis=0), not free.rolling[i])
        law = _course(s, values, even, weights, tightness)
        if leg.step.roll_free:
            rolls.append(_column(law, held, leg.twist / length))
        else:
            rolls.append(None)
        if held:
            laws.append(_columns(law, held))
    rolling = any(law is not None for law in rolls)
    segments = replace(path.segments, rolls=tuple(rolls)) if rolling else path.segments
    course = Course(path.follower, path.course.view, tuple(laws) if held else ())
    at_targets.flags.writeable = False
    return replace(path, legs=tuple(legs), segments=segments, course=course, held=at_targets)


def _weights(path: CartesianPath) -> Array:
    from pathplan.path.newton import joint_weights

    return joint_weights(path.task.arm)[list(path.follower.held)]


def _turned(pose: Array, angle: float) -> Array:
    """A pose (4, 4) turned about its own z axis."""
    if angle == 0.0:
        return pose
    out = pose.copy()
    out[:3, :3] = out[:3, :3] @ turn_about(np.array([[0.0, 0.0, 1.0]]), np.array([angle]))[0]
    return out


def _course(s: Array, values: Array, even: Mask, weights: Array, tightness: float) -> BSpline:
    """Quintic spline near values (N, C) at s (N,), through the first and last; evenly between these where `even`."""
    from scipy.interpolate import BSpline

    length = float(s[-1])
    straight = values[0] + (s / length)[:, None] * (values[-1] - values[0])
    rest = np.where(even, 0.0, values - straight)
    for pieces in _PIECES:
        knots = np.concatenate([np.zeros(5), np.linspace(0.0, length, pieces + 1), np.full(5, length)])
        design = BSpline.design_matrix(s, knots, 5).toarray()[:, 1:-1]
        bends = np.diff(np.eye(design.shape[1] + 2), 2, axis=0)[:, 1:-1] * np.sqrt(_STIFF * len(s))
        inner = np.linalg.lstsq(
            np.vstack([design, bends]), np.vstack([rest, np.zeros((len(bends), rest.shape[1]))]), rcond=None
        )[0]
        off = np.abs((design @ inner - rest) * weights).max(initial=0.0)
        if off <= _NEAR * tightness or pieces >= len(s) - 1:
            break
    greville = np.array([knots[k + 1 : k + 6].mean() for k in range(len(knots) - 6)])
    line = values[0] + (greville / length)[:, None] * (values[-1] - values[0])
    coefficients = line + np.vstack([np.zeros(rest.shape[1]), inner, np.zeros(rest.shape[1])])
    return BSpline(knots, coefficients, 5)


def _columns(law: BSpline, count: int) -> JointPath:
    """The first columns of a spline as a joint path."""
    from scipy.interpolate import BSpline

    return JointPath(BSpline(law.t, np.ascontiguousarray(law.c[:, :count]), law.k))


def _column(law: BSpline, column: int, rate: float) -> JointPath:
    """One column of a spline, with a constant rate added."""
    from scipy.interpolate import BSpline

    greville = np.array([law.t[k + 1 : k + 1 + law.k].mean() for k in range(len(law.c))])
    return JointPath(BSpline(law.t, (law.c[:, column] + rate * greville)[:, None], law.k))
