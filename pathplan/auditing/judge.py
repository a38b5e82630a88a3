"""The audit itself: goes over a table once, piece by piece, and puts together what the other files find."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.auditing.agreement import disagreements
from pathplan.auditing.differences import ORDERS, Differences
from pathplan.auditing.drives import Drives, DriveUse, jump_notes, overloads, torque_limits
from pathplan.auditing.exceedances import Exceedance, Key, clock, exceedances, finding_of, gather
from pathplan.auditing.held import held_findings
from pathplan.auditing.jumps import Jumps
from pathplan.auditing.model import QUANTITIES, TOLERANCE, TOOL, Audit, Finding, JointAudit, Singularity
from pathplan.auditing.pacing import StepClock
from pathplan.auditing.passes import NEAR, pass_findings
from pathplan.auditing.planned import (
    Evidence,
    Planned,
    corners_of,
    joint_peaks,
    step_speeds,
    worse_peaks,
)
from pathplan.auditing.rounding import NONE, Rounding
from pathplan.auditing.shares import (
    Array,
    Rows,
    limit_rows,
    position_shares,
    row_kinds,
    rows_of,
    shares_of,
)
from pathplan.auditing.stamps import Stamps, finite_rows, found_cycle
from pathplan.auditing.tolerances import turn_findings
from pathplan.auditing.tool import (
    by_tool,
    nearest_singularity,
)
from pathplan.auditing.tool_judge import ToolJudge
from pathplan.auditing.words import dimension_of, shown
from pathplan.errors import InputError
from pathplan.export.columns import DEGREES, MILLIMETRES
from pathplan.table import JointTable
from pathplan.task.model import Task

__all__ = ["audit"]

PIECE = 16384  # rows judged at once: bounds memory on long tables
DERIVED = ("velocity", "acceleration", "jerk")


def audit(
    table: JointTable | Iterable[JointTable], arm: Arm, *, plan: Planned | None = None, task: Task | None = None
) -> Audit:
    """Judge a joint table, whole or in chunks, against the limits of an arm.

    Judged are: position, velocity, acceleration, jerk and torque of every joint and of every row that
    limits a sum of joints; tool speed, turning speed and acceleration against their caps; the finite differences of
    the written positions, which are what the drive sees (rule: `pathplan.auditing.differences`); rest in
    the first and last row; times that repeat, go back or leave the grid of the cycle; values that are
    not finite. A value may pass its limit by 1e-6 of it, a position by 1e-9 rad or m. Without columns
    of velocity, acceleration and jerk the differences stand for them, and `measured` says so. A table whose
    numbers were rounded (a whole one, without a plan) is allowed what rounding makes, and what can't be judged
    for it is told: see `pathplan.auditing.rounding`. Reported besides: distance to singularity and what paces
    each step; and with the plan, speeds asked and reached, times, corners, path deviation and the peaks of the
    trajectory between the rows.

    `arm` carries the tool meant; with a plan, or the `task` whose steps the table counts, each step's own tool and caps
    hold, and what became of the tool speeds that steps are to hold is told. Raises InputError if the table has another
    number or other kinds of joints than the arm.
    """
    chunks = iter([table] if isinstance(table, JointTable) else table)
    first = next(chunks, None)
    if first is None:
        raise InputError("table: there are no rows to judge")
    kinds = [joint.kind for joint in arm.joints]
    whole = isinstance(table, JointTable) and plan is None and table.n == arm.n
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):  # absurd numbers become infinite: beyond limits
        judge = _Judge(first, arm, plan, task, Rounding.of(first, kinds) if whole else NONE)
        if isinstance(table, JointTable):
            judge.differences.expect(table.position)
            judge.notes += disagreements(table, arm) if whole else ()
        for piece in _pieces(first, chunks):
            judge.add(piece)
        return judge.verdict()


def _pieces(first: JointTable, rest: Iterator[JointTable]) -> Iterator[JointTable]:
    yield from first.chunks(PIECE)
    for chunk in rest:
        yield from chunk.chunks(PIECE)


class _Judge:
    """What is known after the rows so far."""

    def __init__(
        self, first: JointTable, arm: Arm, plan: Planned | None, task: Task | None, rounding: Rounding
    ) -> None:
        self.arm, self.plan, self.rounding = arm, plan, rounding
        self.task = plan.task if plan else task
        self.names, self.matrix = limit_rows(arm)
        self.kinds = row_kinds(arm)
        self.notes = _same_joints(first, arm)
        self.meta = first.meta
        self.cycle = first.cycle if first.cycle is not None else found_cycle(first.time, rounding.time)
        self.derived = [name for name in DERIVED if getattr(first, name) is not None]
        self.measured: Literal["columns", "differences"] = "columns" if self._all_derived() else "differences"
        if first.torque is None and np.isfinite(arm.limits.torque).any():
            self.notes.append(Finding("note", "torque is not judged: the table has no torque columns"))
        limits = {name: getattr(arm.limits, name) for name, _ in ORDERS}
        factors = [DEGREES if joint.kind == "revolute" else MILLIMETRES for joint in arm.joints]
        self.drives = Drives(arm) if first.torque is not None else None
        steps = rounding.step("position", arm.n)
        self.differences = Differences(self.matrix, limits, np.array(factors), self.cycle, steps)
        self.jumps = Jumps(self.names, self.kinds, arm.limits.acceleration[: arm.n], steps)
        self.stamps = Stamps(self.cycle, stated=first.cycle is not None, rounding=rounding.time)
        joints = [(name, q) for q in (*DERIVED, "torque") for name in self.names]
        labels = [*joints, *((None, quantity) for quantity in TOOL)]
        self.clock = StepClock(labels, self.cycle)
        self.tool = ToolJudge(arm, self.task, labels, self.cycle, rounding)
        self.rows, self.last_time = 0, 0.0
        self.joints: tuple[JointAudit, ...] = ()
        self.found: dict[Key, Exceedance] = {}
        self.not_finite: dict[tuple[str, str], tuple[int, int]] = {}
        self.singularity: Singularity | None = None
        self.ends: list[JointTable] = []
        self.before: JointTable | None = None  # the last row so far

    def _all_derived(self) -> bool:
        return len(self.derived) == len(DERIVED)

    def add(self, table: JointTable) -> None:
        """The next rows."""
        if not self.ends:
            self.ends = [table.part(0, 1)]
        self.ends[1:] = [table.part(len(table) - 1, len(table))]
        self.stamps.add(table.time)
        self.differences.add(table.time, table.position, table.step)
        self.jumps.add(table.time, table.position, table.step, self.cycle)
        good, bad = finite_rows(table)
        for name, row, joint, count in bad:
            before = self.not_finite.get((name, joint), (self.rows + row, 0))
            self.not_finite[name, joint] = before[0], before[1] + count
        with np.errstate(invalid="ignore", over="ignore"):
            self._judge_rows(table, good)
        self.rows += len(table)
        self.last_time = float(table.time[-1])
        self.before = self.ends[1]

    def _judge_rows(self, table: JointTable, good: NDArray[np.bool_]) -> None:
        rows = Rows(table.time, table.step, self.rows)
        columns = {q: getattr(table, q) for q in QUANTITIES if getattr(table, q) is not None}
        velocity = self._velocity(table)
        if self.drives is not None and table.torque is not None:
            self.drives.add(rows, velocity, table.torque, jumps_of_load=self.plan is None)
        peaks = joint_peaks(self.arm, table.time, table.step, self.rows, **columns)
        self.joints = worse_peaks(self.joints, peaks)
        shares = []
        for quantity in (*DERIVED, "torque"):
            shares.append(self._share(quantity, columns.get(quantity), rows, velocity))
        self._share("position", columns["position"], rows, velocity)
        times = self._times(table.time)
        every = self.tool.add(table, good, velocity, times, self.rows, np.hstack(shares))
        self.clock.add(every, table.step, times)
        if good.any():
            at = Rows(table.time[good], table.step[good], 0)
            numbers = self.rows + np.flatnonzero(good)
            for arm, mine in by_tool(self.tool.arms, at.step):
                place = Rows(at.time[mine], at.step[mine], 0)
                position = table.position[good][mine]
                self.singularity = nearest_singularity(arm, position, place, numbers[mine], self.singularity)

    def _velocity(self, table: JointTable) -> Array:
        """Joint velocities (N, n): the column, or else the differences from row to row."""
        if table.velocity is not None:
            return table.velocity
        before = self.before or table
        time = np.concatenate([before.time[-1:], table.time])
        position = np.vstack([before.position[-1:], table.position])
        interval = np.diff(time)[:, None]
        return np.where(interval > 0, np.diff(position, axis=0) / np.where(interval > 0, interval, 1.0), 0.0)

    def _share(self, quantity: str, values: Array | None, rows: Rows, velocity: Array) -> Array:
        """Shares (N, R) of one quantity, zero without data; what exceeds is kept."""
        if values is None:
            return np.zeros((len(rows.time), len(self.names)))
        limits = getattr(self.arm.limits, quantity)
        if quantity == "torque":  # of the joints alone: a torque is not summed as positions are
            limits = torque_limits(self.arm, velocity)
            shares = shares_of(values, limits)
            rounded = self.rounding.step(quantity, self.arm.n) / 2
            gather(self.found, exceedances(quantity, values, limits, shares, rows, rounded=rounded))
            return np.hstack([shares, np.zeros((len(shares), len(self.names) - self.arm.n))])
        values = rows_of(values, self.matrix)
        shares = position_shares(values, limits)[0] if quantity == "position" else shares_of(values, limits)
        rounded = np.abs(self.matrix) @ self.rounding.step(quantity, self.arm.n) / 2
        gather(self.found, exceedances(quantity, values, limits, shares, rows, rounded=rounded))
        return shares

    def _times(self, time: Array) -> Array:
        """Time (N,) that each row stands for, that since the row before; the first row is an instant.

        In cycles, or in s where there is no cycle.
        """
        if self.cycle is None:
            before = self.last_time if self.rows else time[0]
            return np.maximum(np.nan_to_num(np.diff(time, prepend=before)), 0.0)
        cycles = np.ones(len(time))
        if not self.rows:
            cycles[0] = 0.0
        return cycles

    def verdict(self) -> Audit:
        """All of it together."""
        self.differences.finish()
        self.jumps.finish(self.cycle)
        plan = self.plan
        names = {step.index: step.name for step in plan.task.steps} if plan else {}
        evidence = plan.evidence if plan else Evidence()
        near = self.singularity is not None and self.singularity.value < 2 * NEAR
        passes = plan.passes if plan and near else ()
        moving, waiting = self._motion_and_waiting()
        joints = self._with_differences()
        start, end = self.ends
        if self.drives is not None:
            self.drives.finish(evidence.loads)
            drives = self.drives.uses()
        else:
            drives = ()
        return Audit(
            arm=self.arm.name,
            task=str(self.meta.get("task", "")),
            count=self.rows,
            cycle=self.cycle,
            duration=float(end.time[0] - start.time[0]),
            measured=self.measured,
            joints=joints[: self.arm.n],
            rows=joints[self.arm.n :],
            findings=(*self._findings(evidence, drives), *turn_findings(evidence.turns), *pass_findings(passes)),
            tool_speed=self.tool.peaks[TOOL[0]],
            tool_acceleration=self.tool.peaks[TOOL[1]],
            tool_turning_speed=self.tool.peaks[TOOL[2]],
            singularity=self.singularity,
            turns=evidence.turns,
            passes=passes,
            pacing=self.clock.pacing(names) if self.measured == "columns" else (),
            speeds=step_speeds(self.tool.speeds, self.tool.caps.speed, names) if plan else (),
            held=self.tool.holding.found(),
            motion_time=moving,
            waiting_time=waiting,
            deviation_rows=evidence.deviation_rows,
            deviation_midway=evidence.deviation_midway,
            corners=corners_of(plan.path) if plan else (),
            continuous=evidence.continuous,
            drives=drives,
            bound=plan.bound if plan else None,
        )

    def _motion_and_waiting(self) -> tuple[float | None, float | None]:
        """Motion and waiting time."""
        if self.plan is None:
            return None, None
        waits = {step.index for step in self.plan.task.steps if step.motion == "wait"}
        waiting = sum(seconds for step, seconds in self.clock.seconds().items() if step in waits)
        total = float(self.ends[1].time[0] - self.ends[0].time[0])
        return max(total - waiting, 0.0), waiting

    def _with_differences(self) -> tuple[JointAudit, ...]:
        """The peaks with those of the differences, which stand in for columns that are missing."""
        joined = []
        for r, joint in enumerate(self.joints):
            seen = {name: peaks[r] for name, peaks in self.differences.peaks.items()}
            known = {name: peak for name, peak in seen.items() if peak is not None}
            blind = {q for q in DERIVED if self._blind(q)[r] > 1.0}  # noise and no motion
            missing: dict[str, Any] = {q: known.get(q) for q in DERIVED if q not in self.derived and q not in blind}
            joined.append(replace(joint, differences=known, **missing))
        return tuple(joined)

    def _findings(self, evidence: Evidence, drives: tuple[DriveUse, ...]) -> Iterator[Finding]:
        """Exceedances first, then warnings and notes."""
        for (name, joint), (row, count) in self.not_finite.items():
            more = f"; {count - 1} more row{'s' * (count > 2)} like it" if count > 1 else ""
            whose = f" of {joint}" if joint else ""
            text = f"row {row + 1}: {name}{whose} is not a finite number{more}"
            yield Finding("exceedance", text, joint=joint or None, quantity=name, row=row)
        yield from self.stamps.findings()
        yield from self.jumps.findings()
        for key, found in sorted({**self.found, **self.tool.found}.items(), key=lambda item: item[1].first):
            yield finding_of(key, found, self.names, self.kinds, how=self._at_speed(key, found))
        yield from overloads(drives)
        yield from self._seen_by_the_drive()
        yield from self._rest(*self.ends)
        yield from self._too_coarse()
        yield from self._between_rows(evidence)
        if self.measured == "differences":
            missing = [name for name in DERIVED if name not in self.derived]
            named = " and ".join([*([", ".join(missing[:-1])] if missing[1:] else []), missing[-1]])
            text = f"the table has no columns of {named}: judged by finite differences of the positions"
            yield Finding("note", text)
        if self.cycle is None:
            text = "the times lie on no regular grid: differences use the times of the rows"
            yield Finding("warning", text)
        elif self.stamps.stated is False:
            text = f"the table states no cycle: {self.cycle * 1e3:.6g} ms found from its times"
            yield Finding("note", text)
        yield from held_findings(self.tool.holding.found(), self.task, self.tool.pace)
        yield from self.notes
        for text in self.arm.warnings:
            yield Finding("warning", f"arm {self.arm.name}: {text}")
        yield from jump_notes(drives)
        if self.plan is not None:
            for note in self.plan.path.findings:
                yield Finding("note", str(note), step=note.step)

    def _at_speed(self, key: Key, found: Exceedance) -> str:
        """Says so where the limit is what the drive has left at the speed."""
        full = np.abs(self.arm.limits.torque[: self.arm.n]).max(axis=1)
        fallen = key[0] == "torque" and abs(found.worst.limit) < full[key[1]]
        return " (what the drive gives at that speed)" if fallen else ""

    def _seen_by_the_drive(self) -> Iterator[Finding]:
        """What only the differences show: the columns of that step keep the limit, or are not there."""
        how = "" if self.measured == "differences" else " (difference of the written positions)"
        for key, found in sorted(self.differences.found.items(), key=lambda item: item[1].first):
            if key not in self.found:
                yield finding_of(key, found, self.names, self.kinds, how=how)

    def _blind(self, quantity: str) -> Array:
        """Parts (R,) of the limits that the rounding of the positions alone may use in a difference."""
        limits = np.abs(getattr(self.arm.limits, quantity)).min(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(np.nan_to_num(self.differences.allowances[quantity] / limits))

    def _too_coarse(self) -> Iterator[Finding]:
        """What differences of rounded positions can't tell; without columns of velocity that is no small thing."""
        steps = self.rounding.step("position", self.arm.n)
        for quantity in DERIVED:
            part = self._blind(quantity)
            blind = np.flatnonzero(part > 1.0)
            worst = int(np.argmax(part))
            if quantity in self.derived or part[worst] < TOLERANCE:
                continue
            joint = int(np.argmax(np.abs(self.matrix[worst]) * steps))
            coarse = shown(float(steps[joint]), dimension_of(self.arm.joints[joint].kind, "position"))
            noise = float(self.differences.allowances[quantity][worst])
            made = shown(noise, dimension_of(self.kinds[worst], quantity))
            rounded = f"positions rounded to {coarse} alone make up to {made} of {self.names[worst]}"
            if not len(blind):
                text = f"{quantity} is judged to within {100 * part[worst]:.2g} % of its limits: {rounded}"
                yield Finding("note", text, joint=self.names[worst], quantity=quantity)
                continue
            named = ", ".join(self.names[r] for r in blind)
            level: Literal["exceedance", "warning"] = "exceedance" if quantity == "velocity" else "warning"
            yield Finding(level, f"{quantity} of {named} can't be judged: {rounded}", quantity=quantity)

    def _rest(self, start: JointTable, end: JointTable) -> Iterator[Finding]:
        """The first and last row must be at rest: velocity and acceleration zero to 1e-6 of their limits.

        Without a column of velocity, the way to the row beside it must be one that a start from rest can make.
        """
        for place, table, number in (("first", start, 0), ("last", end, self.rows - 1)):
            time, step = float(table.time[0]), int(table.step[0])
            for quantity in ("velocity", "acceleration"):
                values = getattr(table, quantity)
                rounded = self.rounding.step(quantity, self.arm.n) / 2
                if values is None:
                    if quantity == "acceleration":
                        continue
                    values = self.differences.velocity_at(place)[None]
                    rounded = np.zeros(self.arm.n)
                for joint, value, more in zip(self.arm.joints, values[0].tolist(), rounded, strict=True):
                    if not abs(value) > TOLERANCE * min(getattr(joint, quantity), 1e6) + more:
                        continue
                    got = shown(value, dimension_of(joint.kind, quantity))
                    text = f"{joint.name}: the {place} row is not at rest, {quantity} {got} at {clock(time)}"
                    where = (time, step, joint.name, quantity)
                    yield Finding("exceedance", text, *where, value=value, limit=0.0, row=number)

    def _between_rows(self, evidence: Evidence) -> Iterator[Finding]:
        """Limits that the trajectory passes between rows and not in them."""
        for r, joint in enumerate(evidence.continuous):
            for quantity, peak in joint.peaks().items():
                over = peak.share > 1 + TOLERANCE and quantity != "position"
                beyond = quantity == "position" and (peak.margin or 0.0) < -1e-9
                if (over or beyond) and (quantity, r, peak.step) not in self.found:
                    key = (quantity, r, peak.step)
                    found = Exceedance(peak, 1, peak.time, peak.time)
                    yield finding_of(key, found, self.names, self.kinds, how=" (between rows)")


def _same_joints(table: JointTable, arm: Arm) -> list[Finding]:
    """Raises InputError for a table that can't be of this arm; notes names that differ."""
    if table.n != arm.n:
        raise InputError(f"table: has {table.n} joints, {arm.name} has {arm.n}")
    for name, kind, joint in zip(table.joint_names, table.joint_kinds, arm.joints, strict=False):
        if kind != joint.kind:
            raise InputError(f"table: joint {name} is {kind}, {joint.name} of {arm.name} is {joint.kind}")
    plain = tuple(f"joint{i + 1}" for i in range(arm.n))
    if table.joint_names in (tuple(joint.name for joint in arm.joints), plain):
        return []
    names = ", ".join(table.joint_names)
    return [Finding("warning", f"the table's joints have other names, taken in their order: {names}")]
