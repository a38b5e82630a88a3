"""What the motion asks of the drives, as a block of lines."""

from __future__ import annotations

import math
from collections.abc import Iterator

from pathplan.auditing import Audit, DriveUse
from pathplan.auditing.drives import rpm
from pathplan.auditing.model import TOLERANCE
from pathplan.report.text import aligned, printable
from pathplan.units import format_value

__all__ = ["drive_lines", "number", "of"]

DIGITS = 3
_NOTHING = 1e-6  # of a newton metre, watt, joule or turn a minute


def drive_lines(audit: Audit) -> Iterator[str]:
    """A line for each drive: torque, motor speed, power and energy over the table; nothing where it has no torque.

    The percentage is of the continuous torque; that of the peak torque stands among the limits of the joints.
    """
    if not audit.drives:
        return
    table = [["drive", "peak torque", "rms", "used", "motor rpm", "peak power", "work", "returned"]]
    table += [_cells(drive) for drive in audit.drives]
    yield from aligned(table, [20, 16, 14, 9, 14, 10, 9, 9])
    work, returned = (sum(getattr(drive, name) for drive in audit.drives) for name in ("work", "returned"))
    yield (
        f"energy over the table: {number(work)} J put in, {number(returned)} J come back, "
        f"net {number(work - returned)} J"
    )


def _cells(drive: DriveUse) -> list[str]:
    unit = "N" if drive.kind == "prismatic" else "N m"
    share = drive.rms_share
    return [
        f"{printable(drive.name)}, {unit}",
        of(abs(drive.torque.peak), drive.torque.limit),
        of(drive.rms, drive.continuous),
        "-  " if share is None else f"{100 * share:.1f} %" + ("!" if share > 1 + TOLERANCE else " "),
        "-" if drive.motor_speed is None else of(rpm(drive.motor_speed), rpm(drive.motor_speed_limit)),
        f"{number(drive.power)} W",
        f"{number(drive.work)} J",
        f"{number(drive.returned)} J",
    ]


def of(value: float | None, limit: float | None) -> str:
    """A value of its limit, where there is one."""
    text = number(value or 0.0)
    return text if limit is None or math.isinf(limit) else f"{text} of {number(abs(limit))}"


def number(value: float) -> str:
    """N m, W, J or rpm in three digits; rounding of a drive that rests is nothing."""
    return format_value(value if abs(value) > _NOTHING else 0.0, DIGITS)
