"""The tool's part of an audit: its speeds and acceleration against their caps, piece by piece of a table."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.auditing.exceedances import Exceedance, Key, exceedances, gather
from pathplan.auditing.held import Holding
from pathplan.auditing.model import TOOL, Peak
from pathplan.auditing.planned import tool_speed_by_step
from pathplan.auditing.rounding import Rounding
from pathplan.auditing.shares import Array, Rows, larger, peaks_of
from pathplan.auditing.tool import (
    arms_by_step,
    by_tool,
    step_caps,
    tool_acceleration,
    tool_speed,
    tool_turning_speed,
)
from pathplan.table import JointTable
from pathplan.task.model import Task

__all__ = ["ToolJudge"]

Mask = NDArray[np.bool_]


class ToolJudge:
    """What is known of the tool after the rows so far.

    `peaks` by the quantities of `TOOL`; `speeds` of every step as `tool_speed_by_step` gives them; `holding` keeps what
    became of speeds that are to be held.
    """

    def __init__(
        self,
        arm: Arm,
        task: Task | None,
        labels: Sequence[tuple[str | None, str]],
        cycle: float | None,
        rounding: Rounding,
    ) -> None:
        """`labels` of the limits whose shares are added, those of `TOOL` last."""
        self.arm, self.cycle, self.rounding = arm, cycle, rounding
        self.caps = step_caps(arm, task)
        self.arms = arms_by_step(arm, task)
        self.pace = task.pace if task else 1.0
        self.holding = Holding(task, self.caps.speed, labels, self.pace)
        self.peaks: dict[str, Peak | None] = dict.fromkeys(TOOL)
        self.speeds: dict[int, tuple[float, float, float]] = {}
        self.found: dict[Key, Exceedance] = {}

    def add(self, table: JointTable, good: Mask, velocity: Array, times: Array, first: int, shares: Array) -> Array:
        """Shares (N, L) of all limits, those (N, 3) of the caps on the tool appended to the given ones of the joints.

        Of the next rows, the first of which has the number `first`: which are finite (N,), joint velocities (N, n),
        the time each stands for (N,) in cycles or s.
        """
        rows, known = Rows(table.time, table.step, first), good & np.isfinite(velocity).all(axis=1)
        speed, rounded = self._speed(table, known, velocity), np.zeros(1)
        if speed is not None:
            for step, mine in tool_speed_by_step(speed, self.caps.speed, table.step, times).items():
                was = self.speeds.get(step, (0.0, 0.0, 0.0))
                self.speeds[step] = (max(was[0], mine[0]), was[1] + mine[1], was[2] + mine[2])
            if table.tool_speed is None:
                rounded = self._rounding(table, good, slice(3))
        own = [self._share(TOOL[0], speed, self.caps.speed, rows, rounded)]
        own.append(self._share(TOOL[1], self._acceleration(table, good), self.caps.acceleration, rows, np.zeros(1)))
        capped, turning = known & np.isfinite(_of_rows(self.caps.turning_speed, table.step)), None
        if capped.any():
            turning = self._rate(table, capped, velocity, tool_turning_speed)
            rounded = self._rounding(table, good, slice(3, 6))
        own.append(self._share(TOOL[2], turning, self.caps.turning_speed, rows, rounded))
        every = np.hstack([shares, *own])
        if speed is not None:
            self.holding.add(speed, table.step, times * (self.cycle or 1.0), every)
        return every

    def _speed(self, table: JointTable, known: Mask, velocity: Array) -> Array | None:
        """Tool speed (N,): the column, or of the joint velocities; by differences only if something caps it."""
        if table.tool_speed is not None:
            return table.tool_speed
        if table.velocity is None and not np.isfinite(self.caps.speed).any():
            return None
        return self._rate(table, known, velocity, tool_speed)

    def _rate(self, table: JointTable, at: Mask, velocity: Array, of: Callable[[Arm, Array, Array], Array]) -> Array:
        """A speed (N,) of the tool, `of` arm, positions and velocities, in the rows `at` (N,); zero elsewhere."""
        found, known = np.zeros(len(table)), np.flatnonzero(at)
        for arm, mine in by_tool(self.arms, table.step[known]):
            k = known[mine]
            found[k] = of(arm, table.position[k], velocity[k])
        return found

    def _rounding(self, table: JointTable, good: Mask, rows: slice) -> Array:
        """What rounding of the positions makes of a speed of the tool by differences; `rows` of the Jacobian."""
        steps = self.rounding.step("position", self.arm.n)
        if table.velocity is not None or not steps.any() or not good.any():
            return np.zeros(1)
        reach = np.linalg.norm(self.arm.jacobian(table.position[good])[:, rows], axis=1).max(axis=0)
        intervals = np.diff(table.time)
        interval = self.cycle or float(intervals[intervals > 0].min(initial=1.0))
        return np.array([reach @ steps / interval])  # both rows of a difference are rounded

    def _acceleration(self, table: JointTable, good: Mask) -> Array | None:
        """Tool acceleration (N,), only where something caps it."""
        if table.velocity is None or table.acceleration is None:
            return None
        at = np.flatnonzero(good & np.isfinite(_of_rows(self.caps.acceleration, table.step)))
        if not len(at):
            return None
        found = np.zeros(len(table))
        for arm, mine in by_tool(self.arms, table.step[at]):
            k = at[mine]
            found[k] = tool_acceleration(arm, table.position[k], table.velocity[k], table.acceleration[k])
        return found

    def _share(self, quantity: str, values: Array | None, caps: Array, rows: Rows, rounded: Array) -> Array:
        """Shares (N, 1) of one cap, zero without values; peaks and what exceeds are kept."""
        if values is None:
            return np.zeros((len(rows.time), 1))
        cap = _of_rows(caps, rows.step)
        shares = (values / cap)[:, None]
        for limit in np.unique(cap[np.isfinite(cap)]):  # one pass for each cap, since a peak has one limit
            mine = np.flatnonzero(cap == limit)
            at = Rows(rows.time[mine], rows.step[mine], 0)
            limits = np.array([[-np.inf, limit]])
            (peak,), own = peaks_of(values[mine, None], limits, at)
            numbered = peak and replace(peak, row=rows.first + int(mine[peak.row]))
            self.peaks[quantity] = larger([self.peaks[quantity]], [numbered])[0]
            numbers = rows.first + mine
            over = exceedances(quantity, values[mine, None], limits, own, at, numbers=numbers, rounded=rounded)
            gather(self.found, over)
        return shares


def _of_rows(by_step: Array, step: NDArray[np.int64]) -> Array:
    return by_step[np.minimum(step, len(by_step) - 1)]
