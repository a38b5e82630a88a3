"""The sections of a page as HTML: verdict, audit, steps, marks, findings, inputs. Tables are real tables."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from typing import TYPE_CHECKING

from pathplan.auditing import JointAudit, Peak
from pathplan.auditing.held import held_percent
from pathplan.auditing.model import TOLERANCE
from pathplan.auditing.words import dimension_of, shown
from pathplan.report.gather import Picture
from pathplan.report.hatching import slanted
from pathplan.report.markup import esc, number, pretty, tag
from pathplan.report.plan_data import bound_at_pace, capped
from pathplan.report.screen import CAUTIONS, verdict
from pathplan.report.text import clock
from pathplan.units import format_quantity, format_value

if TYPE_CHECKING:
    from pathplan.auditing import CornerUse, StepPacing
    from pathplan.planning import Plan
    from pathplan.task import Step

__all__ = [
    "at",
    "audit_section",
    "cautions_section",
    "findings_section",
    "headline",
    "inputs_section",
    "marks_section",
    "section",
    "steps_section",
    "table",
]

QUANTITIES = ("position", "velocity", "acceleration", "jerk", "torque")
MOST_ROWS = 1000  # of a table of steps or marks
SAME = 1e-3  # a blend within this of what was asked counts as what was asked
DIMENSIONS = {"length": "length", "angle": "angle", "share": "ratio"}
LEVELS = {"exceedance": "Exceedance", "warning": "Warning", "note": "Note"}


def section(name: str, title: str, *content: str) -> str:
    """A section with its heading."""
    head = tag("h2", esc(title), id=f"{name}-heading")
    return tag("section", head + "".join(content), id=name, aria_labelledby=f"{name}-heading")


def table(
    caption: str,
    head: Sequence[str],
    rows: Iterable[Sequence[str]],
    *,
    numbers: Sequence[int] = (),
    small: bool = False,
) -> str:
    """A table of cells that are markup already; the first cell of a row is its heading.

    `numbers`: columns aligned to the right. `small`: no wider than it needs to be.
    """
    top = "".join(tag("th", cell, scope="col", class_="n" if c in numbers else None) for c, cell in enumerate(head))
    body = []
    for cells in rows:
        first = tag("th", cells[0], scope="row")
        rest = (tag("td", cell, class_="n" if c in numbers else None) for c, cell in enumerate(cells[1:], start=1))
        body.append(tag("tr", first + "".join(rest)))
    inner = tag("caption", esc(caption)) + tag("thead", tag("tr", top)) + tag("tbody", "".join(body))
    whole = tag("table", inner, class_="narrow" if small else None)
    return tag("div", whole, class_="wide", tabindex=0, role="region", aria_label=caption)


def at(time: float, step: int | None = None) -> str:
    """A time that takes the slider there."""
    words = clock(time) + ("" if step is None else f", step {step + 1}")
    return tag("a", words, href="#motion", class_="at", data_time=repr(float(time)))


def headline(picture: Picture) -> str:
    """Title, verdict and cycle time."""
    audit, plan = picture.audit, picture.plan
    arm = picture.arm
    tools: Sequence[str] = (arm.tool.name,)
    payloads: Sequence[str] = () if arm.payload is None else (arm.payload.name,)
    if plan is not None:
        tools, payloads = plan.task.tools, plan.task.payloads
    carries = [f"arm {arm.name}", f"tool{'s' * (len(tools) > 1)} {', '.join(tools)}"]
    carries += [f"payload{'s' * (len(payloads) > 1)} {', '.join(payloads)}"] if payloads else []
    if plan is not None:
        task = plan.task
        carries += [f"pace {format_quantity(task.pace, 'ratio')}"] if task.pace != 1 else []
        carries += capped(task)
    sign = tag("span", "✓" if audit.passed else "✕", aria_hidden="true")
    said = tag("p", f"{sign} {esc(verdict(audit))}", class_=f"verdict {'pass' if audit.passed else 'fail'}")
    facts = [("cycle time", clock(picture.duration))]
    if plan is not None:
        facts += [
            ("motion", clock(plan.duration - plan.waiting_time)),
            ("waiting", clock(plan.waiting_time)),
        ]
        bound = bound_at_pace(plan)
        if bound > 0:
            # Rounded so that what is printed stays true: the distance up, the bound down.
            above = math.ceil(1e3 * (plan.duration / bound - 1) - 1e-6) / 10
            facts.append(("bound", clock(math.floor(bound * 1e3) / 1e3)))
            facts.append(("above the bound", f"{above:.1f} %"))
    cycle = f"{format_value(picture.cycle * 1e3)} ms" if picture.cycle else "irregular"
    facts.append(("rows", f"{picture.rows} at {cycle}"))
    listed = "".join(tag("div", tag("dt", esc(name)) + tag("dd", esc(value))) for name, value in facts)
    more = ""
    if plan is not None:
        about = "The bound: no motion along this path is faster under these limits, waits included."
        more = _cycle_bar(picture) + tag("p", about, class_="small")
    title = tag("h1", esc(picture.title or arm.name)) + tag("p", esc(", ".join(carries)))
    return tag("header", title + said + tag("dl", listed, class_="facts") + more, id="top")


def _cycle_bar(picture: Picture) -> str:
    """Where the cycle time goes: the steps to scale, waits hatched, and how far the bound reaches."""
    plan = picture.plan
    assert plan is not None
    end = max(plan.duration, 1e-9)
    parts = []
    for run in picture.steps[:MOST_ROWS]:
        x, width = 1000 * run.start / end, 1000 * (run.end - run.start) / end
        wait = picture.motions[run.value] == "wait"
        words = tag("title", esc(f"step {picture.step_label(run.value)}: {clock(run.end - run.start)}"))
        kind = "shade" if run.value % 2 and not wait else "plain"
        parts.append(tag("rect", words, x=x, y=2, width=width, height=22, class_=f"part {kind}"))
        parts += [tag("path", d=slanted((x, 2, width, 22)), class_="hatch")] if wait else []
        for text in (picture.step_label(run.value), str(run.value + 1)):
            if width > 6.6 * len(text) + 6:
                parts.append(tag("text", esc(text), x=x + width / 2, y=17, class_="step"))
                break
    bound = 1000 * min(1.0, bound_at_pace(plan) / end)
    parts.append(tag("path", d=f"M0 30H{number(bound)}M{number(bound)} 26v8", class_="bound"))
    beside = {"x": bound - 6, "y": 44, "class_": "edge"}
    parts.append(tag("text", "bound", **beside))
    words = f"Steps along the cycle time; the bound is {100 * bound / 1000:.1f} % of it."
    inner = tag("title", esc(words)) + "".join(parts)
    return tag("div", tag("svg", inner, class_="plot bar", viewbox="0 0 1000 48", role="img"), class_="bar-box")


def findings_section(picture: Picture) -> str:
    """What breaks a limit, warnings and notes; '' for none."""
    found = picture.audit.findings
    if not found:
        return ""
    items = []
    for finding in found[:MOST_ROWS]:
        when = " " + at(finding.time) if finding.time is not None else ""
        words = f"{tag('strong', LEVELS[finding.level])} {esc(pretty(finding.text))}{when}"
        items.append(tag("li", words, class_=finding.level))
    if len(found) > MOST_ROWS:
        items.append(tag("li", f"and {len(found) - MOST_ROWS} more"))
    breaks = any(finding.level == "exceedance" for finding in found)
    warns = any(finding.level == "warning" for finding in found)
    title = "What breaks limits" if breaks else "Warnings" if warns else "Notes"
    return section("findings", title, tag("ul", "".join(items), class_="findings"))


def audit_section(picture: Picture) -> str:
    """Every joint's shares of its limits as a table with bars."""
    audit = picture.audit
    head = ["joint", *QUANTITIES]
    rows = [[esc(joint.name), *_audit_cells(joint)] for joint in (*audit.joints, *audit.rows)]
    about = "Largest share used of each limit; below it the peak, the limit on that side and when."
    about += " ▲ marks the largest of a joint."
    about += " Of a position: how far from the middle of its range, and the margin left."
    if audit.measured == "differences":
        about += " Where the table has no column, finite differences of the positions are judged."
    tool = tag("ul", "".join(tag("li", line) for line in _tool_lines(picture)), class_="facts-list")
    return section("audit", "Limit audit", tag("p", esc(about)), table("Shares of limits", head, rows), tool)


