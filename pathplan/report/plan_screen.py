"""A plan as text for a terminal: what it takes, step by step, its audit and its marks. At most 100 columns."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

from pathplan.auditing.held import held_percent
from pathplan.report.plan_data import bound_at_pace, capped
from pathplan.report.screen import audit_blocks, verdict
from pathplan.report.terminal import Signs, terminal_picture
from pathplan.report.text import aligned, clock, fit, printable
from pathplan.units import format_quantity, format_value

if TYPE_CHECKING:
    from pathplan.auditing import CornerUse, HeldSpeed, StepPacing, StepSpeed
    from pathplan.planning import Plan
    from pathplan.task import Step

__all__ = ["plan_headline", "plan_screen"]

MOST_STEPS = 40  # rows shown; the rest is in --json
MOST_MARKS = 20
SAME = 1e-3  # a blend within this of what was asked counts as what was asked
_DIMENSIONS = {"length": "length", "angle": "angle", "share": "ratio"}
_SHORT = {"acceleration": "accel.", "tool acceleration": "tool accel.", "tool turning speed": "tool turning"}


def plan_screen(plan: Plan, signs: Signs | None = None) -> str:
    """The plan in lines of at most 100 columns, without a line end after the last.

    `signs`: what a picture of shares and pace is drawn with, None for plain text alone.
    """
    audit = audit_blocks(plan.audit)
    blocks = [
        _head(plan),
        _steps(plan),
        audit["joints"],
        [] if signs is None else terminal_picture(plan, signs),
        audit["drives"],
        audit["tool"],
        _marks(plan),
        audit["findings"],
        audit["cautions"],
    ]
    return "\n\n".join("\n".join(block) for block in map(list, blocks) if block)


def plan_headline(plan: Plan) -> str:
    """Title and verdict in one line."""
    return fit(printable(plan.task.title), f": {verdict(plan.audit)}")


def _head(plan: Plan) -> Iterator[str]:
    task, arm = plan.task, plan.task.arm
    yield plan_headline(plan)
    parts = [f"arm {arm.name}", f"tool{'s' * (len(task.tools) > 1)} {', '.join(task.tools)}"]
    parts += [f"payload{'s' * (len(task.payloads) > 1)} {', '.join(task.payloads)}"] if task.payloads else []
    parts += [f"pace {format_quantity(task.pace, 'ratio')}"] if task.pace != 1 else []
    parts += capped(task)
    yield fit(printable(", ".join(parts)))
    yield (
        f"cycle time {clock(plan.duration)}: motion {clock(plan.duration - plan.waiting_time)}, "
        f"waiting {clock(plan.waiting_time)}; {plan.ticks + 1} rows at {format_value(task.cycle * 1e3)} ms"
    )
    bound = bound_at_pace(plan)
    if bound > 0:
        # Rounded so that what is printed stays true: the distance up, the bound down.
        above = math.ceil(1e3 * (plan.duration / bound - 1) - 1e-6) / 10
        best = "the best possible on this path" + (" at this pace" if task.pace != 1 else "")
        yield f"within {above:.1f} % of {best} (bound {clock(math.floor(bound * 1e3) / 1e3)})"


def _steps(plan: Plan) -> Iterator[str]:
    audit = plan.audit
    pacing = {step.step: step for step in audit.pacing}
    speeds = {step.step: step for step in audit.speeds}
    corners = {corner.after_step: corner for corner in audit.corners}
    holds = {step.step: step for step in audit.held}
    table = [["step", "", "motion", "time", "tool mm/s", "paced by, part of time", "blend"]]
    for step in plan.task.steps[:MOST_STEPS]:
        paced = pacing.get(step.index)
        table.append(
            [
                str(step.index + 1),
                printable(step.name),
                step.motion,
                clock(paced.duration) if paced else "in corners",
                _speed(step, speeds.get(step.index), holds.get(step.index)),
                _pacing(paced),
                _blend(step, corners.get(step.index)),
            ]
        )
    yield from aligned(table, [5, 18, 6, 10, 14, 26, 20], left=(1, 2, 5, 6))
    if len(plan.task.steps) > MOST_STEPS:
        yield f"... and {len(plan.task.steps) - MOST_STEPS} more steps, all of them in --json"


def _speed(step: Step, speed: StepSpeed | None, held: HeldSpeed | None) -> str:
    """Largest tool speed, and what was asked; of a speed that is to be held the part of the length that has it."""
    if speed is None or step.motion == "wait":
        return "-"
    reached = format_value(1e3 * speed.reached)
    if held is not None:
        return f"{format_value(1e3 * held.speed, 3)} held {held_percent(held.length_part, 0)}"
    return reached if speed.asked is None else f"{reached} of {format_value(1e3 * speed.asked)}"


def _pacing(paced: StepPacing | None) -> str:
    """The limit that paces most of the step: 'shoulder jerk 54 %'."""
    parts = [part for part in paced.parts if part.quantity != "none"] if paced else []
    if not parts:
        return "-"
    what = f"{_SHORT.get(parts[0].quantity, parts[0].quantity)} {100 * parts[0].part:.0f} %"
    if parts[0].joint is None:
        return what
    name = printable(parts[0].joint)
    room = 25 - len(what)
    return f"{name if len(name) <= room else name[: room - 3] + '...'} {what}"


def _blend(step: Step, corner: CornerUse | None) -> str:
    """The corner at the end of a step: as asked, and what it became where that differs."""
    if step.motion == "wait":
        return "-"
    if corner is None:
        return "end"
    asked = _size(corner.asked_value, corner.region)
    if corner.kind == "stop":
        return f"{asked} -> stop" if corner.region else "stop"
    if abs(corner.used - corner.asked_value) <= SAME * corner.asked_value:
        return asked
    return f"{asked} -> {_size(corner.used, corner.region)}"


def _size(value: float, region: str) -> str:
    return format_quantity(value, _DIMENSIONS[region], 3) if region else ""


def _marks(plan: Plan) -> Iterator[str]:
    table: list[list[Any]] = [["mark", "at", "row", "end of step"]]
    for mark in plan.marks[:MOST_MARKS]:
        table.append([printable(mark.name), clock(mark.time), str(mark.row + 1), str(mark.step + 1)])
    if len(table) > 1:
        yield from aligned(table, [48, 14, 10, 12])
    if len(plan.marks) > MOST_MARKS:
        yield f"... and {len(plan.marks) - MOST_MARKS} more marks, all of them in --json"
