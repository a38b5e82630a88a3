"""What only a plan can tell its audit: how far the tool leaves its path, peaks between the rows, loads that change."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.table import tick_times

if TYPE_CHECKING:
    from pathplan.auditing import Evidence, LoadChange
    from pathplan.auditing.tolerances import TurnedAside
    from pathplan.planning import Plan, Progress
    from pathplan.timeline import Part

__all__ = ["gather_evidence"]

_DENSER = 20  # the trajectory is audited at this many times the rows' rate
_CHUNK = 16384
_GROUP = 16  # stretches that the audit looks at in one piece of work


def gather_evidence(plan: Plan, say: Progress, jobs: int) -> Evidence:
    """All of it, in bounded memory, by up to `jobs` processes; `say` hears of the first half of the audit's work."""
    from pathplan.auditing import Evidence, worse_deviation, worse_peaks
    from pathplan.workers import work_through

    moving = [part for part in plan.parts if part.timing is not None]
    groups = [moving[k : k + _GROUP] for k in range(0, len(moving), _GROUP)]
    say("audit", 0, 1)
    at_rows = midway = None
    peaks: tuple[Any, ...] = ()
    for one, between, dense in work_through(
        partial(_evidence_of, plan), groups, jobs, lambda done: say("audit", done, 2 * len(groups))
    ):
        at_rows, midway = worse_deviation(at_rows, one), worse_deviation(midway, between)
        peaks = worse_peaks(peaks, dense)
    return Evidence(at_rows, midway, peaks, _load_changes(plan), _turned_aside(plan))


def _turned_aside(plan: Plan) -> tuple[TurnedAside, ...]:
    """How far the tool leaves its orientation in the steps that tolerate it, at the rows and midway between."""
    from pathplan.auditing.tolerances import worst_turns
    from pathplan.timeline import evaluate

    allowed = {step.index: step.orientation_tolerance or step.tilt for step in plan.task.steps}
    allowed = {index: angle for index, angle in allowed.items() if angle > 0}
    found: dict[int, TurnedAside] = {}
    for part in plan.parts:
        if part.stretch is None or not any(one.step in allowed for one in part.stretch.steps):
            continue
        for first in range(0, 2 * (part.last - part.first) + 1, _CHUNK):
            ticks = np.arange(first, min(first + _CHUNK, 2 * (part.last - part.first) + 1))
            local = np.asarray(ticks * (plan.task.cycle / 2), dtype=np.float64)
            rows = evaluate(part, local, len(plan.task.arm.joints))
            programmed, known = part.stretch.programmed(rows.s)
            actual = part.stretch.arm.forward(rows.position)
            times = part.first * plan.task.cycle + local
            worst_turns(found, allowed, actual[known], programmed[known], rows.step[known], times[known])
    return tuple(found[index] for index in sorted(found))


def _evidence_of(plan: Plan, parts: Sequence[Part]) -> tuple[Any, Any, tuple[Any, ...]]:
    from pathplan.auditing import worse_deviation, worse_peaks

    at_rows = midway = None
    peaks: tuple[Any, ...] = ()
    for part in parts:
        at_rows = worse_deviation(at_rows, _deviation(plan, part, 0.0))
        midway = worse_deviation(midway, _deviation(plan, part, 0.5))
        peaks = worse_peaks(peaks, _dense_peaks(plan, part))
    return at_rows, midway, peaks


def _load_changes(plan: Plan) -> tuple[LoadChange, ...]:
    """Where the arm takes up or leaves a load, and what that makes of the torque that holds it."""
    from pathplan.auditing import LoadChange
    from pathplan.planning import load_of

    if plan.task.arm.links is None:
        return ()
    found: list[LoadChange] = []
    carried = [plan.carrying(part) for part in plan.parts]
    places: dict[tuple[Any, Any], list[int]] = {}
    for k in range(1, len(carried)):
        if load_of(carried[k]) != load_of(carried[k - 1]):
            places.setdefault((load_of(carried[k - 1]), load_of(carried[k])), []).append(k)
    for at in places.values():
        q = np.array([plan.parts[k - 1].rest for k in at])
        still = np.zeros_like(q)
        change = carried[at[0]].torque(q, still, still) - carried[at[0] - 1].torque(q, still, still)
        for k, torque in zip(at, change, strict=True):
            time = float(tick_times(plan.parts[k].first, plan.task.cycle))
            found.append(LoadChange(time, _step_of(plan.parts[k]), torque))
    return tuple(sorted(found, key=lambda load: load.time))


def _deviation(plan: Plan, part: Part, shift: float) -> Any:
    from pathplan.auditing import path_deviation, worse_deviation
    from pathplan.timeline import evaluate

    assert part.stretch is not None and part.timing is not None
    worst = None
    cycle = plan.task.cycle
    for first in range(0, part.last - part.first + 1, _CHUNK):
        local = (np.arange(first, min(first + _CHUNK, part.last - part.first + 1)) + shift) * cycle
        local = local[local <= part.timing.duration]
        rows = evaluate(part, np.asarray(local, dtype=np.float64), len(plan.task.arm.joints))
        programmed, known = part.stretch.followed(rows.s)
        actual = part.stretch.reached(rows.s, rows.position)
        times = np.asarray(part.first * cycle + local, dtype=np.float64)
        worst = worse_deviation(worst, path_deviation(actual, programmed, known, times, rows.step))
    return worst


def _dense_peaks(plan: Plan, part: Part) -> Any:
    from pathplan.auditing import joint_peaks, worse_peaks
    from pathplan.timeline import step_at

    assert part.stretch is not None and part.timing is not None
    timing, cycle = part.timing, plan.task.cycle
    count = np.maximum(2, np.ceil(np.diff(timing.node_times) / cycle * _DENSER)).astype(int) + 1
    worst: tuple[Any, ...] = ()
    ends = np.cumsum(count)
    for first in range(0, int(ends[-1]), 8 * _CHUNK):
        point = np.arange(first, min(first + 8 * _CHUNK, int(ends[-1])))
        cell = np.searchsorted(ends, point, side="right")
        u = (point - (ends[cell] - count[cell])) / (count[cell] - 1)
        q, qd, qdd, qddd = timing.at(cell, u)
        times = part.first * cycle + timing.cell_times(cell, u)
        step = step_at(part.stretch, timing.place(cell, u))
        found = joint_peaks(part.stretch.arm, times, step, position=q, velocity=qd, acceleration=qdd, jerk=qddd)
        worst = worse_peaks(worst, found)
    return worst


def _step_of(part: Part) -> int:
    """The step that a part begins with."""
    if part.wait is not None:
        return part.wait.step
    assert part.stretch is not None
    return part.stretch.steps[0].step
