"""What a blend asks for on the steps it stands between: corner sizes in the path parameter, and back.

The rules are stated once, at the head of `pathplan.path.corners`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np

from pathplan.errors import InputError
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array
from pathplan.path.motions import Motions
from pathplan.path.newton import joint_weights
from pathplan.task.model import Blend, Step
from pathplan.units import format_quantity

__all__ = ["asked_sizes", "distances", "used_sizes"]

_SAMPLES = 33  # of a step, where something is measured along it


def _revolute(motions: Motions) -> list[int]:
    weights = joint_weights(motions.arm)  # a virtual roll counts nothing
    return [i for i, joint in enumerate(motions.arm.joints) if joint.kind == "revolute" and weights[i] > 0.0]


def asked_sizes(motions: Motions, blends: Sequence[Blend | None], steps: Sequence[Step]) -> Array:
    """(M - 1,) delta that each blend asks for, room on the steps left aside; 0 where there is none.

    `blends` and `steps` (M - 1): after each motion but the last. Raises InputError for a blend longer than
    the line or arc it ends, and for one that means nothing between its two steps.
    """
    asked = np.zeros(len(blends))
    sampled: list[_Sampled] = []
    for j, (blend, step) in enumerate(zip(blends, steps, strict=True)):
        if blend is None:
            continue
        if blend.kind == "share":
            asked[j] = blend.value * min(motions.length[j], motions.length[j + 1])
            continue
        _check_length(motions, j, blend, step)
        sides = [_size_on_side(motions, j, side, blend) for side in (0, 1)]
        if sides == [np.inf, np.inf]:
            has_not, hint = "moves the tool centre point", "an angle"
            if blend.kind == "angle":
                has_not, hint = "turns anything", "a length"
            raise InputError(f"{step.where}: blend {blend.text}: neither step here {has_not}, expected {hint}")
        asked[j] = min((size for size in sides if size is not None), default=np.inf)
        sampled += [
            _Sampled(j, side, blend.kind == "length", blend.value) for side, size in enumerate(sides) if size is None
        ]
    for entry, size in zip(sampled, _sampled_sizes(motions, sampled), strict=True):
        asked[entry.junction] = min(asked[entry.junction], size)
    return asked


class _Sampled(NamedTuple):
    """A side of a corner on which a size must be found by sampling."""

    junction: int
    side: int  # 0 incoming, 1 outgoing
    as_length: bool  # measured at the tool centre point, else at the revolute joints
    value: float


def _check_length(motions: Motions, j: int, blend: Blend, step: Step) -> None:
    segment = motions.segment[j]
    if blend.kind != "length" or segment < 0:
        return
    own = float(motions.segments.path_length[segment])
    if 0.0 < own * (1 + 1e-9) < blend.value:
        text = f"blend {blend.text} is longer than its {step.motion} of {format_quantity(own, 'length')}"
        raise InputError(f"{step.where}: {text}", data={"step": step.index, "blend": blend.value, "length": own})


def _size_on_side(motions: Motions, j: int, side: int, blend: Blend) -> float | None:
    """delta at which one side reaches a length or an angle; inf if it has none of it, None if it must be
    sampled.
    """
    m = j + side
    segment = motions.segment[m]
    if segment < 0:
        if blend.kind == "length" or motions.bent[m] >= 0:
            return None
        rate = float(np.abs(motions.direction[m, _revolute(motions)]).max(initial=0.0))
        return blend.value / rate if rate > 1e-12 else np.inf
    if blend.kind == "angle" and not _is_pair(motions, j):
        return None
    extent, rate = (float(values[segment]) for values in _extents(motions, blend))
    return blend.value / rate if extent > 1e-12 else np.inf


def _is_pair(motions: Motions, j: int) -> bool:
    """Both steps at a junction are lines or arcs."""
    return bool(motions.segment[j] >= 0 and motions.segment[j + 1] >= 0)


def _extents(motions: Motions, blend: Blend) -> tuple[Array, Array]:
    """(K,) what there is of a blend's quantity on each segment, m or rad, and the most of it per path parameter."""
    segments = motions.segments
    return (segments.path_length, segments.speed) if blend.kind == "length" else (segments.angle, segments.turning)


def _sampled_sizes(motions: Motions, wanted: Sequence[_Sampled]) -> Array:
    """(N,) path parameter from the corner at which a measured distance reaches its value; inf if it
    never does.
    """
    if not wanted:
        return np.zeros(0)
    j, side = np.array([entry.junction for entry in wanted]), np.array([entry.side for entry in wanted])
    m, corner = j + side, motions.end[j]
    length = motions.length[m]
    as_length = np.array([entry.as_length for entry in wanted])

    def measure(rows: Index, x: Array) -> Array:
        q = motions.joint_points(m[rows], np.where(side[rows] == 0, length[rows] - x, x))
        return distances(motions, m[rows], q, corner[rows], as_length[rows])

    return _first_reach(measure, length, np.array([entry.value for entry in wanted]))


def distances(motions: Motions, m: Index, q: Array, corner: Array, as_length: Mask) -> Array:
    """(N,) distance of joint vectors from corners (N, n): m at the tool centre point, or rad of a
    revolute joint.
    """
    out = np.abs((q - corner)[:, _revolute(motions)]).max(axis=1, initial=0.0)
    if as_length.any():
        at = m[as_length]
        moved = motions.tool_points(at, q[as_length]) - motions.tool_points(at, corner[as_length])
        out[as_length] = np.linalg.norm(moved, axis=1)
    return np.asarray(out)


def _first_reach(measure: Callable[[Index, Array], Array], length: Array, value: Array) -> Array:
    """First x in [0, length] (N,) at which measure(rows, x) reaches `value`: sampled, then sampled again
    between two samples.
    """
    low, high = np.zeros(len(length)), length.copy()
    rows = np.arange(len(length))
    never: Mask = np.zeros(len(length), dtype=bool)
    below, above = np.zeros(len(length)), np.zeros(len(length))
    for round_ in range(3):
        share = np.linspace(0.0, 1.0, _SAMPLES)
        x = low[:, None] + share * (high - low)[:, None]
        values = measure(np.repeat(rows, _SAMPLES), x.ravel()).reshape(x.shape)
        over = values >= value[:, None]
        first = np.maximum(over.argmax(axis=1), 1)
        if round_ == 0:
            never = np.asarray(~over.any(axis=1))
        low, high = x[rows, first - 1], x[rows, first]
        below, above = values[rows, first - 1], values[rows, first]
    part = np.clip((value - below) / np.maximum(above - below, 1e-300), 0.0, 1.0)
    return np.where(never, np.inf, low + part * (high - low))


def used_sizes(motions: Motions, blends: Sequence[Blend | None], delta: Array, reach: Array) -> Array:
    """(M - 1,) how far corners of sizes delta reach, in the unit each was asked in: the larger of both sides.

    `reach` (M - 1,): the measured one of corners in which a joint step takes part.
    """
    used = np.zeros(len(blends))
    for j, blend in enumerate(blends):
        if blend is None:
            continue
        if blend.kind == "share":
            used[j] = delta[j] / min(motions.length[j], motions.length[j + 1])
        elif _is_pair(motions, j):
            used[j] = float((_extents(motions, blend)[1][motions.segment[j : j + 2]] * delta[j]).max())
        else:
            used[j] = reach[j]
        used[j] = min(used[j], blend.value)
    return used
