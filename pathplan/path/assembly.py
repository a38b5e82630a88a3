"""Pieces, spans and junctions put together into stretches, waits and corners."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.path.caps import StepCaps, caps_of, lower
from pathplan.path.cartesian import CartesianPath, tool_of
from pathplan.path.choice import Choice
from pathplan.path.fit import Pieces
from pathplan.path.geometry import Index
from pathplan.path.joint import Array, JointPath
from pathplan.path.layout import Layout
from pathplan.path.spans import Spans
from pathplan.path.taskpath import Cap, Corner, StepPart, Stretch, TaskPath, Wait
from pathplan.task.model import Step, Task

__all__ = ["assemble", "caps_along"]


def assemble(task: Task, path: CartesianPath, choice: Choice, layout: Layout, pieces: Pieces) -> TaskPath:
    """The finished path of a task, of the joints that its arm has."""
    spans = layout.spans
    start = _starts(spans, layout.stretch)
    arms = _Equipped(task.arm)
    sequence: list[Stretch | Wait] = []
    stretch_of_motion = np.empty(len(spans.motions), dtype=np.intp)
    first_motion: dict[int, int] = {}
    for i in range(len(spans)):
        for motion in (spans.before[i], spans.after[i]):
            if motion >= 0:
                stretch_of_motion[motion] = layout.stretch[i]
                first_motion.setdefault(int(layout.stretch[i]), int(motion))
    motion_of_step = {path.legs[leg].step.index: m for m, leg in enumerate(spans.motions.leg)}
    span_bounds = np.searchsorted(layout.stretch, np.arange(int(layout.stretch.max(initial=-1)) + 2))
    piece_bounds = np.searchsorted(pieces.span, np.append(span_bounds[:-1], len(spans)))
    parts = _step_parts(path, spans, start, stretch_of_motion, motion_of_step)
    for step in path.task.steps:
        motion = motion_of_step.get(step.index, -1)
        if motion >= 0:
            number = int(stretch_of_motion[motion])
            if first_motion[number] == motion:
                span = np.arange(span_bounds[number], span_bounds[number + 1])
                part = slice(int(piece_bounds[number]), int(piece_bounds[number + 1]))
                joint_path = _joint_path(pieces, part, start, task.arm.n)
                caps = caps_along(task, path, spans, span, start[span])
                arm = arms.carrying(step)
                sequence.append(Stretch(joint_path, arm, tuple(parts[number]), caps, spans, span, start[span]))
        elif step.motion == "wait" or step.index not in parts.flown_by:
            sequence.append(Wait(step.index, step.wait))
    corners = _corners(path, layout, start, stretch_of_motion, arms)
    findings = tuple(sorted((*path.findings, *layout.findings), key=lambda finding: finding.step))
    targets = choice.q[:, : task.arm.n].copy()
    targets.flags.writeable = False
    return TaskPath(task, path, tuple(sequence), corners, findings, targets)


class _Equipped:
    """Arms by tool and payload, each made once."""

    def __init__(self, arm: Arm) -> None:
        own = arm.tool.name, arm.payload.name if arm.payload else None
        self._made: dict[tuple[str, str | None], Arm] = {own: arm}
        self._arm = arm

    def carrying(self, step: Step) -> Arm:
        key = (tool_of(self._arm, step.tool).name, step.payload)
        if key not in self._made:
            self._made[key] = self._arm.equipped(tool=tool_of(self._arm, step.tool), payload=step.payload)
        return self._made[key]


class _Parts(dict[int, list[StepPart]]):
    """Step parts by stretch, and the steps without motion that lie inside one."""

    def __init__(self) -> None:
        super().__init__()
        self.flown_by: set[int] = set()


def _starts(spans: Spans, stretch: NDArray[np.intp]) -> Array:
    """(S,) where each span begins on its stretch."""
    # Summed anew in each stretch: a difference of sums over a long task would lose digits.
    begins = np.zeros(len(spans))
    bounds = np.flatnonzero(np.diff(stretch, prepend=-1, append=-1))
    for low, high in pairwise(bounds.tolist()):
        begins[low + 1 : high] = np.cumsum(spans.length[low : high - 1])
    return begins


def _joint_path(pieces: Pieces, part: slice, start: Array, joints: int) -> JointPath:
    begins = start[pieces.span[part]] + pieces.start[part]
    breaks = np.append(begins, begins[-1] + pieces.width[part][-1])
    coefficients = pieces.coefficients[:, part, :joints]
    used = np.flatnonzero(coefficients.any(axis=(1, 2)))
    first = min(int(used[0]) if len(used) else 7, 6)
    return JointPath.from_pieces(breaks, coefficients[first:])


def _step_parts(
    path: CartesianPath, spans: Spans, start: Array, stretch_of_motion: Index, motion_of_step: dict[int, int]
) -> _Parts:
    """From where to where each step runs on its stretch; corner middles are the borders."""
    count = len(spans.motions)
    begin, end = np.full(count, np.inf), np.zeros(count)
    for i in range(len(spans)):
        one, two = int(spans.before[i]), int(spans.after[i])
        middle = start[i] + spans.length[i] / 2 if two >= 0 else start[i] + spans.length[i]
        begin[one] = min(begin[one], start[i])
        end[one] = middle
        if two >= 0:
            begin[two] = middle
            end[two] = start[i] + spans.length[i]  # unless more of it follows
    parts = _Parts()
    before = -1  # the last motion so far
    for leg in path.legs:
        motion = motion_of_step.get(leg.step.index, -1)
        if motion >= 0:
            before = motion
            part = StepPart(leg.step.index, float(begin[motion]), float(end[motion]))
            parts.setdefault(int(stretch_of_motion[motion]), []).append(part)
        elif 0 <= before < count - 1 and stretch_of_motion[before] == stretch_of_motion[before + 1]:
            at = float(end[before])
            parts[int(stretch_of_motion[before])].append(StepPart(leg.step.index, at, at))
            parts.flown_by.add(leg.step.index)
    return parts


def caps_along(task: Task, path: CartesianPath, spans: Spans, span: Index, start: Array) -> tuple[Cap, ...]:
    """Caps on a stretch of `span` (M,) spans that begin at `start` (M,) on it, as the steps of `task` say them."""
    caps: list[Cap] = []
    for i, begin in zip(span, start.tolist(), strict=True):
        legs = [path.legs[spans.motions.leg[m]] for m in (spans.before[i], spans.after[i]) if m >= 0]
        steps = [task.steps[leg.step.index] for leg in legs]
        own = [caps_of(step, task, task.arm) for step in steps]
        lowest = StepCaps(*(lower(*values) for values in zip(*own, strict=True)))
        held = any(step.held_speed is not None for step in steps)
        cap = Cap(begin, begin + float(spans.length[i]), *lowest, held)
        if caps and caps[-1][2:] == cap[2:]:
            caps[-1] = cap._replace(s_from=caps[-1].s_from)
        else:
            caps.append(cap)
    return tuple(caps)


def _corners(
    path: CartesianPath, layout: Layout, start: Array, stretch_of_motion: Index, arms: _Equipped
) -> tuple[Corner, ...]:
    spans = layout.spans
    span_of = {int(spans.before[i]): i for i in np.flatnonzero(spans.corner)}
    ends = np.zeros(int(layout.stretch.max(initial=0)) + 1)
    np.maximum.at(ends, layout.stretch, start + spans.length)
    corners = []
    for j, junction in enumerate(layout.junctions):
        number = int(stretch_of_motion[j])
        blend = junction.blend
        asked = junction.step.blend
        leg = path.legs[spans.motions.leg[j]]
        carrying = arms.carrying(leg.step)
        if blend is not None:
            s_from = float(start[span_of[j]])
            s_to = s_from + float(spans.length[span_of[j]])
        else:
            s_from = s_to = float(ends[number])
        corners.append(
            Corner(
                after_step=junction.step.index,
                kind="stop" if blend is None else "fly-by",
                reason=junction.reason,
                asked=asked.text if asked else "",
                asked_value=asked.value if asked else 0.0,
                used=float(layout.used[j]),
                region=asked.kind if asked else "",
                stretch=number,
                s_from=s_from,
                s_to=s_to,
                pose=leg.end if leg.view == 0 else carrying.forward(spans.motions.end[j, : carrying.n]),
            )
        )
    return tuple(corners)
