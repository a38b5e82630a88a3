"""When what happens, in whole cycle ticks: stretches, waits and marks of a plan, and its rows.

Every stretch starts on a tick and runs in its own local time; when it ends between two ticks the arm rests until the
later one. Waits and marks round up to ticks. Rows are evaluated from the path itself in local time, never
interpolated, so nothing depends on how long the table is.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.path.taskpath import Stretch, Wait
from pathplan.table import Mark, tick_times
from pathplan.timing.stretch import StretchTiming

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

_SAME = 1e-9  # of a cycle: an end this little after a tick is on it


@dataclass(frozen=True, eq=False)
class Part:
    """A stretch with its timing, or a wait, from tick `first` to `last`; the row on `first` is of the part before."""

    first: int
    last: int
    stretch: Stretch | None
    timing: StretchTiming | None
    wait: Wait | None
    rest: Array  # (n,) where the arm stands at the end


@dataclass(frozen=True, eq=False)
class Rows:
    """Evaluated instants: local values of the joints and where on the path they are. N instants, n joints."""

    position: Array  # (N, n)
    velocity: Array
    acceleration: Array
    jerk: Array
    s: Array  # (N,) path parameter of the stretch, NaN in waits
    step: Integers  # (N,)


def ticks_of(seconds: float, cycle: float) -> int:
    """The fewest whole cycles that last at least `seconds`."""
    return max(0, int(np.ceil(seconds / cycle - _SAME)))


def lay_on_ticks(
    sequence: Sequence[Stretch | Wait], timings: Sequence[StretchTiming], start: Array, cycle: float
) -> tuple[Part, ...]:
    """Parts in order, each starting on the tick on which the one before it ends."""
    parts: list[Part] = []
    tick, rest, done = 0, start, 0
    for item in sequence:
        if isinstance(item, Wait):
            end = tick + ticks_of(item.seconds, cycle)
            parts.append(Part(tick, end, None, None, item, rest))
        else:
            timing = timings[done]
            done += 1
            end = tick + max(1, ticks_of(timing.duration, cycle))
            rest = item.path(np.array([item.path.length]), side="left")[0]
            parts.append(Part(tick, end, item, timing, None, rest))
        tick = end
    return tuple(parts)


def marks_of(parts: Sequence[Part], names: Sequence[str | None], cycle: float) -> tuple[Mark, ...]:
    """Marks of the steps (`names` by step, None for no mark), at the tick on which the step has ended."""
    found = []
    for part in parts:
        if part.wait is not None:
            ends = [(part.wait.step, part.last)]
        else:
            assert part.stretch is not None and part.timing is not None
            steps = part.stretch.steps
            marked = [(p.step, p.s_to) for p in steps if names[p.step] is not None]
            if not marked:
                continue
            at = passing_times(part.timing, np.array([s for _, s in marked]))
            ends = [
                (step, min(part.last, part.first + ticks_of(float(t), cycle)))
                if s < part.stretch.path.length
                else (step, part.last)
                for (step, s), t in zip(marked, at, strict=True)
            ]
        for step, tick in ends:
            name = names[step]
            if name is not None:
                found.append(Mark(name, float(tick_times(tick, cycle)), tick, step))
    return tuple(found)


def passing_times(timing: StretchTiming, s: Array) -> Array:
    """Local times (N,) at which a stretch passes the path parameters s (N,)."""
    inside = np.clip(s, 0.0, timing.motion.path.length)
    times = np.zeros(len(s))
    times[inside >= timing.motion.path.length] = timing.duration
    between = (inside > 0) & (inside < timing.motion.path.length)
    if between.any():
        times[between] = timing.times(timing.clock.inverse(inside[between]))
    return times


def evaluate(part: Part, local: Array, joints: int) -> Rows:
    """A part at local times (N,) in s; before its start and after its end it rests."""
    if part.stretch is None or part.timing is None:
        assert part.wait is not None
        still = np.zeros((len(local), joints))
        step = np.full(len(local), part.wait.step, dtype=np.int64)
        return Rows(still + part.rest, still, still, still, np.full(len(local), np.nan), step)
    cell, u = part.timing.locate(local)
    values = part.timing.at(cell, u)
    over = local >= part.timing.duration
    values[0][over] = part.rest
    for derivative in values[1:]:
        derivative[over | (local < 0)] = 0.0
    s = part.timing.place(cell, u)
    s[over] = part.stretch.path.length
    return Rows(values[0], values[1], values[2], values[3], s, step_at(part.stretch, s))


def step_at(stretch: Stretch, s: Array) -> Integers:
    """Step (N,) that each path parameter belongs to; in a corner the border is its middle."""
    moving = [p for p in stretch.steps if p.s_to > p.s_from]
    borders = np.array([p.s_to for p in moving[:-1]])
    return np.array([p.step for p in moving], dtype=np.int64)[np.searchsorted(borders, s, side="right")]


def in_parts(parts: Sequence[Part], ticks: Integers, visit: Callable[[Part, NDArray[np.intp], Integers], None]) -> None:
    """Call `visit(part, rows, local ticks)` for each part with the rows (indices into `ticks`) that fall into it.

    The row on the tick where two parts meet belongs to the earlier; tick 0 belongs to the first with any rows.
    """
    lasts = np.array([part.last for part in parts])
    owner = np.searchsorted(lasts, np.maximum(ticks, 1), side="left")
    for k in np.unique(owner):
        rows = np.flatnonzero(owner == k)
        visit(parts[k], rows, ticks[rows] - parts[k].first)


def arm_of(part: Part, default: Arm) -> Arm:
    """The arm as it is equipped in a part."""
    return default if part.stretch is None else part.stretch.arm
