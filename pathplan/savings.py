"""What would buy time: which limit, cap or blend to enlarge, and what that saves once planned again."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import PathplanError
from pathplan.path.caps import caps_of
from pathplan.task.model import Step, Task

if TYPE_CHECKING:
    from pathplan.path.taskpath import Stretch
    from pathplan.planning import Plan
    from pathplan.timing.sensitivity import Sensitivity

Array = NDArray[np.float64]

_CHANGE = 0.1
_LEAST = 1e-4  # s: less is no saving
_CAPS = {"tool speed": "speed", "tool acceleration": "acceleration", "tool turning speed": "turning_speed"}
_MOST_BLENDS = 12  # blends are tried one by one, so no more than this many


@dataclass(frozen=True)
class Saving:
    """One change and the motion time that it saves, s.

    `what` is "limit", "cap" or "blend". A limit has `joint` and `quantity`, a cap `quantity` and `step` (None: the cap
    of the whole task), a blend the `step` that it comes after. `estimate` is what the multipliers promise (None for a
    blend), `saved` what planning again with the change really saves.
    """

    what: str
    quantity: str
    joint: str | None
    step: int | None
    change: float  # relative: 0.1 is 10 % more
    estimate: float | None
    saved: float


def find_savings(plan: Plan, *, top: int = 5, change: float = _CHANGE) -> tuple[Saving, ...]:
    """The changes that save most, largest first: limits and caps ranked by multipliers, blends by trial.

    The best `top` limits and caps and up to 12 blends are each enlarged by `change` and planned again at the plan's
    pace, which takes about as long as planning the task so many times. Changes that save nothing are left out, and so
    are speeds that a step is to hold: they are what is wanted, not what is in the way.
    """
    found: list[Saving] = []
    ranked = sorted(_estimates(plan), key=lambda candidate: -candidate.estimate)
    for candidate in ranked[:top]:
        if candidate.estimate * change >= _LEAST:
            found.extend(_tried(plan, candidate, change))
    for step in _blended(plan)[:_MOST_BLENDS]:
        found.extend(_tried(plan, _Candidate("blend", "blend", None, step, 0.0), change))
    return tuple(sorted(found, key=lambda saving: -saving.saved)[: max(top, 1)])


@dataclass(frozen=True)
class _Candidate:
    what: str
    quantity: str
    row: int | None  # of the arm's limits
    step: int | None
    estimate: float  # s per relative change


def _estimates(plan: Plan) -> Iterator[_Candidate]:
    from pathplan.timing.sensitivity import sensitivity

    rows: dict[tuple[str, int], float] = {}
    caps: dict[tuple[str, int | None], float] = {}
    for part in plan.parts:
        if part.timing is None or part.stretch is None:
            continue
        timing = part.timing.slowed(1.0 / plan.task.pace)
        worth = sensitivity(timing.motion, timing)
        kept = _kept_rows(part.stretch.arm.limits.matrix, timing.motion.matrix)
        for quantity in ("velocity", "acceleration", "jerk", "torque"):
            for k, seconds in enumerate(getattr(worth, quantity).sum(axis=1)):
                row = k if quantity == "torque" else kept[k]
                rows[quantity, row] = rows.get((quantity, row), 0.0) + float(seconds)
        for quantity, number, seconds in _by_step(part.stretch, worth):
            if quantity == "tool speed" and _holds(plan.task, number):
                continue
            step = _cap_owner(plan.task, number, quantity)
            caps[quantity, step] = caps.get((quantity, step), 0.0) + seconds
    for (quantity, row), seconds in rows.items():
        yield _Candidate("limit", quantity, row, None, seconds)
    for (quantity, step), seconds in caps.items():
        yield _Candidate("cap", quantity, None, step, seconds)


def _kept_rows(every: Array, kept: Array) -> list[int]:
    """Index in the arm's limit rows of each row that the timing kept."""
    return [int(np.flatnonzero((every == row).all(axis=1))[0]) for row in kept]


def _by_step(stretch: Stretch, worth: Sensitivity) -> Iterator[tuple[str, int, float]]:
    from pathplan.timeline import step_at

    step = step_at(stretch, worth.s)
    for quantity in _CAPS:
        seconds = getattr(worth, quantity.replace(" ", "_"))
        for number in np.unique(step[seconds > 0]):
            yield quantity, int(number), float(seconds[step == number].sum())


def _holds(task: Task, step: int) -> bool:
    """Whether the speed that the step is to hold is the lowest of its caps on the tool speed."""
    held = task.steps[step].held_speed
    return held is not None and held == caps_of(task.steps[step], task, task.arm).speed


def _cap_owner(task: Task, step: int, quantity: str) -> int | None:
    """The step whose cap holds there, or None where it is the task's."""
    own, common = getattr(task.steps[step], _CAPS[quantity]), getattr(task, _CAPS[quantity], None)
    return None if common is not None and (own is None or own >= common) else step


def _blended(plan: Plan) -> list[int]:
    """Steps after which the path flies by, the slowest corners first."""
    table = plan.table
    corners = [corner for corner in plan.path.corners if corner.kind == "fly-by"]
    slowest = []
    for corner in corners:
        near = (table.step == corner.after_step) | (table.step == corner.after_step + 1)
        speed = table.tool_speed
        slowest.append(float(speed[near].min()) if speed is not None and near.any() else np.inf)
    return [corners[k].after_step for k in np.argsort(slowest, kind="stable")]


def _tried(plan: Plan, candidate: _Candidate, change: float) -> Iterator[Saving]:
    """The candidate planned again; nothing where that can't be planned or saves nothing."""
    from pathplan.planning import plan as plan_task

    task, factor = plan.task, 1.0 + change
    joint = None
    if candidate.row is not None:
        limits = task.arm.limits
        values = getattr(limits, candidate.quantity).copy()
        values[candidate.row] *= factor
        joint = limits.names[candidate.row]
        task = replace(task, arm=replace(task.arm, limits=replace(limits, **{candidate.quantity: values})))
    elif candidate.what == "cap" and candidate.step is None:
        key = _CAPS[candidate.quantity]
        common = getattr(task, key)
        wider = tuple(_with(step, key, _raised(getattr(step, key), common, factor)) for step in task.steps)
        task = _with(replace(task, steps=wider), key, common * factor)
    else:
        task = replace(task, steps=_changed(task.steps, candidate, factor))
    try:
        saved = plan.motion_time - plan_task(task).motion_time
    except PathplanError:
        return
    if saved >= _LEAST:
        estimate = None if candidate.what == "blend" else candidate.estimate * change / task.pace
        yield Saving(candidate.what, candidate.quantity, joint, candidate.step, change, estimate, saved)


def _with(what: Any, key: str, value: float | None) -> Any:
    """A step or task with one of its caps changed."""
    return replace(what, **{key: value})


def _raised(own: float | None, common: float, factor: float) -> float | None:
    """A step's own cap when the common one, which may have been folded into it, is raised."""
    return own * factor if own is not None and own <= common else own


def _changed(steps: Sequence[Step], candidate: _Candidate, factor: float) -> tuple[Step, ...]:
    out = list(steps)
    assert candidate.step is not None
    step = out[candidate.step]
    if candidate.what == "blend" and step.blend is not None:
        step = replace(step, blend=replace(step.blend, value=step.blend.value * factor))
    elif candidate.what == "cap":
        key = _CAPS[candidate.quantity]
        own = getattr(step, key)
        step = step if own is None else _with(step, key, own * factor)
    out[candidate.step] = step
    return tuple(out)
