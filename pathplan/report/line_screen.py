"""A single line as text for a terminal, and as data: what it uses of every limit, tenth by tenth."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from pathplan.auditing.line import LinePart, Worst
from pathplan.auditing.words import dimension_of, shown
from pathplan.report.plan_data import capped, plan_as_dict
from pathplan.report.screen import audit_blocks, verdict
from pathplan.report.text import aligned, clock, fit, printable
from pathplan.units import format_quantity, format_value, joint_dimension, to_screen

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["LineAudit", "line_as_dict", "line_screen"]

SHARES = ("velocity", "acceleration", "jerk")
QUANTITIES = (*SHARES, "torque")


@dataclass(frozen=True, eq=False)
class LineAudit:
    """A line that was judged: its ends as they were given, its plan, its parts; how many starts, and able ones."""

    start: str
    goal: str
    plan: Plan
    parts: tuple[LinePart, ...]
    starts: int
    able: int


def line_screen(line: LineAudit) -> str:
    """The line in rows of at most 100 columns, without a line end after the last."""
    audit = audit_blocks(line.plan.audit)
    blocks = [_head(line), _parts(line), audit["joints"], audit["tool"], audit["findings"], audit["cautions"]]
    return "\n\n".join("\n".join(block) for block in map(list, blocks) if block)


def _head(line: LineAudit) -> Iterator[str]:
    plan = line.plan
    yield fit(printable(f"line from {line.start} to {line.goal}"), f": {verdict(plan.audit)}")
    arm = plan.task.arm
    parts = [f"arm {arm.name}", f"tool {arm.tool.name}"]
    parts += [f"payload {arm.payload.name}"] if arm.payload is not None else []
    parts += capped(plan.task)
    yield fit(printable(", ".join(parts)))
    yield f"{clock(plan.motion_time)} in motion; {plan.ticks + 1} rows at {format_value(plan.task.cycle * 1e3)} ms"
    if line.starts > 1:
        values = ", ".join(
            format_quantity(round(float(q), 9), joint_dimension(joint.kind, "position"), 4)
            for q, joint in zip(plan.task.start, arm.joints, strict=True)
        )
        yield f"{line.able} of {line.starts} configurations at the start can follow it; shown is the fastest, from"
        yield fit(f"  {values}")


def _parts(line: LineAudit) -> Iterator[str]:
    """The table of shares along the line."""
    table = [["along", "until", "least margin", *(f"{name} %" for name in SHARES), "mm/s", "singular"]]
    for part in line.parts:
        cells = [f"{100 * part.share_to:.0f} %", f"{part.time_to:.3f} s", _margin(part.position)]
        cells += [_share(getattr(part, quantity)) for quantity in SHARES]
        cells += [format_value(1e3 * part.tool_speed), format_value(part.singular_value, 3)]
        table.append(cells)
    yield "the most used in each part of the line, joint and share; singular: smallest singular value"
    yield from aligned(table, [5, 8, 18, 15, 15, 15, 7, 8], left=(2, 3, 4, 5))


def _margin(worst: Worst | None) -> str:
    if worst is None or worst.margin is None:
        return "-"
    return f"{_short(worst.name)} {shown(worst.margin, dimension_of(worst.kind, 'position'), 3)}"


def _share(worst: Worst | None) -> str:
    if worst is None:
        return "-"
    over = worst.share > 1 + 1e-6
    return f"{_short(worst.name)} {max(100 * worst.share, 100.1) if over else 100 * worst.share:.1f}{'!' * over}"


def _short(name: str) -> str:
    name = printable(name)
    return name if len(name) <= 8 else name[:7] + "."


def line_as_dict(line: LineAudit) -> dict[str, Any]:
    """The plan as data, with the line's ends, start and parts: mm, deg and s, shares in percent."""
    plan = line.plan
    joints = [
        {"name": joint.name, "value": to_screen(float(q), joint_dimension(joint.kind, "position"))}
        for q, joint in zip(plan.task.start, plan.arm.joints, strict=True)
    ]
    return {
        **plan_as_dict(plan),
        "line": {
            "from": line.start,
            "to": line.goal,
            "configurations": line.starts,
            "able": line.able,
            "start_joints": joints,
            "parts": [_part_as_dict(part) for part in line.parts],
        },
    }


def _part_as_dict(part: LinePart) -> dict[str, Any]:
    found: dict[str, Any] = {
        "from_percent": 100 * part.share_from,
        "to_percent": 100 * part.share_to,
        "from_s": part.time_from,
        "to_s": part.time_to,
        "tool_speed_mm_s": 1000 * part.tool_speed,
        "smallest_singular_value": part.singular_value,
    }
    for quantity in ("position", *QUANTITIES):
        worst: Worst | None = getattr(part, quantity)
        found[quantity] = worst and {"joint": worst.name, "percent": 100 * worst.share}
    if part.position is not None and part.position.margin is not None:
        dimension = dimension_of(part.position.kind, "position")
        margin = part.position.margin if dimension is None else to_screen(part.position.margin, dimension)
        found["position"]["margin"] = margin
    return found
