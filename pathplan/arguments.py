"""What options of the command line mean: texts checked and made SI, one line of complaint naming the option."""

from __future__ import annotations

import contextlib
import math
from argparse import Namespace
from typing import TYPE_CHECKING

from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.report.judged import Judging
    from pathplan.report.line_screen import LineAudit
    from pathplan.report.outputs import Writing
    from pathplan.task import Task

__all__ = [
    "LONGEST_PERIOD",
    "jobs",
    "judging",
    "line_audit",
    "quantity",
    "refused",
    "remedies",
    "retimed",
    "speed_cap",
    "turning_cap",
    "writing",
]

SLOWEST = 1e-5  # m/s, as in task files
SLOWEST_TURN_DEG = 1e-3  # deg/s, as there
SLOWEST_TURN = math.radians(SLOWEST_TURN_DEG)
REDUCED_SPEED = 0.25  # m/s, ISO 10218-1
LONGEST_PERIOD = 10.0  # s
LINE_CYCLE = 0.004  # s, where nothing else is said
MOST_JOBS = 256
READING = ("time", "columns", "unit")


def quantity(text: str | None, dimension: str, option: str) -> float | None:
    """An option in SI. A bare number is in the unit of task files: mm/s, s."""
    from pathplan.units import parse_quantity

    if text is None:
        return None
    with contextlib.suppress(ValueError):
        if dimension != "ratio":  # 50 could be meant as 50 % or as 50 times
            return parse_quantity(float(text), dimension, option)
    return parse_quantity(text, dimension, option)


def refused(option: str, expected: str, got: str) -> InputError:
    """The complaint about an option's value."""
    from pathplan.units import toml_text

    return InputError.at(option, f"expected {expected}, got {toml_text(got)}")


def speed_cap(args: Namespace) -> float | None:
    """The cap on the tool speed, m/s. Raises InputError."""
    speed = REDUCED_SPEED if args.reduced_speed else quantity(args.speed, "speed", "--speed")
    if speed is not None and speed <= 0:
        raise refused("--speed", 'a speed above zero such as "250 mm/s"', args.speed)
    if speed is not None and speed < SLOWEST:
        raise refused("--speed", f"at least {1e3 * SLOWEST:g} mm/s", args.speed)
    return speed


def turning_cap(args: Namespace) -> float | None:
    """The cap on the tool's angular speed, rad/s. Raises InputError."""
    speed = quantity(args.turning_speed, "angular_speed", "--turning-speed")
    if speed is not None and speed <= 0:
        raise refused("--turning-speed", 'an angular speed above zero such as "90 deg/s"', args.turning_speed)
    if speed is not None and speed < SLOWEST_TURN:
        raise refused("--turning-speed", f"at least {SLOWEST_TURN_DEG:g} deg/s", args.turning_speed)
    return speed


def pace(args: Namespace) -> float | None:
    """The share of full speed, 0..1. Raises InputError."""
    value = quantity(args.pace, "ratio", "--pace")
    if value is not None and not 0 < value <= 1:
        raise refused("--pace", 'more than 0 % and at most 100 %, such as "50 %"', args.pace)
    return value


def cycle(args: Namespace) -> float | None:
    """The controller's cycle, s. Raises InputError."""
    from pathplan.task.load import CYCLES

    value = quantity(args.cycle, "time", "--cycle")
    if value is not None and not CYCLES[0] <= value <= CYCLES[1]:
        raise refused("--cycle", "a time from 50 us to 1 s", args.cycle)
    return value


def remedies(args: Namespace) -> float:
    """How long to search for remedies of a refused task, s. Raises InputError."""
    from pathplan.remedies.find import SECONDS

    value = quantity(args.remedies, "time", "--remedies")
    if value is not None and value < 0:
        raise refused("--remedies", 'a time such as "60 s", or "0 s" for no search', args.remedies)
    return SECONDS if value is None else value


def jobs(args: Namespace) -> int:
    """How many processes may work at once. Raises InputError."""
    from pathplan.workers import cores

    if args.jobs is None:
        return cores()
    if not args.jobs.isdecimal() or not 1 <= int(args.jobs[:9]) <= MOST_JOBS:
        raise refused("--jobs", f"a number of processes from 1 to {MOST_JOBS}", args.jobs)
    return int(args.jobs)


def judging(args: Namespace) -> Judging:
    """How a table is judged. Raises InputError."""
    from pathplan.export.foreign import Asked
    from pathplan.report.judged import Judging

    task = getattr(args, "task", None)
    if task is not None and args.tool is not None:
        raise InputError("argument --tool: not allowed with argument --task, which names its own tools")
    near = _near(getattr(args, "near", None))
    if near is not None and task is None:
        raise InputError("argument --near: only with --task, whose targets it is about")
    time, columns, unit = (getattr(args, name, None) for name in READING)
    asked = None if (time, columns, unit) == (None, None, None) else Asked.parse(time, columns, unit)
    return Judging(args.arm, args.tool, task, asked, near, speed_cap(args), turning_cap(args))


