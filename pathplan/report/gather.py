"""Everything that is drawn of a motion, gathered in one pass over its rows in bounded memory.

A `Picture` is what the report, the live page, the figures and the terminal all draw from. Lines are thinned to what can
be seen (`pathplan.report.thinning`); the rows that a reader steps through are kept whole, all of them up to
`MOST_ROWS`, beyond that every so many and those of every peak, border and mark.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing import Audit
from pathplan.auditing.drives import torque_limits
from pathplan.auditing.model import QUANTITIES, TOOL
from pathplan.auditing.pacing import PACING
from pathplan.auditing.shares import limit_rows, row_kinds, rows_of, shares_of
from pathplan.auditing.tool import step_caps, tool_acceleration, tool_turning_speed
from pathplan.report.thinning import Array, bucket_size, extremes, run_ends
from pathplan.table import JointTable, Mark

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.auditing.tool import ToolCaps
    from pathplan.planning import Plan

__all__ = ["BUCKETS", "MOST_ROWS", "PACED", "Line", "Picture", "Run", "picture_of", "picture_of_table"]

BUCKETS = 600  # a line is drawn with at most twice as many points
MOST_ROWS = 65_536  # rows that a reader can step through: a minute at 1 kHz
CHUNK = 16_384
PACED = ("velocity", "acceleration", "jerk", "torque", *TOOL)
TOOL_COLUMNS = ("tool x", "tool y", "tool z", "tool speed", "tool turning speed", "deviation", "turn")
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Line:
    """A curve over time, thinned: K points. SI; not a number where there is a gap."""

    time: Array  # (K,)
    value: Array  # (K,)


@dataclass(frozen=True)
class Run:
    """Rows first to last, both included, that share a step or a pacing limit, and the time they stand for."""

    first: int
    last: int
    start: float  # s, time of the row before the first
    end: float  # s, time of the last row
    value: int  # the step, or the index in `Picture.labels`


@dataclass(frozen=True, eq=False)
class Picture:
    """What is drawn of a motion. R limit rows of the arm, its joints first; everything SI.

    `lines`: (quantity, limit row) -> Line, and (one of `TOOL_COLUMNS` from "tool speed" on, -1) -> Line, of those that
    there are: the turning speed where something caps it; deviation (m) and turn (rad) off the programmed path need a
    plan; ("torque left", joint) is the part (0..1) of a torque limit that the speed leaves, where a drive has less at
    speed. `kept`: columns (M,) of the rows that can be read one by one, by the same keys, with ("tool x", -1) and so
    on; `kept_rows` (M,) are their numbers. `labels`: (limit row or -1 for the tool, quantity) of what can pace; `pace`
    the runs of rows that one of them paces, `steps` the runs of rows of one step. `step_names` by step, "" where
    unnamed.
    """

    title: str
    arm: Arm
    audit: Audit
    plan: Plan | None
    meta: Mapping[str, Any]
    rows: int
    duration: float
    cycle: float | None
    names: tuple[str, ...]  # (R,)
    kinds: tuple[str, ...]  # (R,) "revolute", "prismatic", "" for both
    lines: Mapping[tuple[str, int], Line]
    steps: tuple[Run, ...]
    pace: tuple[Run, ...]
    labels: tuple[tuple[int, str], ...]
    marks: tuple[Mark, ...]
    step_names: tuple[str, ...]
    motions: tuple[str, ...]  # by step
    caps: ToolCaps  # by step, inf where none
    kept_rows: Integers
    kept_time: Array
    kept_step: Integers
    kept_pace: Integers  # index in `labels`, -1 for none
    kept: Mapping[tuple[str, int], Array]

    @property
    def quantities(self) -> tuple[str, ...]:
        """Of position, velocity, acceleration, jerk and torque those that there are rows of."""
        return tuple(q for q in QUANTITIES if (q, 0) in self.lines)

    def limits(self, quantity: str) -> Array:
        """(R, 2) low and high limits, infinite where there is none."""
        return np.asarray(getattr(self.arm.limits, quantity), dtype=np.float64)

    def step_label(self, step: int) -> str:
        """'3 lift'; '3 wait' for a wait without a name, '3' for another step."""
        known = step < len(self.step_names)
        name = self.step_names[step] if known else ""
        waits = known and self.motions[step] == "wait"
        return f"{step + 1} {name or ('wait' if waits else '')}".rstrip()

    def pace_label(self, index: int) -> str:
        """'shoulder jerk', 'tool speed', or '' for none."""
        if index < 0:
            return ""
        row, quantity = self.labels[index]
        return quantity if row < 0 else f"{self.names[row]} {quantity}"


def picture_of(plan: Plan, *, buckets: int = BUCKETS, most: int = MOST_ROWS, tool: bool = True) -> Picture:
    """The picture of a plan.

    `buckets`: half the points of a line; `most`: rows kept to be read one by one; `tool`: whether the deviation from
    the programmed path is wanted too.
    """
    from pathplan.report.outputs import WHOLE

    whole = plan.table if plan.ticks < WHOLE else None  # evaluated once, for the audit too
    gathering = _Gathering(plan.arm, plan.audit, plan.ticks + 1, plan, buckets, most)
    chunk = gathering.chunk
    for piece in plan.rows(chunk) if whole is None else whole.chunks(chunk):
        gathering.add(piece, deviations_of(plan, gathering.seen, len(piece)) if tool else None)
    return gathering.picture(plan.meta, plan.marks)


def picture_of_table(
    table: JointTable, arm: Arm, audit: Audit | None = None, *, buckets: int = BUCKETS, most: int = MOST_ROWS
) -> Picture:
    """The picture of a table by itself, of an arm that carries the tool meant.

    `audit`: what `pathplan.audit` says of it, made where it is not given. Raises InputError as that does.
    """
    import pathplan

    found = audit if audit is not None else pathplan.audit(table, arm)
    gathering = _Gathering(arm, found, len(table), None, buckets, most)
    for piece in table.chunks(gathering.chunk):
        gathering.add(piece, None)
    return gathering.picture(table.meta, table.marks)


def deviations_of(plan: Plan, first: int, count: int) -> Array:
    """Deviation (m) and turn (rad) from the programmed path (count, 2) of rows from `first` on.

    Not a number where no tool path is programmed: in waits and where the motion is straight in joint space.
    """
    from pathplan.auditing.planned import deviations
    from pathplan.table import tick_times
    from pathplan.timeline import Part, evaluate, in_parts

    found = np.full((count, 2), np.nan)

    def visit(part: Part, rows: NDArray[np.intp], local: Integers) -> None:
        if part.stretch is None:
            return
        values = evaluate(part, np.asarray(tick_times(local, plan.task.cycle)), plan.arm.n)
        programmed, known = part.stretch.programmed(values.s)
        at = np.flatnonzero(known)
        if len(at):
            actual = part.stretch.reached(values.s[at], values.position[at])
            found[rows[at]] = np.column_stack(deviations(actual, programmed[at]))

    in_parts(plan.parts, np.arange(first, first + count), visit)
    return found


class _Gathering:
    """What is known after the rows so far."""

    def __init__(self, arm: Arm, audit: Audit, rows: int, plan: Plan | None, buckets: int, most: int) -> None:
        self.arm, self.audit, self.rows, self.plan = arm, audit, rows, plan
        self.names, self.matrix = limit_rows(arm)
        self.caps = step_caps(arm, plan.task if plan else None)
        self.size = bucket_size(rows, max(buckets, -(-rows // CHUNK)))  # a bucket never spans two chunks
        self.chunk = self.size * max(1, CHUNK // self.size)
        joints = [(r, quantity) for quantity in PACED[:4] for r in range(len(self.names))]
        self.labels = (*joints, *((-1, quantity) for quantity in PACED[4:]))
        self.wanted = self._wanted(most)
        self.seen = 0
        self.last_time = 0.0
        self.drawn: dict[tuple[str, int], list[tuple[Array, Array]]] = {}
        self.kept: dict[tuple[str, int], list[Array]] = {}
        self.columns: dict[str, list[Any]] = {"row": [], "time": [], "step": [], "pace": []}
        self.runs: dict[str, list[Run]] = {"step": [], "pace": []}
        self.paced = audit.measured == "columns"

    def _wanted(self, most: int) -> Integers:
        """Numbers of the rows to keep, the first and the last always among them."""
        if self.rows <= most:
            return np.arange(self.rows)
        rows: set[int] = set()
        for joint in (*self.audit.joints, *self.audit.rows):
            rows |= {peak.row for peak in joint.peaks().values()}
        tool = (self.audit.tool_speed, self.audit.tool_acceleration, self.audit.tool_turning_speed)
        rows |= {peak.row for peak in tool if peak is not None}
        if self.plan is not None:
            rows |= {mark.row for mark in self.plan.marks} | {part.last for part in self.plan.parts}
        few = np.array(sorted(rows)[:most], dtype=np.int64)
        stride = -(-self.rows // max(1, most - len(few)))
        return np.union1d(np.arange(0, self.rows, stride), np.append(few, self.rows - 1))

    def add(self, table: JointTable, deviations: Array | None) -> None:
        """The next rows; deviations (N, 2) where a plan tells them."""
        count = len(table)
        bounds = np.searchsorted(self.wanted, [self.seen, self.seen + count])
        mine = self.wanted[bounds[0] : bounds[1]] - self.seen
        shares: list[Array] = []
        for quantity in QUANTITIES:
            values = getattr(table, quantity)
            if values is None:
                shares += [] if quantity == "position" else [np.zeros((count, len(self.names)))]
                continue
            # a torque is not summed as positions are: coupled rows have none
            own = values if quantity == "torque" else rows_of(values, self.matrix)
            self._draw(quantity, table.time, own, mine)
            if quantity != "position":
                limits = getattr(self.arm.limits, quantity)
                if quantity == "torque":
                    limits = self._torque_limits(table, mine)
                used = np.zeros((count, len(self.names)))
                used[:, : own.shape[1]] = shares_of(own, limits)
                shares.append(used)
        shares += self._tool(table, deviations, mine)
        pace = self._pace(np.hstack(shares)) if self.paced else np.full(count, -1)
        for name, values in (("row", self.seen + mine), ("time", table.time[mine])):
            self.columns[name].append(values)
        for name, values in (("step", table.step), ("pace", pace)):
            self.columns[name].append(values[mine])
            self._extend(name, values, table.time)
        self.last_time = float(table.time[-1])
        self.seen += count

    def _torque_limits(self, table: JointTable, mine: Integers) -> Array:
        """Limits of the rows; of drives whose torque falls with speed what is left of it is drawn and kept as well."""
        limits = torque_limits(self.arm, table.velocity)
        if limits.ndim == 3:
            with np.errstate(invalid="ignore"):
                left = limits[:, :, 1] / self.arm.limits.torque[: self.arm.n, 1]
            self._draw("torque left", table.time, np.where(np.isnan(left), 1.0, left), mine)
        return limits

    def _draw(self, quantity: str, time: Array, values: Array, mine: Integers) -> None:
        """The points of these columns (N, C) that are drawn, and the values that are kept."""
        rows = extremes(values, self.size)
        ends = [0] * (self.seen == 0) + [len(time) - 1] * (self.seen + len(time) == self.rows)
        for r in range(values.shape[1]):
            at = rows[:, r] if self.size == 1 else np.unique(np.append(rows[:, r], ends).astype(np.intp))
            self.drawn.setdefault((quantity, r), []).append((time[at], values[at, r]))
            self.kept.setdefault((quantity, r), []).append(values[mine, r])

    def _tool(self, table: JointTable, deviations: Array | None, mine: Integers) -> list[Array]:
        """Keeps what the tool does; shares (N, 1) of the caps on its speed, acceleration and turning speed."""
        count = len(table)
        columns: dict[str, Array] = {}
        pose = table.pose if table.pose is not None else self.arm.forward(table.position)
        columns |= {name: pose[:, k, 3] for k, name in enumerate(TOOL_COLUMNS[:3])}
        if table.tool_speed is not None:
            columns["tool speed"] = table.tool_speed
        if table.velocity is not None and np.isfinite(self.caps.turning_speed).any():
            columns["tool turning speed"] = tool_turning_speed(self.arm, table.position, table.velocity)
        if deviations is not None:
            columns |= {"deviation": deviations[:, 0], "turn": deviations[:, 1]}
        for name, values in columns.items():
            if name in TOOL_COLUMNS[3:]:
                rows = extremes(values[:, None], self.size)[:, 0]
                self.drawn.setdefault((name, -1), []).append((table.time[rows], values[rows]))
            self.kept.setdefault((name, -1), []).append(values[mine])
        cap, speedup, turning = (caps[np.minimum(table.step, len(caps) - 1)] for caps in self.caps)
        speed = columns.get("tool speed", np.zeros(count)) / cap
        turned = columns.get("tool turning speed", np.zeros(count)) / turning
        acceleration = np.zeros(count)
        at = np.flatnonzero(np.isfinite(speedup))
        if len(at) and table.velocity is not None and table.acceleration is not None:
            found = tool_acceleration(self.arm, table.position[at], table.velocity[at], table.acceleration[at])
            acceleration[at] = found / speedup[at]
        return [speed[:, None], acceleration[:, None], turned[:, None]]

    def _pace(self, shares: Array) -> Integers:
        """Index (N,) of the label of which each row uses the largest share, -1 below what the audit calls pacing."""
        known = np.where(np.isnan(shares), 0.0, shares)
        return np.where(known.max(axis=1) >= PACING, np.argmax(known, axis=1), -1)

    def _extend(self, name: str, values: Integers, time: Array) -> None:
        """Add the runs of one column to those before."""
        runs, first = self.runs[name], 0
        for end in run_ends(values).tolist():
            value, row = int(values[first]), self.seen + first
            before = float(time[first - 1]) if first else self.last_time if self.seen else float(time[0])
            if runs and first == 0 and runs[-1].value == value:
                runs[-1] = Run(runs[-1].first, self.seen + end - 1, runs[-1].start, float(time[end - 1]), value)
            else:
                runs.append(Run(row, self.seen + end - 1, before, float(time[end - 1]), value))
            first = end

    def picture(self, meta: Mapping[str, Any], marks: tuple[Mark, ...]) -> Picture:
        """All of it together."""
        steps = self.plan.task.steps if self.plan else ()
        joined = {key: np.concatenate(parts) for key, parts in self.columns.items()}
        lines = {key: Line(*map(np.concatenate, zip(*parts, strict=True))) for key, parts in self.drawn.items()}
        return Picture(
            title=str(meta.get("task", "")),
            arm=self.arm,
            audit=self.audit,
            plan=self.plan,
            meta=meta,
            rows=self.rows,
            duration=self.audit.duration,
            cycle=self.audit.cycle,
            names=self.names,
            kinds=row_kinds(self.arm),
            lines=lines,
            steps=tuple(self.runs["step"]),
            pace=tuple(run for run in self.runs["pace"] if run.value >= 0),
            labels=self.labels,
            marks=marks,
            step_names=tuple(step.name for step in steps),
            motions=tuple(step.motion for step in steps),
            caps=self.caps,
            kept_rows=joined["row"],
            kept_time=joined["time"],
            kept_step=joined["step"],
            kept_pace=joined["pace"],
            kept={key: np.concatenate(parts) for key, parts in self.kept.items()},
        )
