"""What a drive sees: finite differences of the written positions.

The rule. A drive gets positions and nothing else, one a cycle. So the first, second and third
differences of each position column as written (mm or deg, after the one rounding that writing costs),
over the cycle to the power n, must stay within the limits of velocity, acceleration and jerk. The table
is padded with its first row before the start and with its last row after the end, since the arm rests
there: a jump at either end shows. By the mean value theorem a trajectory that keeps its limits has
differences that keep them too, up to rounding, so what is allowed is limit x (1 + 1e-6) + 8 eps /
cycle^n, with eps the last place of the largest written position of the column (of the rows so far,
where a table comes in chunks). A table from elsewhere whose positions were rounded to a step of their own
(`pathplan.auditing.rounding`) is allowed 2^(n-1) steps / cycle^n more, which is what rounding can make of
a motion that keeps its limits.

Where the times are irregular the n-th difference is n! times the divided difference over the n + 1
rows, which is the same thing on a regular grid and for which the same theorem holds; the cycle in the
rounding term is then the shortest interval among them. A difference is placed at the middle row of
those it is made of.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.exceedances import Exceedance, Key, exceedances, gather
from pathplan.auditing.model import TOLERANCE, Peak
from pathplan.auditing.shares import Array, Rows, larger, peaks_of, rows_of

__all__ = ["ORDERS", "Differences", "divided_differences"]

ORDERS = (("velocity", 1), ("acceleration", 2), ("jerk", 3))
PAD = 3  # rows of rest on either side, enough for the third difference


def divided_differences(times: Array, values: Array) -> list[Array]:
    """n! times the divided differences of values (N, n) at times (N,) for n = 1, 2, 3: shapes (N - n, n).

    Intervals that are not positive give nan.
    """
    found = []
    for order in (1, 2, 3):
        spans = times[order:] - times[:-order]
        intervals = np.diff(times)
        good = np.ones(len(spans), dtype=bool)
        for k in range(order):
            good &= intervals[k : len(spans) + k] > 0
        values = np.diff(values, axis=0) * order / np.where(good, spans, np.nan)[:, None]
        found.append(values)
    return found


@dataclass
class Differences:
    """Goes over a table in pieces, carrying the last rows from one piece to the next."""

    matrix: Array  # (R, n) of the limit rows
    limits: dict[str, Array]  # quantity -> (R, 2)
    factors: Array  # (n,) from SI to what is written
    cycle: float | None
    rounding: Array  # (n,) steps to which positions were rounded, SI

    def __post_init__(self) -> None:
        self.peaks: dict[str, list[Peak | None]] = {}
        self.found: dict[Key, Exceedance] = {}
        self.largest = np.zeros(len(self.factors))
        self.coarse = np.abs(self.matrix) @ self.rounding
        self.allowances: dict[str, Array] = {name: np.zeros(len(self.matrix)) for name, _ in ORDERS}
        self._times = np.empty(0)
        self._written = np.empty((0, len(self.factors)))
        self._steps: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self._next = 0  # row of the whole table that follows those carried
        self._start: tuple[Array, Array] = self._times, self._written  # of the first two rows
        self._end = self._start  # of the last two

    def expect(self, position: Array) -> None:
        """All positions (N, n) that will come, so that eps is the same from the first row on."""
        written = np.abs(position * self.factors)
        self.largest = np.where(np.isfinite(written), written, 0.0).max(axis=0)

    def add(self, time: Array, position: Array, step: NDArray[np.int64]) -> None:
        """The next rows."""
        written = position * self.factors
        if not len(self._times):
            interval = self.cycle or _interval(time[:2])
            before = np.arange(-PAD, 0) * interval
            self._carry(time[0] + before, np.repeat(written[:1], PAD, axis=0), np.repeat(step[:1], PAD))
            self._next = 0
        if len(self._start[0]) < 2:
            lacking = 2 - len(self._start[0])
            times, rows = self._start
            self._start = np.concatenate([times, time[:lacking]]), np.vstack([rows, written[:lacking]])
        self._judge(time, written, step, len(time))

    def finish(self) -> None:
        """The rest after the last row."""
        if len(self._times):
            self._end = self._times[-2:], self._written[-2:]
            interval = self.cycle or _interval(self._times[-2:])
            after = self._times[-1] + np.arange(1, PAD + 1) * interval
            written = np.repeat(self._written[-1:], PAD, axis=0)
            self._judge(after, written, np.repeat(self._steps[-1:], PAD), 0)

    def velocity_at(self, end: str) -> Array:
        """Velocity (n,), SI, from the "first" row to the second or into the "last": 0 where a rest there can be so.

        From rest the third difference of the first two rows is their distance over cycle^3, so that is what the
        limit of jerk allows, up to rounding.
        """
        times, rows = self._start if end == "first" else self._end
        if len(times) < 2:
            return np.zeros(len(self.factors))
        interval = np.float64(self.cycle or _interval(times))
        way = (rows[1] - rows[0]) / self.factors
        n = len(self.factors)
        jerk = np.abs(self.limits["jerk"][:n]).max(axis=1) * (1 + TOLERANCE)
        allowed = jerk * interval**3 + 8 * np.spacing(self.largest) / self.factors + 4 * self.rounding
        return np.where(np.abs(way) > allowed, way / interval, 0.0)

    def _carry(self, times: Array, written: Array, steps: NDArray[np.int64]) -> None:
        self._times, self._written, self._steps = times[-PAD:], written[-PAD:], steps[-PAD:]

    def _judge(self, time: Array, written: Array, step: NDArray[np.int64], rows: int) -> None:
        """Differences that end in these rows; `rows` of them count as rows of the table."""
        times = np.concatenate([self._times, time])
        values = np.vstack([self._written, written])
        steps = np.concatenate([self._steps, step])
        first = self._next - PAD  # row of the table at values[0]
        finite = np.where(np.isfinite(values), np.abs(values), 0.0)
        self.largest = np.maximum(self.largest, finite.max(axis=0))
        eps = np.spacing(self.largest) / self.factors
        with np.errstate(invalid="ignore", over="ignore"):
            by_order = self._all_orders(times, values)
        for (quantity, order), differences in zip(ORDERS, by_order, strict=True):
            start = PAD - order  # the first difference that ends in a new row
            middle = np.arange(start, start + len(time)) + order // 2
            last = self._next + rows - 1 - first
            at = np.clip(middle, -first, last)  # padding is told as the row it repeats
            place = Rows(times[at], steps[at], 0)
            self._one_order(quantity, order, differences[start:], place, at + first, eps, self._noise(times, order))
        self._carry(times, values, steps)
        self._next += rows

    def _all_orders(self, times: Array, values: Array) -> list[Array]:
        """Differences in SI of orders 1 to 3."""
        if self.cycle is None:
            return [d / self.factors for d in divided_differences(times, values)]
        return [np.diff(values, order, axis=0) / self.cycle**order / self.factors for _, order in ORDERS]

    def _noise(self, times: Array, order: int) -> Array:
        """8 / cycle^order for each difference that ends in a new row."""
        if self.cycle is not None:
            return np.full(len(times) - PAD, 8 / self.cycle**order)
        intervals = np.diff(times)[PAD - order :]
        shortest = np.lib.stride_tricks.sliding_window_view(intervals, order).min(axis=1)
        return 8 / np.where(shortest > 0, shortest, np.nan) ** order

    def _one_order(
        self,
        quantity: str,
        order: int,
        joints: Array,
        place: Rows,
        numbers: NDArray[np.int64],
        eps: Array,
        noise: Array,
    ) -> None:
        limits = self.limits[quantity]
        with np.errstate(invalid="ignore"):
            values = rows_of(joints, self.matrix)
        rounded = noise[:, None] / 8 * 2 ** (order - 1) * self.coarse
        known = np.nan_to_num(rounded, nan=0.0, posinf=0.0)
        self.allowances[quantity] = np.maximum(self.allowances[quantity], known.max(axis=0, initial=0.0))
        allowed = noise[:, None] * (np.abs(self.matrix) @ eps) + rounded
        over = (values > limits[:, 1] * (1 + TOLERANCE) + allowed) | (values < limits[:, 0] * (1 + TOLERANCE) - allowed)
        peaks, shares = peaks_of(values, limits, place)
        peaks = [p and Peak(p.peak, p.limit, p.share, p.time, p.step, int(numbers[p.row])) for p in peaks]
        self.peaks[quantity] = larger(self.peaks.get(quantity, [None] * len(limits)), peaks)
        if over.any():
            shares = np.where(over, shares, -np.inf)
            gather(self.found, exceedances(quantity, values, limits, shares, place, over=over, numbers=numbers))


def _interval(times: Array) -> float:
    """Time between the first two of these rows, or 1 s where there is no such thing."""
    interval = float(times[1] - times[0]) if len(times) > 1 else 1.0
    return interval if interval > 0 else 1.0
