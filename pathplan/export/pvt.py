"""Position-velocity-time rows at a coarser period, and what a controller's interpolation between them costs.

A controller that takes such rows joins them by cubic Hermite polynomials: position and velocity of both rows, nothing
else. How far that lies from the exact trajectory is measured at `DENSE` instants of every period, and no fewer than
`A_CYCLE` of every cycle, or, where only a table is known, at the rows left out. The largest distance of each joint goes
into the header of the file.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.errors import InputError
from pathplan.export.columns import AS_ON_SCREENS, Array
from pathplan.table import JointTable, Mark, tick_times
from pathplan.units import format_quantity

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["Pvt", "pvt_of_plan", "pvt_of_table", "rounded_up"]

DENSE = 32
A_CYCLE = 8
PIECE = 65_536  # instants evaluated at once: bounds memory
MOST_CYCLES = 100_000  # of a period
MOST_ROWS_PIECE = 16_384
KEPT = ("velocity",)  # beside time, position and step


@dataclass(frozen=True, eq=False)
class Pvt:
    """Rows of position and velocity every `period` s, `rows()` in pieces; `error` (n,) rad or m of each joint.

    The motion is followed by rest up to the next row, where the last row repeats the goal.
    """

    period: float
    count: int
    joint_names: tuple[str, ...]
    joint_kinds: tuple[str, ...]
    error: Array
    measured: str  # where: "16 instants a period", "the rows left out"
    rows: Callable[[], Iterator[JointTable]]


def pvt_of_plan(plan: Plan, period: float) -> Pvt:
    """Rows of a plan, evaluated from its timing. Raises InputError for a period that is no multiple of the cycle."""
    cycle = plan.task.cycle
    step = _cycles(period, cycle)
    count = -(-plan.ticks // step) + 1
    dense = max(DENSE, A_CYCLE * step)
    n, names = plan.arm.n, tuple(joint.name for joint in plan.arm.joints)
    kinds = tuple(joint.kind for joint in plan.arm.joints)
    error = np.zeros(n)
    intervals = max(1, PIECE // dense)
    for first in range(0, count - 1, intervals):
        last = min(first + intervals, count - 1)
        instants = np.arange(first * dense, last * dense + 1, dtype=np.float64) * (step / dense)
        q, v, _ = _motion(plan, instants)
        error = np.maximum(error, _error(q, v, dense, step * cycle))
    measured = f"{dense} instants a period"
    meta = {**plan.meta, "pvt": _said(error, names, kinds, measured)}
    marks = tuple(_moved(mark, step, period) for mark in plan.marks)

    def rows() -> Iterator[JointTable]:
        for first in range(0, count, MOST_ROWS_PIECE):
            number = np.arange(first, min(first + MOST_ROWS_PIECE, count))
            q, v, steps = _motion(plan, number.astype(float) * step)
            time = tick_times(number, period)
            yield JointTable(
                *(time, q, v), step=steps, joint_names=names, joint_kinds=kinds, cycle=period, marks=marks, meta=meta
            )

    return Pvt(period, count, names, kinds, error, measured, rows)


def pvt_of_table(table: JointTable, period: float) -> Pvt:
    """Every so many rows of a table; none is interpolated.

    Raises InputError for a table without a cycle or velocity, one that does not end at rest where its last row falls
    between two of the period, and for a period that is no multiple of the cycle.
    """
    if table.cycle is None:
        raise InputError("pvt: the times of the table lie on no regular grid, so that there is no coarser one")
    if table.velocity is None:
        raise InputError("pvt: the table has no velocity")
    step = _cycles(period, table.cycle)
    count = -(-(len(table) - 1) // step) + 1
    beyond = (count - 1) * step - (len(table) - 1)
    if beyond and np.any(table.velocity[-1] != 0):
        raise InputError("pvt: the table does not end at rest, and its last row falls between two of the period")
    padded = np.minimum(np.arange((count - 1) * step + 1), len(table) - 1)
    error = np.zeros(table.n)
    intervals = max(1, PIECE // step)
    for first in range(0, count - 1, intervals):
        at = padded[first * step : min(first + intervals, count - 1) * step + 1]
        error = np.maximum(error, _error(table.position[at], table.velocity[at], step, period))
    measured = "the rows left out"
    meta = {**table.meta, "pvt": _said(error, table.joint_names, table.joint_kinds, measured)}
    marks = tuple(_moved(mark, step, period) for mark in table.marks)
    at = padded[::step]

    def rows() -> Iterator[JointTable]:
        assert table.velocity is not None
        left_out: dict[str, Any] = dict.fromkeys(("acceleration", "jerk", "torque", "pose", "tool_speed"))
        yield dataclasses.replace(
            table,
            **left_out,
            time=table.time[0] + tick_times(np.arange(count), period),
            position=table.position[at],
            velocity=table.velocity[at],
            step=table.step[at],
            cycle=period,
            marks=marks,
            meta=meta,
        )

    return Pvt(period, count, table.joint_names, table.joint_kinds, error, measured, rows)


def _cycles(period: float, cycle: float) -> int:
    """How many cycles a period is."""
    step = round(period / cycle)
    if step < 1 or abs(step * cycle - period) > 1e-9 * period or step > MOST_CYCLES:
        expected = f"expected a multiple of the cycle {format_quantity(cycle * 1e3, 'number', 6)} ms"
        raise InputError(f"pvt: {expected}, got {format_quantity(period * 1e3, 'number', 6)} ms")
    return step


def _motion(plan: Plan, instants: Array) -> tuple[Array, Array, Any]:
    """Position, velocity (N, n) and step (N,) at instants (N,) in cycles; after the end the arm rests."""
    from pathplan.timeline import evaluate

    n, lasts = plan.arm.n, np.array([part.last for part in plan.parts], dtype=float)
    inside = np.clip(instants, 0.0, lasts[-1])
    owner = np.searchsorted(lasts, np.maximum(inside, np.nextafter(0.0, 1.0)), side="left")
    q, v, step = np.empty((len(instants), n)), np.empty((len(instants), n)), np.empty(len(instants), dtype=np.int64)
    for k in np.unique(owner):
        at, part = np.flatnonzero(owner == k), plan.parts[k]
        local, cycle = inside[at] - part.first, plan.task.cycle
        ticks = np.rint(local)  # on ticks the very times of the plan's own rows
        times = np.where(local == ticks, tick_times(ticks.astype(np.int64), cycle), local * cycle)
        values = evaluate(part, times, n)
        q[at], v[at], step[at] = values.position, values.velocity, values.step
    return q, v, step


def _error(q: Array, v: Array, dense: int, period: float) -> Array:
    """Largest distance (n,) of the interpolation of every `dense`-th of instants (K * dense + 1, n) from them all."""
    u = (np.arange(1, dense) / dense)[:, None, None]
    q0, q1, v0, v1 = q[:-1:dense], q[dense::dense], v[:-1:dense] * period, v[dense::dense] * period
    # the cubic of Hermite: both ends' positions and velocities
    between = q0 + u * (v0 + u * (3 * (q1 - q0) - 2 * v0 - v1 + u * (2 * (q0 - q1) + v0 + v1)))
    exact = np.stack([q[k:-1:dense] for k in range(1, dense)]) if dense > 1 else between
    return np.abs(between - exact).max(axis=(0, 1), initial=0.0)


def _said(error: Array, names: tuple[str, ...], kinds: tuple[str, ...], measured: str) -> dict[str, Any]:
    """What the header says of the interpolation: mm and deg, rounded up to three digits."""
    largest = {}
    for name, kind, value in zip(names, kinds, error.tolist(), strict=True):
        unit, factor = AS_ON_SCREENS.of(kind)
        largest[f"{name}_{unit}"] = rounded_up(value * factor)
    return {"interpolation": "cubic Hermite", "largest_error": largest, "measured_at": measured}


def rounded_up(value: float) -> float:
    """To three digits, never below the value."""
    if value <= 0.0:
        return 0.0
    place = 2 - int(np.floor(np.log10(value)))
    rounded = float(np.ceil(round(value * 10.0**place, 9)) / 10.0**place)
    return float(f"{rounded:.3g}")


def _moved(mark: Mark, step: int, period: float) -> Mark:
    """A mark on the first coarser row that is not before it."""
    row = -(-mark.row // step)
    return Mark(mark.name, float(tick_times(row, period)), row, mark.step)
