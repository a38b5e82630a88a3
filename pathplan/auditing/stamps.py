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


def found_cycle(time: Array) -> float | None:
    """The cycle (s) of times (N,) that lie on a regular grid within 1 % of it, or None."""
    if len(time) < 3 or not np.isfinite(time).all() or np.any(np.diff(time) <= 0):
        return None
    cycle = float(time[-1] - time[0]) / (len(time) - 1)
    off = np.abs(time - time[0] - np.arange(len(time)) * cycle)
    if off.max() > FOUND * cycle:
        return None
    # the last digits of a mean are noise: 0.004 and not 0.0040000000000001
    digits = next(d for d in range(1, 18) if abs(float(f"{cycle:.{d}g}") - cycle) * len(time) <= 1e-9 * cycle)
    return float(f"{cycle:.{digits}g}")


def finite_rows(table: JointTable) -> tuple[NDArray[np.bool_], list[tuple[str, int, str]]]:
    """Which rows (N,) bool hold finite times and positions, and what is not finite: column, row, joint."""
    good = np.isfinite(table.time) & np.isfinite(table.position).all(axis=1)
    bad = []
    for name in FINITE_COLUMNS:
        values = getattr(table, name)
        if values is None or np.isfinite(values).all():
            continue
        at = np.argwhere(~np.isfinite(values))
        joint = table.joint_names[at[0][1]] if name not in ("time", "pose", "tool_speed") else ""
        bad.append((name, int(at[0][0]), joint))
    return good, bad


class Stamps:
    """Goes over the times of a table in pieces; `findings()` at the end."""

    def __init__(self, cycle: float | None, *, stated: bool) -> None:
        self.cycle = cycle
        self.stated = stated
        self.rows = 0
        self._first = self._last = 0.0
        # kind of trouble -> (row, what is told of the first one, how many), in the order of the rows
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
        for kind, wrong in (("repeated", intervals == 0), ("backward", intervals < 0)):
            at = np.flatnonzero(wrong)
            if len(at):
                i = at[0]
                was, now = clock(time[i]), clock(time[i + 1])
                text = f"repeats {now}" if kind == "repeated" else f"goes back from {was} to {now}"
                self._note(kind, first + int(i) + 1, text, float(time[i + 1]), len(at))

    def _on_grid(self, time: Array, cycle: float) -> None:
        grid = self._first + np.arange(self.rows, self.rows + len(time)) * cycle
        share = STATED if self.stated else FOUND
        off = np.abs(time - grid) > share * cycle + 4 * np.spacing(np.abs(grid))
        at = np.flatnonzero(off)
        if len(at):
            i = at[0]
            text = f"is {clock(time[i])} where the cycle of {cycle * 1e3:.6g} ms puts {clock(grid[i])}"
            self._note("grid", self.rows + int(i), text, float(time[i]), len(at))

    def _note(self, kind: str, row: int, text: str, time: float, count: int) -> None:
        if kind in self._found:
            first = self._found[kind]
            self._found[kind] = (*first[:3], first[3] + count)
        else:
            self._found[kind] = (row, text, time, count)

    def findings(self) -> list[Finding]:
        """Repeated, backward and off-grid times, each with its first row; none where all is well."""
        found = []
        for row, text, time, count in self._found.values():
            more = f", and {count - 1} more rows like it" if count > 1 else ""
            text = f"row {row + 1}: time {text}{more}"
            found.append(Finding("exceedance", text, time=time, quantity="time", value=time))
        return found