def _audit_cells(joint: JointAudit) -> Iterator[str]:
    peaks = joint.peaks()
    largest = max(peaks, key=lambda quantity: peaks[quantity].share, default="")
    for quantity in QUANTITIES:
        peak = peaks.get(quantity)
        if peak is None:
            yield "–"
            continue
        dimension = dimension_of(joint.kind, quantity)
        over = peak.margin < -1e-9 if peak.margin is not None else peak.share > 1 + TOLERANCE
        percent = f"{max(100 * peak.share, 100.1 if over else 0):.1f} %"
        sign = tag("span", " ✕", title="exceeds the limit") if over else ""
        sign += tag("span", " ▲", title="largest of this joint") if quantity == largest else ""
        if peak.margin is not None:
            words = f"{shown(peak.peak, dimension)}, margin {shown(peak.margin, dimension, 3)}"
        else:
            value, unit = shown(peak.peak, dimension).split(" ", 1)
            words = f"{value} of {shown(peak.limit, dimension).split(' ', 1)[0]} {unit}"
        text = tag("b", percent) + sign
        yield text + bar(peak.share, over) + tag("small", esc(pretty(words))) + tag("small", at(peak.time, peak.step))


def bar(share: float, over: bool = False) -> str:
    """A share as a bar up to its limit; what goes beyond is crossed."""
    width = min(100.0, 100 * share)
    parts = tag("rect", width=100, height=8, class_="trough") + tag("rect", width=width, height=8, class_="used")
    if over:
        parts += tag("path", d="M88 0l8 8M96 0l-8 8", class_="crossed")
    shape = {"viewbox": "0 0 100 8", "preserveAspectRatio": "none", "aria_hidden": "true"}
    return tag("svg", parts, class_="share-bar over" if over else "share-bar", **shape)


