"""Timings and their bounds for many motions: torque is brought in only where it would be exceeded without.

A timing that is optimal without torque limits and keeps them is optimal with them, and its bound holds as it stands;
most motions of a well-sized arm are of that kind, and dynamics cost more than all the rest.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from pathplan.timing.bound import bound_durations
from pathplan.timing.coarse import coarse_timing
from pathplan.timing.fine import apply_torque
from pathplan.timing.mesh import Mesh, hermite, torque_rows_at
from pathplan.timing.motion import Motion
from pathplan.timing.solve import BATCH, TORQUE_MARGIN, time_again, time_motions
from pathplan.timing.stretch import StretchTiming

_CHECK_POINTS = 17  # per cell, ends included


@dataclass(frozen=True)
class Timed:
    """A near time-optimal timing and what no other can beat, s."""

    timing: StretchTiming
    bound: float


def time_batch(motions: Sequence[Motion]) -> list[Timed]:
    """Near time-optimal timings and lower bounds, one for each motion, in order, solved together.

    Raises PathplanError when a problem does not converge.
    """
    found = _solved([replace(motion, torque=None) for motion in motions])
    heavy = [k for k, motion in enumerate(motions) if overloaded(motion, found[k].timing)]
    if heavy:
        for k, timed in zip(heavy, _solved([motions[k] for k in heavy]), strict=True):
            found[k] = timed
    return [
        Timed(replace(timed.timing, motion=motion), timed.bound) for motion, timed in zip(motions, found, strict=True)
    ]


def changed_durations(changes: Sequence[tuple[Motion, StretchTiming | None]]) -> list[float]:
    """Durations, s, of motions in order, solved together; no bounds.

    A motion comes with a timing where it is one that has been timed, under limits that are none of them lower now: it
    starts from there, on the same cells, so what it saves is told apart from what the choice of cells does.
    """
    found = np.zeros(len(changes))
    again = [k for k, (_, timing) in enumerate(changes) if timing is not None]
    fresh = [k for k, (_, timing) in enumerate(changes) if timing is None]
    for rows, solve in ((again, _timed_again), (fresh, _timed_anew)):
        for first in range(0, len(rows), BATCH):
            part = rows[first : first + BATCH]
            found[part] = solve([changes[k] for k in part])
    return found.tolist()


def _timed_again(changes: Sequence[tuple[Motion, StretchTiming | None]]) -> list[float]:
    pairs = [(motion, timing) for motion, timing in changes if timing is not None]
    found = time_again([(replace(motion, torque=None), timing) for motion, timing in pairs])
    heavy = [k for k, (motion, _) in enumerate(pairs) if overloaded(motion, found[k])]
    for k, timing in zip(heavy, time_again([pairs[k] for k in heavy]), strict=True):
        found[k] = timing
    return [timing.duration for timing in found]


def _timed_anew(changes: Sequence[tuple[Motion, StretchTiming | None]]) -> list[float]:
    motions = [motion for motion, _ in changes]
    found = time_motions([replace(motion, torque=None) for motion in motions])
    heavy = [k for k, motion in enumerate(motions) if overloaded(motion, found[k])]
    for k, timing in zip(heavy, time_motions([motions[k] for k in heavy]), strict=True):
        found[k] = timing
    return [timing.duration for timing in found]


def _solved(motions: Sequence[Motion]) -> list[Timed]:
    if not motions:
        return []
    coarse = coarse_timing(motions)
    timings = time_motions(motions, coarse)
    bounds = bound_durations(motions, coarse)
    return [Timed(timing, float(bound)) for timing, bound in zip(timings, bounds, strict=True)]


def overloaded(motion: Motion, timing: StretchTiming) -> bool:
    """Whether a timing of a motion exceeds one of its torque limits."""
    if motion.torque is None:
        return False
    u = np.linspace(0.0, 1.0, _CHECK_POINTS)
    mesh = Mesh(motion, timing.clock, timing.tau, 1.0)
    rows = torque_rows_at(mesh, u)
    if rows is None:
        return False
    b = (hermite(u).reshape(-1, 4) @ timing.corners).reshape(3, len(u), -1)
    return bool(apply_torque(rows, b).max() > 1.0 - TORQUE_MARGIN)
