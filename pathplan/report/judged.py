"""A table from a file, judged against the arm it belongs to, and what the screen says of it."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

import pathplan
from pathplan.errors import InputError
from pathplan.path.caps import lower
from pathplan.report.screen import audit_screen, verdict
from pathplan.report.text import aligned, clock, printable
from pathplan.report.written import written_as_dict, written_lines
from pathplan.table import JointTable
from pathplan.units import format_quantity, format_value, joint_dimension, to_screen

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.auditing import Audit
    from pathplan.auditing.poses import Pass
    from pathplan.export.foreign import Asked
    from pathplan.report.outputs import Job
    from pathplan.task import Task

__all__ = ["Judged", "Judging", "first_exceedance", "judge_file", "judged_as_dict", "judged_screen"]

TOUCHES = 1e-9  # m or rad: nearer than this is there
MOST_TARGETS = 40  # lines of targets shown; the rest is in --json


@dataclass(frozen=True)
class Judging:
    """How a table is judged: files of its arm and of a task, the tool by name, how a table from elsewhere is read.

    `near` (m, rad): how near a target of the task must be passed. `speed` (m/s) and `turning_speed` (rad/s) cap the
    tool. None: not said.
    """

    arm: str | None = None
    tool: str | None = None
    task: str | None = None
    asked: Asked | None = None
    near: tuple[float, float] | None = None
    speed: float | None = None
    turning_speed: float | None = None


@dataclass(frozen=True)
class Judged:
    """A table that was read, and what its arm's limits say of it.

    `notes`: what people should know of how it was read and judged. Without an arm there is no audit, and the note says
    why. `breaks`: which limit it breaks, "" for none known. `passes`: the targets of a task, where one was given.
    """

    file: str
    table: JointTable
    arm: Arm | None
    audit: Audit | None
    notes: tuple[str, ...]
    breaks: str
    passes: tuple[Pass, ...] = ()


def judge_file(file: str, how: Judging) -> Judged:
    """Read a table and judge it against an arm.

    The arm is that of the task, that of an arm file, or the one that the table's header names, if that lies beside it;
    a table from elsewhere names none. It carries the tool that is said, that of the task, that of the header, or none.
    Raises InputError for a file that can't be read, or an arm or tool that can't be this table's.
    """
    from pathplan.export.foreign import is_own

    task = _task(how)
    given = pathplan.load_arm(how.arm) if how.arm is not None and task is None else None
    if is_own(Path(file)):
        if how.asked is not None:
            complaint = "was written by pathplan, so its columns are known: say --time, --columns and --unit of others"
            raise InputError.at(file, complaint)
        table = pathplan.read_table(file)
        arm, notes = _arm_of(table, Path(file), task.arm if task is not None else given)
    else:
        table, arm, notes = _from_elsewhere(file, task.arm if task is not None else given, how)
    audit = None
    passes: tuple[Pass, ...] = ()
    if arm is not None:
        if task is None:
            arm = _with_tool(arm, table, how.tool)
        steps = None if task is None else _whose_steps(table, task, how)
        caps = (how.speed, how.turning_speed)
        if task is not None and steps is None:  # of its caps those hold that it has for every step
            caps = lower(how.speed, task.speed), lower(how.turning_speed, task.turning_speed)
        arm = _capped(arm, *caps)
        try:
            audit = pathplan.audit(table, arm, task=steps)
            if task is not None:
                audit, passes = _with_targets(audit, table, task, how)
        except InputError as error:
            raise InputError.at(file, str(error).removeprefix("table: ")) from None
    breaks = ""
    if audit is not None and not audit.passed:
        breaks = first_exceedance(audit)
    elif table.meta.get("breaks_limits"):
        breaks = "its header says so"
    return Judged(file, table, arm, audit, notes, breaks, passes)


def _whose_steps(table: JointTable, task: Task, how: Judging) -> Task | None:
    """The task, with the caps that are asked besides, if the table's steps are its own; None if they are not."""
    if table.meta.get("task_file") != (task.file.name if task.file else None) or table.step.max() >= len(task.steps):
        return None
    speed, turning = lower(how.speed, task.speed), lower(how.turning_speed, task.turning_speed)
    pace = table.meta.get("pace", 1.0)
    known = isinstance(pace, int | float) and 0 < pace <= 1
    return dataclasses.replace(task, speed=speed, turning_speed=turning, pace=pace if known else 1.0)


def _capped(arm: Arm, speed: float | None, turning_speed: float | None) -> Arm:
    """The arm with a tool that may move no faster."""
    tool = arm.tool
    lowest = lower(speed, tool.speed), lower(turning_speed, tool.turning_speed)
    if lowest == (tool.speed, tool.turning_speed):
        return arm
    return dataclasses.replace(arm, tool=dataclasses.replace(tool, speed=lowest[0], turning_speed=lowest[1]))


def _task(how: Judging) -> Task | None:
    if how.task is None:
        return None
    return pathplan.load_task(how.task, arm=None if how.arm is None else pathplan.load_arm(how.arm))


def _from_elsewhere(file: str, arm: Arm | None, how: Judging) -> tuple[JointTable, Arm, tuple[str, ...]]:
    """A table that pathplan did not write."""
    from pathplan.export.foreign import Asked, read_foreign

    if arm is None:
        raise InputError.at(file, "was not written by pathplan: say whose joints these are with --arm FILE")
    found = read_foreign(file, arm, how.asked if how.asked is not None else Asked())
    return found.table, arm, found.notes