def _tool_lines(picture: Picture) -> Iterator[str]:
    audit = picture.audit
    for name, peak in audit.tool_peaks().items():
        if peak is not None:
            used = f"{_of(peak, dimension_of('', name))}, {100 * peak.share:.1f} %"
            yield esc(f"{name.capitalize()}: at most {used}, ") + at(peak.time, peak.step)
    if audit.singularity is not None:
        value = format_value(audit.singularity.value, 3)
        words = f"Nearest to a singularity: smallest singular value {value} (0 is singular), "
        yield esc(words) + at(audit.singularity.time, audit.singularity.step)
    for where, deviation in (("at the rows", audit.deviation_rows), ("midway between them", audit.deviation_midway)):
        if deviation is not None:
            position, angle = (format_value(v * 1e6, 3) for v in (deviation.position, deviation.angle))
            words = f"Off the programmed path {where}: at most {position} µm, "
            turned = f"; turned by at most {angle} µrad, "
            yield (
                esc(words)
                + at(deviation.position_time, deviation.position_step)
                + esc(turned)
                + at(deviation.angle_time, deviation.angle_step)
            )
    if audit.continuous:
        share, name, quantity = max(
            (peak.share, joint.name, quantity)
            for joint in audit.continuous
            for quantity, peak in joint.peaks().items()
            if quantity != "position"
        )
        yield esc(f"Between the rows, 20 times denser: largest share {100 * share:.4f} %, {name} {quantity}")


def _of(peak: Peak, dimension: str | None) -> str:
    return pretty(f"{shown(peak.peak, dimension)} of {shown(peak.limit, dimension)}")


