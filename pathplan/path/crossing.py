"""Where a branch of the inverse runs straight through a singularity, and which branch it is afterwards.

At a singularity of the kind that two branches share (axes 4 and 6 in line, the wrist centre on axis 1) the set of
singular poses is thin: a path that really meets it, and goes on, has joint positions that are smooth there, though
the Jacobian is singular. Only the name of the branch changes: as q5 passes zero, wrist positive becomes wrist
negative, while a branch that keeps its name would have to turn axes 4 and 6 by half a turn on the spot. So a track
that jumps is continued in the branch nearest to it, if the singularity between is truly met.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from pathplan.path.follower import Course
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array

__all__ = ["CLEAR", "JUMP", "Crossing", "least_singular", "mirrored", "passes"]

CROSSED = 1e-7  # smallest singular value up to which a singularity is met: what the fit of the joints forgives
CLEAR = 1e-3  # path parameter beside a crossing from which on the branches are told apart
JUMP = 0.35  # rad: a joint that moves further between two samples might have gone round another way
_STEEPEST = 20.0  # no singular value changes faster by the path parameter, on a branch that runs on smoothly
_GRID = np.linspace(0.0, 1.0, 9)
_ROUNDS = 30
_NARROWEST = 1e-14

Inverse = Callable[[Index, Array], tuple[Array, Mask]]
"""Joint vectors (N, B, n) and which are valid (N, B) at s (N,) of segments (N,)."""


@dataclass(frozen=True)
class Crossing:
    """A branch passes a singularity on its way: segment, path parameter, and its slot in the tracks."""

    segment: int
    s: float
    slot: int


def least_singular(
    course: Course, inverse: Inverse, k: Index, slot: Index, low: Array, high: Array
) -> tuple[Array, Array]:
    """Where between low and high (C,) a branch has the smallest singular value, and that value (C,).

    k (C,) segments, slot (C,) branches. Minimum by narrowing a
    grid; a candidate whose value is too large to vanish in what is left of its interval is left as it is.
    """
    low, high = low.copy(), high.copy()
    best, at = np.full(len(k), np.inf), (low + high) / 2
    going = np.arange(len(k))
    for _ in range(_ROUNDS):
        if not len(going):
            break
        s = low[going, None] + (high - low)[going, None] * _GRID
        value = np.full(s.shape, np.inf)
        row = np.repeat(np.arange(len(going)), len(_GRID))
        every_q, every_valid = inverse(k[going][row], s.ravel())
        own = slot[going][row]
        valid = every_valid[np.arange(len(row)), own]
        q = every_q[np.arange(len(row)), own]
        found = np.full(len(row), np.inf)
        if valid.any():
            found[valid] = course.follower.singular(course.view[k[going][row]][valid], q[valid])
        value = found.reshape(s.shape)
        least = value.argmin(axis=1)
        every = np.arange(len(going))
        better = value[every, least] <= best[going]
        best[going] = np.where(better, value[every, least], best[going])
        at[going] = np.where(better, s[every, least], at[going])
        low[going] = s[every, np.maximum(least - 1, 0)]
        high[going] = s[every, np.minimum(least + 1, len(_GRID) - 1)]
        width = (high - low)[going]
        going = going[(width > _NARROWEST) & (best[going] <= _STEEPEST * width) & np.isfinite(best[going])]
    return at, best


def passes(
    course: Course, inverse: Inverse, segment: Index, s: Array, q: Array, useful: Mask, jumps: Mask
) -> list[tuple[int, float]]:
    """Segments and places at which a useful branch meets a singularity between samples where it jumps.

    `useful` (T, B): the branch could be taken there; `jumps` (T - 1, B) from a sample to the next.
    """
    i, b = np.nonzero(jumps & useful[:-1])
    if not len(i):
        return []
    width = s[i + 1] - s[i]
    view = course.view[segment[i]]
    near = np.minimum(*(course.follower.singular(view, q[row, b]) for row in (i, i + 1))) <= _STEEPEST * width
    i, b = i[near], b[near]
    if not len(i):
        return []
    low = np.where(segment[np.maximum(i - 1, 0)] == segment[i], s[np.maximum(i - 1, 0)], s[i])
    after = np.minimum(i + 2, len(s) - 1)
    high = np.where(segment[after] == segment[i], s[after], s[i + 1])
    at, value = least_singular(course, inverse, segment[i], b, low, high)
    found: list[tuple[int, float]] = []
    met = np.flatnonzero(value <= CROSSED)
    for row in met[np.lexsort((at[met], segment[i[met]]))]:
        k, place = int(segment[i[row]]), float(at[row])
        if not (found and found[-1][0] == k and place - found[-1][1] < CLEAR):
            found.append((k, place))
    return found


def mirrored(before: Array, after: Array, usable: Mask, revolute: Mask, nearest: float) -> Index:
    """(B,) the slot in which each branch goes on: the one after (B, n) that is nearest to it before (B, n).

    Only slots that are `usable` (B,) on both sides, and nearer than `nearest` in every joint, change places.
    """
    change = after[None] - before[:, None]
    change -= np.where(revolute, 2.0 * np.pi * np.round(change / (2.0 * np.pi)), 0.0)
    far = np.abs(change).max(axis=2)
    far[:, ~usable] = np.inf
    far[~usable] = np.inf
    order = np.arange(len(before))
    for slot in np.flatnonzero(usable):
        other = int(far[slot].argmin())
        if far[slot, other] < nearest and int(far[:, other].argmin()) == slot:
            order[slot] = other
    # Whoever is left out keeps to a permutation: places that two would claim stay as they were.
    return order if len(set(order.tolist())) == len(order) else np.arange(len(before))
