"""A plan as plain types, for JSON: mm, deg and s, shares in percent, steps and rows counted from 1."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from pathplan.units import format_quantity, to_screen

if TYPE_CHECKING:
    from pathplan.planning import Plan
    from pathplan.task import Task

__all__ = ["bound_at_pace", "capped", "plan_as_dict"]


def bound_at_pace(plan: Plan) -> float:
    """s: a lower bound for the duration at the plan's pace. Motion is slowed by the pace, waits are not."""
    return (plan.bound - plan.waiting_time) / plan.task.pace + plan.waiting_time


def capped(task: Task) -> list[str]:
    """The caps on the tool of the whole task, in words."""
    caps = (("tool speed", task.speed, "speed"), ("turning speed", task.turning_speed, "angular_speed"))
    return [f"{name} capped at {format_quantity(cap, unit)}" for name, cap, unit in caps if cap is not None]


def plan_as_dict(plan: Plan) -> dict[str, Any]:
    """What a plan says of itself, its steps and marks, and its audit. Every number is finite or None."""
    task, audit, bound = plan.task, plan.audit.to_dict(), bound_at_pace(plan)
    cap, turning = task.speed, task.turning_speed
    turns = {} if turning is None else {"tool_turning_speed_cap_deg_s": to_screen(turning, "angular_speed")}
    return {
        **plan.meta,
        "tool": task.arm.tool.name,
        "payload": None if task.arm.payload is None else task.arm.payload.name,
        "tools": list(task.tools),
        "payloads": list(task.payloads),
        "passed": plan.audit.passed,
        "plan": {
            "duration_s": plan.duration,
            "motion_s": plan.duration - plan.waiting_time,
            "waiting_s": plan.waiting_time,
            "bound_s": bound,
            "above_bound_percent": 100 * (plan.duration / bound - 1) if bound > 0 else None,
            "rows": plan.ticks + 1,
            "cycle_s": task.cycle,
            "pace_percent": 100 * task.pace,
            "tool_speed_cap_mm_s": None if cap is None else to_screen(cap, "speed"),
            **turns,
        },
        "steps": _steps(plan, audit),
        "marks": [
            {"name": mark.name, "time_s": mark.time, "row": mark.row + 1, "step": mark.step + 1} for mark in plan.marks
        ],
        "audit": audit,
    }


def _steps(plan: Plan, audit: dict[str, Any]) -> list[dict[str, Any]]:
    """Every step of the task with what the audit tells of it. A step within its neighbours' corners has no rows."""
    pacing = {entry["step"]: entry for entry in audit["pacing"]}
    speeds = {entry["step"]: entry for entry in audit["speeds"]}
    corners = {entry["after_step"]: entry for entry in audit["corners"]}
    held = {entry["step"]: entry for entry in audit.get("held", ())}
    kept = ("held_mm_s", "percent_of_length", "percent_of_time")
    found = []
    for number, step in enumerate(plan.task.steps, start=1):
        paced, speed, corner = pacing.get(number), speeds.get(number), corners.get(number)
        found.append(
            {
                "step": number,
                "name": step.name,
                "motion": step.motion,
                "duration_s": paced["duration_s"] if paced else 0.0,
                "tool_speed_asked_mm_s": speed and speed["asked_mm_s"],
                "tool_speed_reached_mm_s": speed and speed["reached_mm_s"],
                **({"held_speed": {key: held[number][key] for key in kept}} if number in held else {}),
                "pacing": paced["parts"] if paced else [],
                "corner": corner and {key: value for key, value in corner.items() if key != "after_step"},
            }
        )
    return found