def steps_section(picture: Picture) -> str:
    """Step by step: time, tool speed, what paces, blend."""
    plan, audit = picture.plan, picture.audit
    if plan is None:
        return ""
    pacing = {step.step: step for step in audit.pacing}
    speeds = {step.step: step for step in audit.speeds}
    corners = {corner.after_step: corner for corner in audit.corners}
    held = {step.step: step for step in audit.held}
    starts = {run.value: run.start for run in reversed(picture.steps)}
    rows = []
    for step in plan.task.steps[:MOST_ROWS]:
        paced, speed = pacing.get(step.index), speeds.get(step.index)
        reached = "–"
        if speed is not None and step.motion != "wait":
            reached = format_value(1e3 * speed.reached)
            reached += f" of {format_value(1e3 * speed.asked)}" if speed.asked is not None else ""
            if step.index in held:
                asked = format_value(1e3 * held[step.index].speed)
                reached += f", {asked} held over {held_percent(held[step.index].length_part)} of its length"
        begins = at(starts[step.index]) if step.index in starts else "–"
        duration = clock(paced.duration) if paced else "0 s"
        cells = [str(step.index + 1), esc(step.name), step.motion, begins, duration, reached]
        rows.append([*cells, esc(_paced_by(paced)), esc(_blend(step, corners.get(step.index)))])
    head = ["step", "name", "motion", "from", "time", "tool speed, mm/s", "paced by, part of its time", "blend"]
    more = len(plan.task.steps) - MOST_ROWS
    left = tag("p", f"and {more} more steps: pathplan plan --json lists all") if more > 0 else ""
    return section("steps", "Steps", table("Steps", head, rows, numbers=(3, 4, 5)), left)


def _paced_by(paced: StepPacing | None) -> str:
    parts = [part for part in (paced.parts if paced else ()) if part.part >= 0.005 and part.quantity != "none"]
    words = [f"{part.joint or ''} {part.quantity} {100 * part.part:.0f} %".strip() for part in parts[:3]]
    return ", ".join(words) + (", …" if len(parts) > 3 else "") if words else "–"


def _blend(step: Step, corner: CornerUse | None) -> str:
    if step.motion == "wait":
        return "–"
    if corner is None:
        return "end"
    asked = format_quantity(corner.asked_value, DIMENSIONS[corner.region], 3) if corner.region else ""
    if corner.kind == "stop":
        reason = f" ({corner.reason})" if corner.reason and asked else ""
        return f"{asked} → stop{reason}" if asked else "stop"
    if abs(corner.used - corner.asked_value) <= SAME * corner.asked_value:
        return asked
    return f"{asked} → {format_quantity(corner.used, DIMENSIONS[corner.region], 3)}"


def marks_section(picture: Picture) -> str:
    """The named instants; '' where there are none."""
    if not picture.marks:
        return ""
    rows = [
        [esc(mark.name), at(mark.time), str(mark.row + 1), esc(picture.step_label(mark.step))]
        for mark in picture.marks[:MOST_ROWS]
    ]
    head = ["mark", "at", "row", "end of step"]
    return section("marks", "Marks", table("Marks", head, rows, numbers=(1, 2), small=True))


def inputs_section(picture: Picture) -> str:
    """What it was made from, so that it can be made again: files with their hashes, versions, settings."""
    meta = picture.meta
    files = [[esc(name), tag("code", esc(digest))] for name, digest in dict(meta.get("sources") or {}).items()]
    parts = [table("Files read", ["file", "SHA-256"], files, small=True)] if files else []
    versions = [[esc(name), esc(version)] for name, version in dict(meta.get("versions") or {}).items()]
    parts += [table("Versions", ["program or library", "version"], versions, small=True)] if versions else []
    settings = _settings(picture.plan) if picture.plan is not None else []
    parts += [table("Settings", ["setting", "value"], settings, small=True)] if settings else []
    if not parts:
        return ""
    about = "The same files, settings and versions give the same table to the last bit."
    return section("inputs", "Inputs", tag("p", about), *parts)


def _settings(plan: Plan) -> list[list[str]]:
    task = plan.task
    rows = [("cycle", format_quantity(task.cycle, "time", 6)), ("pace", format_quantity(task.pace, "ratio"))]
    for name, cap, dimension in (("tool", task.speed, "speed"), ("turning", task.turning_speed, "angular_speed")):
        if cap is not None:
            rows.append((f"{name} speed capped at", format_quantity(cap, dimension)))
    return [[esc(name), esc(value)] for name, value in rows]


def cautions_section() -> str:
    """The cautions, and room to sign."""
    lines = "".join(tag("div", tag("span", name)) for name in ("checked by", "date", "signature"))
    return section("cautions", "Cautions", tag("p", esc(" ".join(CAUTIONS))), tag("div", lines, class_="sign"))
