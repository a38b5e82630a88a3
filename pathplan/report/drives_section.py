"""What the motion asks of the drives, as a section of a page."""

from __future__ import annotations

from collections.abc import Iterator

from pathplan.auditing import DriveUse
from pathplan.auditing.drives import rpm
from pathplan.auditing.model import TOLERANCE
from pathplan.report.drives import number, of
from pathplan.report.gather import Picture
from pathplan.report.markup import esc, tag
from pathplan.report.sections import at, bar, section, table

__all__ = ["drives_section"]

HEAD = ("drive", "peak torque", "rms torque", "of continuous", "motor speed", "peak power", "work", "returned")


def drives_section(picture: Picture) -> str:
    """Torque, motor speed, power and energy of each drive over the table; '' where it has no torque."""
    drives = picture.audit.drives
    if not drives:
        return ""
    rows = [list(_cells(drive)) for drive in drives]
    work, returned = (sum(getattr(drive, name) for drive in drives) for name in ("work", "returned"))
    about = (
        f"Over the whole table, waits and holding included. {number(work)} J are put in, {number(returned)} J come "
        f"back, net {number(work - returned)} J."
    )
    return section("drives", "Drives", tag("p", about), table("Drives", HEAD, rows, numbers=(1, 2, 4, 5, 6, 7)))


def _cells(drive: DriveUse) -> Iterator[str]:
    unit = "N" if drive.kind == "prismatic" else "N m"
    yield esc(drive.name)
    yield f"{of(abs(drive.torque.peak), drive.torque.limit)} {unit}"
    yield f"{of(drive.rms, drive.continuous)} {unit}"
    share = drive.rms_share
    if share is None:
        yield "–"
    else:
        over = share > 1 + TOLERANCE
        sign = tag("span", " ✕", title="exceeds the limit") if over else ""
        yield tag("b", f"{max(100 * share, 100.1 if over else 0):.1f} %") + sign + bar(share, over)
    speed = rpm(drive.motor_speed)
    yield "–" if speed is None else f"{of(speed, rpm(drive.motor_speed_limit))} rpm"
    yield f"{number(drive.power)} W {at(drive.power_time)}"
    yield f"{number(drive.work)} J"
    yield f"{number(drive.returned)} J"
