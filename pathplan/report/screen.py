"""The audit as text for a terminal: at most 100 columns, no colour, nothing beyond ASCII but the user's names."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Collection, Iterable, Iterator

from pathplan.auditing import Audit, Deviation, JointAudit, Pacing, Peak, StepPacing
from pathplan.auditing.words import dimension_of, shown
from pathplan.report.drives import drive_lines
from pathplan.report.text import WIDTH, aligned, clock, fit, printable
from pathplan.units import format_quantity, format_value

__all__ = ["CAUTIONS", "WIDTH", "audit_blocks", "audit_screen", "verdict"]

PACING_WIDTH = 46
MOST_STEPS = 12  # lines of steps shown; the rest is in --json
MOST_FINDINGS = 20
CAUTIONS = (
    "Prove the plan at reduced speed first. Clearance is not checked. A plan is no safety function: the",
    "risk assessment, the local codes and licensed practice apply.",
)
QUANTITIES = ("velocity", "acceleration", "jerk", "torque")


def audit_screen(audit: Audit, targets: Iterable[str] = ()) -> str:
    """The audit in lines of at most 100 columns, without a line end after the last.

    Shares in percent, the largest of each joint marked *, what passes its limit marked !. `targets`: lines about the
    task's targets, before the cautions.
    """
    blocks = audit_blocks(audit)
    cautions = blocks.pop("cautions")
    return "\n\n".join("\n".join(block) for block in (*blocks.values(), list(targets), cautions) if block)


def audit_blocks(audit: Audit) -> dict[str, list[str]]:
    """The lines of the audit by what they tell: headline, joints, tool, steps, findings, cautions."""
    blocks: dict[str, Iterable[str]] = {
        "headline": _headline(audit),
        "joints": _joints(audit),
        "drives": drive_lines(audit),
        "tool": _tool(audit),
        "steps": _steps(audit),
        "findings": _findings(audit),
        "cautions": CAUTIONS,
    }
    return {name: list(lines) for name, lines in blocks.items()}


def verdict(audit: Audit) -> str:
    """'within limits', or how many times they are broken."""
    count = sum(finding.level == "exceedance" for finding in audit.findings)
    return "within limits" if audit.passed else f"BREAKS LIMITS ({count} exceedance{'s' * (count > 1)})"


def _headline(audit: Audit) -> Iterator[str]:
    title = f"{audit.task}, " if audit.task else ""
    yield fit(printable(title + audit.arm), f": {verdict(audit)}")
    parts = [f"cycle time {clock(audit.duration)}"]
    if audit.motion_time is not None and audit.waiting_time is not None:
        parts[0] += f" (motion {clock(audit.motion_time)}, waiting {clock(audit.waiting_time)})"
    if audit.bound is not None:
        parts.append(f"bound {clock(math.floor(audit.bound * 1e3) / 1e3)}")
    rows = f"{audit.count} row{'s' * (audit.count != 1)}"
    parts.append(f"{rows} at {format_value(audit.cycle * 1e3)} ms" if audit.cycle else f"{rows}, irregular")
    yield ", ".join(parts)


def _joints(audit: Audit) -> Iterator[str]:
    table = [["joint", "position", "margin", *QUANTITIES]]
    broken = {(finding.joint, finding.quantity) for finding in audit.findings if finding.level == "exceedance"}
    table += [_joint_cells(joint, broken) for joint in (*audit.joints, *audit.rows)]
    if audit.measured == "differences":
        yield "velocity, acceleration and jerk: where no column, finite differences of the positions"
    yield from aligned(table, [24, *[15] * 6])


def _joint_cells(joint: JointAudit, broken: Collection[tuple[str | None, str | None]]) -> list[str]:
    peaks = joint.peaks()
    largest = max(peaks, key=lambda quantity: peaks[quantity].share, default="")  # the first of equal ones
    position = peaks.get("position")
    cells = [printable(joint.name), _share(position, largest == "position", (joint.name, "position") in broken), "-"]
    if position is not None and position.margin is not None:
        cells[2] = shown(position.margin, dimension_of(joint.kind, "position"), 3)
    return cells + [
        _share(peaks.get(quantity), largest == quantity, (joint.name, quantity) in broken) for quantity in QUANTITIES
    ]


def _share(peak: Peak | None, largest: bool = False, broken: bool = True) -> str:
    """A share in percent with its mark. 100.0 is only printed of what keeps the limit, up to its rounding."""
    if peak is None:
        return "-  "
    over = broken and (peak.margin < -1e-9 if peak.margin is not None else peak.share > 1 + 1e-6)
    percent = 100 * peak.share
    text = f"{max(percent, 100.1):.1f}" if over else f"{percent:.1f}"
    return f"{text} %{'!' if over else '*' if largest else ' '}"


def _tool(audit: Audit) -> Iterator[str]:
    for name, peak in audit.tool_peaks().items():
        if peak is not None:
            dimension = dimension_of("", name)
            used = f"{shown(peak.peak, dimension)} of {shown(peak.limit, dimension)}"
            yield f"{name}: at most {used} ({_share(peak).strip()}) {_place(peak.time, peak.step)}"
    if audit.singularity is not None:
        where = _place(audit.singularity.time, audit.singularity.step)
        value = format_value(audit.singularity.value, 3)
        yield f"singularity: smallest singular value {value} {where} (0: singular)"
    for name, deviation in (("rows", audit.deviation_rows), ("midway", audit.deviation_midway)):
        if deviation is not None:
            yield f"path deviation, {name}: {_deviation_text(deviation)}"
    if audit.corners:
        flown = sum(corner.kind == "fly-by" for corner in audit.corners)
        yield f"corners: {flown} flown by, {len(audit.corners) - flown} stop points"
    if audit.continuous:
        worst = max(
            (peak.share, joint.name, quantity)
            for joint in audit.continuous
            for quantity, peak in joint.peaks().items()
            if quantity != "position"
        )
        text = f"largest share {100 * worst[0]:.4f} %, {printable(worst[1])} {worst[2]}"
        yield fit(f"between rows: {text}")


def _deviation_text(deviation: Deviation) -> str:
    position = format_quantity(deviation.position * 1e3, "length", 3).replace("mm", "um")
    angle = format_value(deviation.angle * 1e6, 3)
    return (
        f"{position} {_place(deviation.position_time, deviation.position_step)}, "
        f"{angle} urad {_place(deviation.angle_time, deviation.angle_step)}"
    )


def _place(time: float, step: int) -> str:
    return f"at {clock(time)} in step {step + 1}"


def _steps(audit: Audit) -> Iterator[str]:
    """What paces each step, and what became of its asked speed; of many steps the longest."""
    if not audit.pacing:
        return
    chosen = sorted(audit.pacing, key=lambda step: -step.duration)[:MOST_STEPS]
    speeds = {speed.step: speed for speed in audit.speeds if speed.asked is not None}
    table = [["step", "", "time", "paced by, share of its time"]]
    table[0] += ["tool speed reached"] if speeds else []
    for step in sorted(chosen, key=lambda step: step.step):
        cells = [str(step.step + 1), printable(step.name), clock(step.duration), _pacing_text(step)]
        if speeds:
            speed = speeds.get(step.step)
            cells.append("-")
            if speed is not None and speed.asked is not None:
                cells[-1] = f"{format_value(1e3 * speed.reached)} of {format_value(1e3 * speed.asked)} mm/s"
        table.append(cells)
    yield from aligned(table, [6, 16, 12, PACING_WIDTH, 22], left=(1, 3, 4))
    if len(audit.pacing) > MOST_STEPS:
        yield f"... and {len(audit.pacing) - MOST_STEPS} shorter steps, all of them in --json"


def _pacing_text(step: StepPacing) -> str:
    """The largest parts, as many as fit whole; what rounds to nothing is left out."""
    parts = [_part_text(part) for part in step.parts if part.part >= 0.005]
    for count in range(len(parts), 1, -1):
        text = ", ".join(parts[:count]) + (", ..." if count < len(parts) else "")
        if len(text) <= PACING_WIDTH:
            return text
    return ", ".join(parts[:1]) + (", ..." if len(parts) > 1 else "")


def _part_text(part: Pacing) -> str:
    who = f"{printable(part.joint)} " if part.joint else ""
    return f"{who}{part.quantity} {100 * part.part:.0f} %"


def _findings(audit: Audit) -> Iterator[str]:
    marks = {"exceedance": "!", "warning": "?", "note": "-"}
    for finding in audit.findings[:MOST_FINDINGS]:
        text = printable(finding.text)
        yield from textwrap.wrap(text, WIDTH, initial_indent=f"{marks[finding.level]} ", subsequent_indent="  ")
    if len(audit.findings) > MOST_FINDINGS:
        yield f"... and {len(audit.findings) - MOST_FINDINGS} more findings, all of them in --json"
