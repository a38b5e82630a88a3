"""Jumps of position from one row to the next, told apart from motion that is merely too fast.

A row jumps where the way to it differs from the ways before and after it by more than ten times what the joint's
acceleration limit changes it in one cycle: a motion that keeps anywhere near its limits does not do that, a row that
is lost, doubled or damaged does.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.exceedances import clock
from pathplan.auditing.model import Finding
from pathplan.auditing.shares import Array
from pathplan.auditing.words import dimension_of, shown

__all__ = ["Jumps"]

TIMES = 10.0  # the acceleration limit
CARRIED = 3  # rows: a way is judged when those before and after it are known


@dataclass(frozen=True)
class _Jump:
    """The first jump of a joint, and how many there are."""

    row: int
    time: float
    step: int
    way: float
    within: float  # s
    count: int


class Jumps:
    """Goes over a table in pieces; `findings()` at the end."""

    def __init__(self, names: Sequence[str], kinds: Sequence[str], acceleration: Array, rounding: Array) -> None:
        """Of n joints: limits of acceleration (n, 2), and the steps (n,) to which positions were rounded."""
        self.names, self.kinds = names, kinds
        self.limits = np.abs(acceleration).max(axis=1)
        self.rounding = rounding
        self._found: dict[int, _Jump] = {}
        self._time = np.empty(0)
        self._position = np.empty((0, len(names)))
        self._step: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self._first = 0  # row of the table at the first of those carried

    def add(self, time: Array, position: Array, step: NDArray[np.int64], cycle: float | None) -> None:
        """The next rows; `cycle` None: the times of the rows count."""
        if not len(self._time):  # rest before the first row
            before = time[0] - (cycle or 1.0)
            self._time, self._position = np.array([before, before]), np.repeat(position[:1], 2, axis=0)
            self._step, self._first = np.repeat(step[:1], 2), -2
        self._judge(time, position, step, cycle)

    def finish(self, cycle: float | None) -> None:
        """The rest after the last row."""
        if len(self._time):
            after = self._time[-1:] + (cycle or 1.0)
            self._judge(after, self._position[-1:], self._step[-1:], cycle)

    def _judge(self, time: Array, position: Array, step: NDArray[np.int64], cycle: float | None) -> None:
        times = np.concatenate([self._time, time])
        values = np.vstack([self._position, position])
        steps = np.concatenate([self._step, step])
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            intervals = np.diff(times) if cycle is None else np.full(len(times) - 1, cycle)
            intervals = np.where(intervals > 0, intervals, np.nan)
            ways = np.diff(values, axis=0)
            speeds = ways / intervals[:, None]
            changes = np.abs(np.diff(speeds, axis=0))
            odd = np.minimum(changes[:-1], changes[1:]) * intervals[1:-1, None]
            jumps = odd > TIMES * self.limits * intervals[1:-1, None] ** 2 + 2 * self.rounding
        for joint in np.flatnonzero(jumps.any(axis=0)).tolist():
            at = np.flatnonzero(jumps[:, joint])
            row = int(at[0]) + 2
            known = self._found.get(joint)
            place = self._first + row, float(times[row]), int(steps[row])
            fresh = _Jump(*place, float(ways[row - 1, joint]), float(intervals[row - 1]), 0)
            first = known or fresh
            count = first.count + len(at)
            self._found[joint] = _Jump(first.row, first.time, first.step, first.way, first.within, count)
        self._first += len(times) - CARRIED
        self._time, self._position, self._step = times[-CARRIED:], values[-CARRIED:], steps[-CARRIED:]

    def findings(self) -> Iterator[Finding]:
        """The jumps of each joint, told by its first."""
        for joint, jump in sorted(self._found.items(), key=lambda item: item[1].row):
            name = self.names[joint]
            way = shown(jump.way, dimension_of(self.kinds[joint], "position"))
            text = f"{name}: position jumps by {way} from row {jump.row} to row {jump.row + 1}, at {clock(jump.time)}"
            more = jump.count - 1
            text += f"; {more} more row{'s' * (more > 1)} like it" if more else ""
            where = (jump.time, jump.step, name, "position")
            yield Finding("exceedance", text, *where, value=jump.way, row=jump.row)