def _near(text: str | None) -> tuple[float, float] | None:
    """Distance (m) and angle (rad) from "0.5 mm, 0.1 deg", either of them alone too."""
    from pathplan.auditing.poses import NEAR
    from pathplan.units import parse_quantity

    if text is None:
        return None
    found: dict[str, float] = {}
    for part in text.split(","):
        for dimension in ("length", "angle"):
            with contextlib.suppress(InputError):
                found.setdefault(dimension, parse_quantity(part, dimension, "--near"))
    if not 0 < len(found) == len(text.split(",")) or min(found.values()) <= 0:
        raise refused("--near", 'a distance and an angle above zero, such as "0.5 mm, 0.1 deg"', text)
    return found.get("length", NEAR[0]), found.get("angle", NEAR[1])


def writing(args: Namespace) -> Writing:
    """How tables are written. Raises InputError."""
    from pathplan.export.columns import Units
    from pathplan.export.write import check_columns
    from pathplan.report.outputs import Writing

    def text(name: str) -> str | None:
        value: str | None = getattr(args, name, None)
        return value

    units, columns, pvt = text("write_units"), text("write_columns"), text("pvt")
    names = None if columns is None else tuple(columns.replace(",", " ").replace("tool speed", "tool_speed").split())
    if names is not None:
        check_columns(names, "--write-columns")
    period = quantity(pvt, "time", "--pvt")
    if period is not None and not 0 < period <= LONGEST_PERIOD:
        raise refused("--pvt", f"a time above zero and up to {LONGEST_PERIOD:g} s", str(pvt))
    if period is not None and names is not None:
        raise InputError("argument --write-columns: not allowed with argument --pvt, whose columns are its own")
    return Writing(
        overwrite=getattr(args, "overwrite", False),
        units=None if units is None else Units.parse(units, "--write-units"),
        columns=names,
        pvt=period,
        split=text("split") is not None,
    )


def retimed(args: Namespace) -> Task:
    """The task that follows the path of a table, with what the options change of it. Raises InputError."""
    import dataclasses
    from pathlib import Path

    import pathplan
    from pathplan.export.foreign import Asked, is_own, read_foreign
    from pathplan.retiming import REST, TOLERANCE, task_along

    file = Path(args.file)
    arm = pathplan.load_arm(args.arm).equipped(tool=args.tool, payload=args.payload)
    said = any(getattr(args, name) is not None for name in READING)
    if not is_own(file):
        asked = Asked.parse(args.time, args.columns, args.unit) if said else Asked()
        table = read_foreign(file, arm, asked).table
    elif said:
        complaint = "was written by pathplan, so its columns are known: say --time, --columns and --unit of others"
        raise InputError.at(args.file, complaint)
    else:
        table = pathplan.read_table(file)
    rest = quantity(args.rest, "time", "--rest")
    if rest is not None and rest <= 0:
        raise refused("--rest", 'a time above zero such as "50 ms"', args.rest)
    near = TOLERANCE if args.tolerance is None else _joint_tolerance(args.tolerance, arm)
    task = task_along(table, arm, tolerance=near, cycle=cycle(args), rest=REST if rest is None else rest, file=file)
    speed, turning = speed_cap(args), turning_cap(args)
    return dataclasses.replace(task, speed=speed, turning_speed=turning, pace=pace(args) or 1.0)


def _joint_tolerance(text: str, arm: Arm) -> float:
    """A distance in joint space, rad or arm lengths: from an angle, or from a length."""
    from pathplan.units import parse_quantity

    for dimension, unit in (("angle", 1.0), ("length", arm.length)):
        with contextlib.suppress(InputError):
            value = parse_quantity(text, dimension, "--tolerance") / unit
            if 1e-9 <= value <= 0.5:
                return value
    raise refused("--tolerance", 'an angle or a length above zero such as "0.01 deg" or "0.1 mm"', text)


def line_audit(args: Namespace) -> LineAudit:
    """The plan of a line between the ends that the options give, and its parts. Raises PathplanError."""
    import pathplan
    from pathplan.auditing.line import line_parts, place_from, plan_line
    from pathplan.report.line_screen import LineAudit

    for option in ("start", "goal", "arm"):
        if getattr(args, option) is None:
            named = {"start": "--from", "goal": "--to", "arm": "--arm"}[option]
            raise InputError(f"a single line takes --from, --to and --arm: {named} is missing")
    for option in (*READING, "task", "near"):
        if getattr(args, option) is not None:
            raise InputError(f"argument --{option}: only for a table")
    arm = pathplan.load_arm(args.arm).equipped(tool=args.tool)
    start, goal = place_from(args.start, arm, "--from"), place_from(args.goal, arm, "--to")
    plan, starts, able = plan_line(
        arm,
        start,
        goal,
        speed=speed_cap(args),
        turning_speed=turning_cap(args),
        cycle=cycle(args) or LINE_CYCLE,
        pace=pace(args) or 1.0,
    )
    return LineAudit(args.start, args.goal, plan, line_parts(plan), starts, able)
