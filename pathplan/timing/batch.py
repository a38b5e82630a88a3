"""Timings and their bounds for many motions: torque is brought in only where it would be exceeded without.

A timing that is optimal without torque limits and keeps them is optimal with them, and its bound holds as it stands;
most motions of a well-sized arm are of that kind, and dynamics cost more than all the rest.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
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
    bounds = np.zeros(len(motions))

    def solve(rows: Sequence[int], limited: Sequence[Motion]) -> list[StretchTiming]:
        coarse = coarse_timing(limited)
        timings = time_motions(limited, coarse)
        bounds[rows] = bound_durations(limited, coarse)
        return timings

    found = _torque_where_needed(motions, solve) if motions else []
    return [
        Timed(replace(timing, motion=motion), float(bound))
        for timing, motion, bound in zip(found, motions, bounds, strict=True)
    ]


def changed_durations(changes: Sequence[tuple[Motion, StretchTiming | None]]) -> list[float]:
    """Durations, s, of motions in order, solved together; no bounds.

    A motion comes with a timing where it is one that has been timed, under limits that are none of them lower now: it
    starts from there, on the same cells, so what it saves is told apart from what the choice of cells does.
    """
    found = np.zeros(len(changes))
    again = [k for k, (_, timing) in enumerate(changes) if timing is not None]
    fresh = [k for k, (_, timing) in enumerate(changes) if timing is None]
    for numbers in (again, fresh):
        for first in range(0, len(numbers), BATCH):
            part = numbers[first : first + BATCH]
            before = [timing for timing in (changes[k][1] for k in part) if timing is not None]

            def solve(
                rows: Sequence[int], limited: Sequence[Motion], before: list[StretchTiming] = before
            ) -> list[StretchTiming]:
                if not before:
                    return time_motions(limited)
                return time_again(list(zip(limited, (before[k] for k in rows), strict=True)))

            found[part] = [timing.duration for timing in _torque_where_needed([changes[k][0] for k in part], solve)]
    return found.tolist()


def _torque_where_needed(
    motions: Sequence[Motion], solve: Callable[[Sequence[int], Sequence[Motion]], list[StretchTiming]]
) -> list[StretchTiming]:
    """Timings by `solve`, which is given numbers and motions: without torque limits, then with where it takes them."""
    every = range(len(motions))
    found = solve(every, [replace(motion, torque=None) for motion in motions])
    heavy = [k for k in every if overloaded(motions[k], found[k])]
    if heavy:
        for k, timing in zip(heavy, solve(heavy, [motions[k] for k in heavy]), strict=True):
            found[k] = timing
    return found


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
