"""What would buy time: which limit, cap or blend to enlarge, and what that saves once timed again."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import islice
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import PathplanError
from pathplan.path.caps import caps_of
from pathplan.task.model import Step, Task

if TYPE_CHECKING:
    from pathplan.path.taskpath import Corner, Stretch
    from pathplan.planning import Plan
    from pathplan.timing.motion import Motion
    from pathplan.timing.sensitivity import Sensitivity
    from pathplan.timing.stretch import StretchTiming

Array = NDArray[np.float64]

_CHANGE = 0.1
_LEAST = 1e-4  # s: less is no saving
_CAPS = {"tool speed": "speed", "tool acceleration": "acceleration", "tool turning speed": "turning_speed"}
_NEGLIGIBLE = 0.01  # of what a change is worth: stretches that hold less are not timed again
_MOST_BLENDS = 12  # each is laid out anew with the whole task, so no more than this many


@dataclass(frozen=True)
class Saving:
    """One change and the motion time that it saves, s.

    `what` is "limit", "cap" or "blend". A limit has `joint` and `quantity`, a cap `quantity` and `step` (None: the cap
    of the whole task), a blend the `step` that it comes after. `estimate` is what the multipliers promise (None for a
    blend), `saved` what the stretches concerned take less when they are timed again.
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

    The best `top` limits and caps are each enlarged by `change`. So are the blends of the 12 slowest corners, half of
    `top` of which, the best by a coarse timing, are gone on with. Every stretch that a change concerns is timed again,
    on the branches of the plan, at its pace. Changes that save nothing, or that can't be followed, are left out, and so
    are speeds that a step is to hold: they are what is wanted, not what is in the way.
    """
    from pathplan.timing.batch import changed_durations

    ranked = sorted(_estimates(plan), key=lambda candidate: -candidate.estimate)[:top]
    trials = [_enlarged(plan, candidate, change) for candidate in ranked if candidate.estimate * change >= _LEAST]
    trials += _best_blends(plan, change, max(1, top // 2))
    durations = iter(changed_durations([timed for trial in trials for timed in trial.timed]))
    found = []
    for trial in trials:
        before = sum(_at_full_pace(plan, k).duration for k in trial.stretches)
        saved = (before - sum(islice(durations, len(trial.timed)))) / plan.task.pace
        if saved >= _LEAST:
            found.append(_saving(plan, trial.candidate, change, saved))
    return tuple(sorted(found, key=lambda saving: -saving.saved)[: max(top, 1)])


def _saving(plan: Plan, candidate: _Candidate, change: float, saved: float) -> Saving:
    estimate = None if candidate.what == "blend" else candidate.estimate * change / plan.task.pace
    joint = None if candidate.row is None else plan.task.arm.limits.names[candidate.row]
    return Saving(candidate.what, candidate.quantity, joint, candidate.step, change, estimate, saved)


@dataclass(frozen=True)
class _Candidate:
    what: str
    quantity: str
    row: int | None  # of the arm's limits
    step: int | None
    estimate: float = 0.0  # s per relative change
    concerned: tuple[int, ...] = ()  # stretches that are worth timing again for it


@dataclass(frozen=True)
class _Trial:
    """A candidate, the stretches it concerns, and their changed motions with what each may start from."""

    candidate: _Candidate
    stretches: tuple[int, ...]
    timed: tuple[tuple[Motion, StretchTiming | None], ...]


def _at_full_pace(plan: Plan, stretch: int) -> StretchTiming:
    return plan.timings[stretch].slowed(1.0 / plan.task.pace)


def _estimates(plan: Plan) -> Iterator[_Candidate]:
    from pathplan.timing.sensitivity import sensitivity

    worth: dict[tuple[str, str, int | None], Array] = {}  # what, quantity, row or step: s by stretch
    count = len(plan.timings)

    def add(what: str, quantity: str, number: int | None, stretch: int, seconds: float) -> None:
        worth.setdefault((what, quantity, number), np.zeros(count))[stretch] += seconds

    for k, stretch in enumerate(plan.path.stretches):
        timing = _at_full_pace(plan, k)
        found = sensitivity(timing.motion, timing)
        kept = _kept_rows(stretch.arm.limits.matrix, timing.motion.matrix)
        for quantity in ("velocity", "acceleration", "jerk", "torque"):
            for j, seconds in enumerate(getattr(found, quantity).sum(axis=1)):
                add("limit", quantity, j if quantity == "torque" else kept[j], k, float(seconds))
        for quantity, step_number, seconds in _by_step(stretch, found):
            if quantity == "tool speed" and _holds(plan.task, step_number):
                continue
            add("cap", quantity, _cap_owner(plan.task, step_number, quantity), k, seconds)
    for (what, quantity, number), by_stretch in worth.items():
        row, step = (number, None) if what == "limit" else (None, number)
        total = float(by_stretch.sum())
        concerned = tuple(np.flatnonzero(by_stretch > _NEGLIGIBLE * total).tolist())
        yield _Candidate(what, quantity, row, step, total, concerned)


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


def _enlarged(plan: Plan, candidate: _Candidate, change: float) -> _Trial:
    """A limit or a cap enlarged: the path stays, so the stretches concerned start from the timings they have."""
    from pathplan.path.assembly import caps_along
    from pathplan.planning import motion_of

    task = plan.task if candidate.row is not None else _with_cap(plan.task, candidate, 1.0 + change)
    timed = []
    for k in candidate.concerned:
        stretch = plan.path.stretches[k]
        if candidate.row is not None:
            stretch = _with_limit(stretch, candidate, 1.0 + change)
        else:
            caps = caps_along(task, plan.path.cartesian, stretch.spans, stretch.span, stretch.span_start)
            stretch = replace(stretch, caps=caps)
        timed.append((motion_of(stretch), _at_full_pace(plan, k)))
    return _Trial(candidate, candidate.concerned, tuple(timed))


def _with_limit(stretch: Stretch, candidate: _Candidate, factor: float) -> Stretch:
    limits = stretch.arm.limits
    values = getattr(limits, candidate.quantity).copy()
    values[candidate.row] *= factor
    return replace(stretch, arm=replace(stretch.arm, limits=replace(limits, **{candidate.quantity: values})))


def _with_cap(task: Task, candidate: _Candidate, factor: float) -> Task:
    key = _CAPS[candidate.quantity]
    if candidate.step is not None:
        return replace(task, steps=_changed(task.steps, candidate.step, key, factor))
    common = getattr(task, key)
    wider = tuple(_with(step, key, _raised(getattr(step, key), common, factor)) for step in task.steps)
    changed: Task = _with(replace(task, steps=wider), key, common * factor)
    return changed


def _same_path(old: Stretch, new: Stretch) -> bool:
    one, two = old.path, new.path
    return np.array_equal(one.breaks, two.breaks) and np.array_equal(one.coefficients, two.coefficients)


def _best_blends(plan: Plan, change: float, best: int) -> list[_Trial]:
    """Blends enlarged one by one, the `best` kept that save most without jerk and torque limits."""
    from pathplan.timing.coarse import coarse_timing

    trials: list[_Trial] = []
    left = _slowest_corners(plan)[:_MOST_BLENDS]
    while left:  # stretches do not touch one another: one corner of each at a time
        group = list({corner.stretch: corner for corner in reversed(left)}.values())
        left = [corner for corner in left if corner not in group]
        trials += _with_blends(plan, group, change)
    if not trials:
        return []
    before, of = np.unique([trial.stretches[0] for trial in trials], return_inverse=True)
    motions = [plan.timings[k].motion for k in before] + [trial.timed[0][0] for trial in trials]
    coarse = coarse_timing([replace(motion, torque=None) for motion in motions])
    ends = np.array([timing.time[-1] for timing in coarse])
    gain = ends[of] - ends[len(before) :]
    return [trials[k] for k in np.argsort(-gain, kind="stable")[:best]]


def _with_blends(plan: Plan, corners: Sequence[Corner], change: float) -> list[_Trial]:
    """One trial a corner, each in a stretch of its own; none for those that can't be enlarged."""
    from pathplan.path import follow_task
    from pathplan.planning import motion_of

    steps = plan.task.steps
    for corner in corners:
        steps = _changed(steps, corner.after_step, "blend", 1.0 + change)
    try:
        stretches = follow_task(replace(plan.task, steps=steps)).stretches
    except PathplanError:
        half = len(corners) // 2
        parts = (corners[:half], corners[half:]) if half else ()
        return [trial for part in parts for trial in _with_blends(plan, part, change)]
    trials = []
    for corner in corners:
        k = corner.stretch
        if len(stretches) == len(plan.timings) and not _same_path(plan.path.stretches[k], stretches[k]):
            candidate = _Candidate("blend", "blend", None, corner.after_step)
            trials.append(_Trial(candidate, (k,), ((motion_of(stretches[k]), None),)))
    return trials


