"""Times and numbers as such: steady, on the grid of the cycle, finite."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.exceedances import clock
from pathplan.auditing.model import Finding
from pathplan.auditing.shares import Array
from pathplan.table import JointTable

__all__ = ["FINITE_COLUMNS", "Stamps", "finite_rows", "found_cycle"]

FINITE_COLUMNS = ("time", "position", "velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")
STATED = 1e-6  # of the cycle: how far a time may lie off the grid of a stated cycle
FOUND = 1e-2  # the same where the cycle was found from times that were rounded when they were written
USUAL = 0.9  # of the intervals that must be alike for a cycle to be found where some are not
SHORTEST, LONGEST = 1e-9, 1e9  # s: what lies outside is no controller's cycle
FEWEST = 10  # rows from which on such a cycle is found


def found_cycle(time: Array, rounding: float = 0.0) -> float | None:
    """The cycle (s) of times (N,) of which nine in ten follow one another alike, within 1 % or their rounding (s).

    None where there is no such cycle.
    """
    if len(time) < 3 or not np.isfinite(time).all():
        return None
    intervals = np.diff(time)
    rows = np.arange(len(time))

    def on_grid(cycle: float, within: float) -> bool:
        return bool(intervals.min() > 0 and np.abs(time - time[0] - rows * cycle).max() <= within)

    mean = float(time[-1] - time[0]) / len(intervals)
    if not SHORTEST <= mean <= LONGEST:
        return None
    if on_grid(mean, FOUND * mean):
        return _rounded(mean, len(time), 1e-9 * mean)
    usual = float(np.median(intervals))
    alike = np.abs(intervals - usual) <= FOUND * usual
    if usual > 0 and len(time) >= FEWEST and alike.mean() >= USUAL:
        cycle = float(intervals[alike].mean())
        return _rounded(cycle, len(time), 1e-9 * cycle)
    if rounding > 0:  # the ends alone would carry their rounding to every row between
        slope = float(np.polynomial.Polynomial.fit(rows, time, 1).convert().coef[-1])
        if on_grid(slope, 1.01 * rounding):
            return _rounded(slope, len(time), 0.01 * rounding)
    return None


def _rounded(cycle: float, rows: int, close: float) -> float:
    """A cycle without the last digits, which are noise: 0.004 and not 0.0040000000000001; `close` over all rows."""
    digits = next(d for d in range(1, 18) if abs(float(f"{cycle:.{d}g}") - cycle) * rows <= close or d == 17)
    return float(f"{cycle:.{digits}g}")


def finite_rows(table: JointTable) -> tuple[NDArray[np.bool_], list[tuple[str, int, str, int]]]:
    """Which rows (N,) bool hold finite times and positions, and what is not finite.

    That is for each column and joint ("" where none): the first row, and how many rows.
    """
    good = np.isfinite(table.time) & np.isfinite(table.position).all(axis=1)
    bad = []
    for name in FINITE_COLUMNS:
        values = getattr(table, name)
        if values is None or np.isfinite(values).all():
            continue
        by_joint = values.ndim == 2
        wrong = ~np.isfinite(values).reshape(len(table), -1)
        wrong = wrong if by_joint else wrong.any(axis=1)[:, None]
        for k in np.flatnonzero(wrong.any(axis=0)).tolist():
            rows = np.flatnonzero(wrong[:, k])
            bad.append((name, int(rows[0]), table.joint_names[k] if by_joint else "", len(rows)))
    return good, bad


class Stamps:
    """Goes over the times of a table in pieces; `findings()` at the end."""

    def __init__(self, cycle: float | None, *, stated: bool, rounding: float = 0.0) -> None:
        self.cycle = cycle
        self.stated = stated
        self.within = 0.0 if cycle is None else (STATED if stated else FOUND) * cycle
        cycles = 0.0 if cycle is None or not rounding else cycle / rounding
        if abs(cycles - round(cycles)) > 1e-6:  # no whole number of steps: the first time and each later one are off
            self.within = max(self.within, 1.01 * rounding)
        self.rows = 0
        self._first = self._last = 0.0
        # kind of trouble -> (row, what is told of the first one, its time, how many), in the order of the rows
        self._found: dict[str, tuple[int, str, float, int]] = {}

    def add(self, time: Array) -> None:
        if not self.rows:
            self._first = float(time[0])
        with np.errstate(invalid="ignore"):
            self._steadily(np.concatenate([[self._last], time]) if self.rows else time)
            if self.cycle is not None:
                self._on_grid(time, self.cycle)
        self.rows += len(time)
        self._last = float(time[-1])

    def _steadily(self, time: Array) -> None:
        first = self.rows - 1 if self.rows else 0
        intervals = np.diff(time)
        troubles = {"repeated": intervals == 0, "backward": intervals < 0}
        if self.cycle is not None:
            troubles["gap"] = intervals > 1.5 * self.cycle
        for kind, wrong in troubles.items():
            at = np.flatnonzero(wrong)
            if len(at):
                i = at[0]
                was, now = clock(time[i]), clock(time[i + 1])
                if kind == "gap":
                    assert self.cycle is not None
                    lost = max(1, round(float(intervals[i]) / self.cycle - 1e-6) - 1)
                    rows = f"{lost} row{'s' * (lost > 1)} missing" if lost < 1e6 else "rows missing"
                    text = f"goes from {was} to {now}: {rows} at {self.cycle * 1e3:.6g} ms"
                else:
                    text = f"repeats {now}" if kind == "repeated" else f"goes back from {was} to {now}"
                self._note(kind, first + int(i) + 1, text, float(time[i + 1]), len(at))

    def _on_grid(self, time: Array, cycle: float) -> None:
        """Whether each time is a whole number of cycles after the first; that none is missing is told elsewhere."""
        number = np.rint((time - self._first) / cycle)
        grid = self._first + number * cycle
        off = np.abs(time - grid) > self.within + 4 * np.spacing(np.abs(grid))
        at = np.flatnonzero(off)
        if len(at):
            i = at[0]
            text = f"is {clock(time[i])}, where the cycle of {cycle * 1e3:.6g} ms puts {clock(grid[i])}"
            self._note("grid", self.rows + int(i), text, float(time[i]), len(at))

    def _note(self, kind: str, row: int, text: str, time: float, count: int) -> None:
        if kind in self._found:
            first = self._found[kind]
            self._found[kind] = (*first[:3], first[3] + count)
        else:
            self._found[kind] = (row, text, time, count)

    def findings(self) -> list[Finding]:
        """Repeated, backward, missing and off-grid times, each with its first row; none where all is well."""
        found = []
        for row, text, time, count in sorted(self._found.values()):
            more = f"; {count - 1} more row{'s' * (count > 2)} like it" if count > 1 else ""
            text = f"row {row + 1}: time {text}{more}"
            found.append(Finding("exceedance", text, time=time, quantity="time", value=time, row=row))
        return found
