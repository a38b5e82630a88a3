"""Branches by numeric search from many starts, for chains that no closed form and no elimination serves.

Starts come from a generator of our own with a fixed seed, so the same pose always gets the same answers.
"""

from __future__ import annotations

import numpy as np

from pathplan.arm.elimination import BRANCHES, distinct
from pathplan.arm.geometry import Geometry
from pathplan.arm.model import Array, Mask
from pathplan.arm.refine import canonical, descend, pose_errors, reached, refine

__all__ = ["FORGIVEN", "nearest", "search", "starts"]

STARTS = 240
ROUND = 40  # starts tried together
QUIET = 2  # rounds that bring nothing new end the search
NEAREST_STARTS = 24
FORGIVEN = 3e-5  # rad: with fewer than six axes a pose may be tilted by 0.001 deg; what is nearer than this is refined


def starts(g: Geometry, travel: Array, count: int = STARTS, seed: int = 20_240_229) -> Array:
    """Joint values (count, m) all over the turn of revolute joints and the travel (m, 2) of prismatic ones."""
    low = np.where([kind == "revolute" for kind in g.kinds], -np.pi, travel[:, 0])
    high = np.where([kind == "revolute" for kind in g.kinds], np.pi, travel[:, 1])
    return np.random.default_rng(seed).uniform(low, high, (count, g.m))


def search(g: Geometry, travel: Array, poses: Array) -> tuple[Array, Mask]:
    """Answers (N, 16, m) for poses (N, 4, 4), and which places (N, 16) hold one.

    A chain with fewer than six joints may miss the orientation by what its tolerance forgives, not the position.
    """
    places = np.zeros((len(poses), BRANCHES, g.m))
    filled = np.zeros((len(poses), BRANCHES), dtype=bool)
    quiet = np.zeros(len(poses), dtype=int)
    all_starts = starts(g, travel)
    enough = 1e-6 if g.m >= 6 else FORGIVEN
    for first in range(0, STARTS, ROUND):
        rows = np.flatnonzero((quiet < QUIET) & ~filled.all(axis=1))
        if not len(rows):
            break
        each = np.repeat(rows, ROUND)
        begin = np.tile(all_starts[first : first + ROUND], (len(rows), 1))
        q, off = descend(g, begin, poses[each])
        near = off < 10.0 * enough
        q[near] = canonical(g, refine(g, q[near], poses[each[near]]))
        distance, angle = pose_errors(reached(g, q), poses[each])
        good = (distance < 1e-9) & (angle < (1e-9 if g.m >= 6 else FORGIVEN))
        candidates = np.concatenate([places[rows], q.reshape(len(rows), ROUND, g.m)], axis=1)
        known = np.concatenate([filled[rows], good.reshape(len(rows), ROUND)], axis=1)
        before = filled[rows].sum(axis=1)
        places[rows], filled[rows] = distinct(g, candidates, known, BRANCHES)
        quiet[rows] = np.where(filled[rows].sum(axis=1) > before, 0, quiet[rows] + 1)
    return places, filled


def nearest(g: Geometry, travel: Array, poses: Array) -> Array:
    """The joint values (N, m) that bring the tool nearest to poses (N, 4, 4), metres counted over the arm's length."""
    begin = starts(g, travel, NEAREST_STARTS)
    q, off = descend(g, np.tile(begin, (len(poses), 1)), np.repeat(poses, NEAREST_STARTS, axis=0), rounds=80)
    best = np.argmin(off.reshape(len(poses), NEAREST_STARTS), axis=1)
    return canonical(g, q.reshape(len(poses), NEAREST_STARTS, g.m)[np.arange(len(poses)), best])