def _slowest_corners(plan: Plan) -> list[Corner]:
    """Corners that are flown by, the slowest in the middle first."""
    from pathplan.path.tool_motion import tool_derivatives

    corners = [corner for corner in plan.path.corners if corner.kind == "fly-by"]
    speed = np.empty(len(corners))
    owner = np.array([corner.stretch for corner in corners], dtype=np.intp)
    for k in np.unique(owner):
        rows = np.flatnonzero(owner == k)
        middle = np.array([0.5 * (corners[row].s_from + corners[row].s_to) for row in rows])
        timing, stretch = plan.timings[k], plan.path.stretches[k]
        q, qd, qdd = timing.derivatives(timing.times(timing.clock.inverse(middle)), 2)
        speed[rows] = np.linalg.norm(tool_derivatives(stretch.arm, q, qd, qdd)[0], axis=1)
    return [corners[k] for k in np.argsort(speed, kind="stable")]


def _with(what: Any, key: str, value: float | None) -> Any:
    """A step or task with one of its caps changed."""
    return replace(what, **{key: value})


def _raised(own: float | None, common: float, factor: float) -> float | None:
    """A step's own cap when the common one, which may have been folded into it, is raised."""
    return own * factor if own is not None and own <= common else own


def _changed(steps: Sequence[Step], number: int, key: str, factor: float) -> tuple[Step, ...]:
    """The steps with a blend or a cap of one of them scaled, where it has one of its own."""
    own = getattr(steps[number], key)
    if own is None:
        return tuple(steps)
    scaled = replace(own, value=own.value * factor) if key == "blend" else own * factor
    return (*steps[:number], _with(steps[number], key, scaled), *steps[number + 1 :])