def _with_targets(audit: Audit, table: JointTable, task: Task, how: Judging) -> tuple[Audit, tuple[Pass, ...]]:
    """The audit with an exceedance for every target that is not passed, and all targets."""
    from pathplan.auditing.poses import NEAR, pass_findings, passes

    found = passes(table, task, NEAR if how.near is None else how.near)
    limits = [finding for finding in audit.findings if finding.level == "exceedance"]
    others = [finding for finding in audit.findings if finding.level != "exceedance"]
    return dataclasses.replace(audit, findings=(*limits, *pass_findings(found, task.arm), *others)), found


def first_exceedance(audit: Audit) -> str:
    """The first finding that breaks a limit, and how many more there are."""
    texts = [finding.text for finding in audit.findings if finding.level == "exceedance"]
    return texts[0] + (f" (and {len(texts) - 1} more)" if len(texts) > 1 else "")


def _arm_of(table: JointTable, file: Path, given: Arm | None) -> tuple[Arm | None, tuple[str, ...]]:
    """The arm, and notes on what does not match the table's header."""
    name, sources = table.meta.get("arm"), table.meta.get("sources")
    sources = sources if isinstance(sources, Mapping) else {}
    arm = given
    if arm is None:
        stated = table.meta.get("arm_file")
        others = [PurePath(str(source)).name for source in sources if source != table.meta.get("task_file")]
        if isinstance(stated, str) and stated:  # the task may have read other files too
            others = [PurePath(stated).name]
        beside = [file.with_name(other) for other in others if other and file.with_name(other).is_file()]
        if not beside:
            named = f"names {', '.join(others)}, which is not beside it" if others else "names no arm file"
            return None, (f"{file}: not judged, its header {named}: give --arm FILE",)
        arm = pathplan.load_arm(beside[0])
    notes = []
    if name is not None and name != arm.name:
        notes.append(f"the table was planned for arm {name}, and is judged against {arm.name}")
    for source, digest in arm.sources.items():
        if sources.get(source, digest) != digest:
            notes.append(f"{source} has changed since the table was planned")
    return arm, tuple(notes)


def _with_tool(arm: Arm, table: JointTable, given: str | None) -> Arm:
    name = table.meta.get("tool") if given is None else given
    if given is None and name not in arm.tools:
        return arm
    return arm.equipped(tool=name)


def judged_as_dict(judged: Judged, jobs: Sequence[Job]) -> dict[str, Any]:
    """The table's meta, its verdict and audit as plain types for JSON; `passed` is None where nothing judged it."""
    passed = None if judged.audit is None and not judged.breaks else not judged.breaks
    return {
        **judged.table.meta,
        "table": judged.file,
        "passed": passed,
        "notes": list(judged.notes),
        "audit": judged.audit and judged.audit.to_dict(),
        **({"targets": [_target_as_dict(target, judged) for target in judged.passes]} if judged.passes else {}),
        **written_as_dict(jobs, None),
    }


def _target_as_dict(target: Pass, judged: Judged) -> dict[str, Any]:
    off, unit = _off(target, judged)
    return {
        "step": target.step + 1,
        "name": target.name,
        "kind": target.kind,
        "passed": target.passed if target.allowed is not None else None,
        "row": target.row + 1,
        "time_s": target.time if math.isfinite(target.time) else None,
        "distance_mm": 1000 * target.distance,
        "angle_deg": math.degrees(target.angle),
        "joint": target.joint,
        "joint_off": None if target.joint is None else off,
        "unit": unit,
    }


def _off(target: Pass, judged: Judged) -> tuple[float, str]:
    """By how much the joint is off a target, and in which unit."""
    if target.joint is None or judged.arm is None:
        return 0.0, ""
    kind = next(joint.kind for joint in judged.arm.joints if joint.name == target.joint)
    dimension = joint_dimension(kind, "position")
    return to_screen(target.off, dimension), "deg" if kind == "revolute" else "mm"


def judged_screen(judged: Judged, jobs: Sequence[Job] | None) -> str:
    """What was judged against what, and the audit; or, where files were to be written, the verdict and these."""
    lines = [f"note: {note}" for note in judged.notes]
    if judged.arm is not None and judged.audit is not None:
        how = f"table {judged.file}, judged against {judged.arm.name} with tool {judged.arm.tool.name}"
        lines.insert(0, how if jobs is None else f"{how}: {verdict(judged.audit)}")
    if jobs is not None:
        lines += written_lines(jobs)
    text = "\n".join(map(printable, lines))
    if judged.passes:
        text += "\n\n" + "\n".join(_targets(judged))
    if jobs is None and judged.audit is not None:
        text += "\n\n" + audit_screen(judged.audit)
    return text


def _targets(judged: Judged) -> list[str]:
    """The targets of the task, each with its nearest row."""
    table = [["step", "", "target", "row", "at", "distance", "angle", "furthest joint"]]
    for target in judged.passes[:MOST_TARGETS]:
        off, unit = _off(target, judged)
        near = target.distance <= TOUCHES and target.angle <= TOUCHES
        joint = "-" if target.joint is None or near else f"{printable(target.joint)} {format_value(off, 3)} {unit}"
        said = "fly-by" if target.kind == "fly-by" else "passed"
        table.append(
            [
                str(target.step + 1),
                printable(target.name),
                said if target.passed else "MISSED",
                str(target.row + 1),
                clock(target.time),
                format_quantity(target.distance if target.distance > TOUCHES else 0.0, "length", 3),
                format_quantity(target.angle if target.angle > TOUCHES else 0.0, "angle", 3),
                joint,
            ]
        )
    lines = list(aligned(table, [5, 20, 7, 8, 11, 11, 11, 24], left=(1, 2, 7)))
    if len(judged.passes) > MOST_TARGETS:
        lines.append(f"... and {len(judged.passes) - MOST_TARGETS} more targets, all of them in --json")
    return lines
