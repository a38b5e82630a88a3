"""Where the arm may be at each target: every branch of the inverse with its turn equivalents inside the
limits.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.path.geometry import Index
from pathplan.path.joint import Array

__all__ = [
    "LIMIT_SLACK",
    "SAME_STATE",
    "States",
    "endless_joints",
    "expand",
    "judged_rows",
    "matching",
    "within_limits",
]

LIMIT_SLACK = 1e-9  # rad or m beyond a position limit: the limit itself, rounded
SAME_STATE = 1e-6  # rad or m: a track that starts or ends nearer than this to a state does so in it
_TURN = 2.0 * np.pi


@dataclass(frozen=True, eq=False)
class States:
    """Candidate joint vectors, sorted by target. S states of T targets."""

    target: Index  # (S,)
    branch: Index  # (S,) of the inverse; -1 for a joint vector given as such
    q: Array  # (S, n)
    first: Index  # (T + 1,): the states of target t are first[t] to first[t + 1]

    def of(self, target: int) -> slice:
        return slice(int(self.first[target]), int(self.first[target + 1]))


def endless_joints(arm: Arm) -> NDArray[np.bool_]:
    """(n,) revolute joints that may turn without end on one side or both: their turns are counted by
    nearest turn.
    """
    return np.array(
        [joint.kind == "revolute" and not np.isfinite(joint.position).all() for joint in arm.joints],
        dtype=bool,
    )


def judged_rows(arm: Arm) -> Index:
    """Rows of the arm's limits whose position can be judged before turns are known.

    Rows without any limit, and rows with an endless joint in them, are left out: the latter are verified
    on the finished path.
    """
    limits = arm.limits
    judged = ~(limits.matrix[:, endless_joints(arm)] != 0).any(axis=1) & np.isfinite(limits.position).any(axis=1)
    return np.flatnonzero(judged)


def within_limits(arm: Arm, q: Array) -> NDArray[np.bool_]:
    """(N,): every judged position row of the arm's limits holds at q (N, n)."""
    judged = judged_rows(arm)
    rows = q @ arm.limits.matrix[judged].T
    low, high = arm.limits.position[judged].T
    return np.asarray(((rows >= low - LIMIT_SLACK) & (rows <= high + LIMIT_SLACK)).all(axis=1))


def expand(arm: Arm, target: Index, branch: Index, q: Array) -> tuple[Index, Index, Array]:
    """All turn equivalents inside the position limits of answers q (N, n) in (-pi, pi], with their
    target and branch.
    """
    endless = endless_joints(arm)
    for j, joint in enumerate(arm.joints):
        if joint.kind != "revolute" or endless[j]:
            continue
        low, high = joint.position[0] - LIMIT_SLACK, joint.position[1] + LIMIT_SLACK
        fewest = np.ceil((low - q[:, j]) / _TURN).astype(int)
        most = np.floor((high - q[:, j]) / _TURN).astype(int)
        count = np.maximum(most - fewest + 1, 0)
        row = np.repeat(np.arange(len(q)), count)
        within = np.arange(len(row)) - np.repeat(np.cumsum(count) - count, count)
        target, branch, q = target[row], branch[row], q[row]
        q[:, j] += _TURN * (fewest[row] + within)
    keep = within_limits(arm, q)
    return target[keep], branch[keep], q[keep]


def matching(labels: tuple[Mapping[str, str], ...], asked: Mapping[str, str]) -> NDArray[np.bool_]:
    """(B,) branches whose labels have everything asked."""
    return np.array([all(label.get(key) == word for key, word in asked.items()) for label in labels], dtype=bool)
