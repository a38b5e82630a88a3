"""What the screen says of the files that were written."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.export.columns import AS_ON_SCREENS
from pathplan.export.pvt import rounded_up
from pathplan.export.stretches import other_pieces
from pathplan.report.text import WIDTH, printable
from pathplan.units import format_value

if TYPE_CHECKING:
    from pathplan.report.outputs import Job

__all__ = ["pieces_note", "written_as_dict", "written_lines"]

FEW = 6  # files that are named one by one


def written_lines(jobs: Sequence[Job], audit_file: Path | None = None) -> list[str]:
    """Which files were written, and what interpolation between their rows costs."""
    if len(jobs) <= FEW:
        files = [f"{job.file} ({job.count} row{'s' * (job.count != 1)})" for job in jobs]
    else:
        total = sum(job.count for job in jobs)
        files = [f"{jobs[0].file} to {jobs[-1].file} ({len(jobs)} files, {total} rows)"]
    files += [str(audit_file)] if audit_file is not None else []
    lines = [printable(f"written: {', '.join(files)}" if files else "nothing written")]
    largest = _largest_errors(jobs)
    if largest:
        pvt = next(job.pvt for job in jobs if job.pvt is not None)
        errors = ", ".join(f"{name} {format_value(value, 3)} {unit}" for name, unit, value in largest)
        text = f"position and velocity every {format_value(1e3 * pvt.period)} ms: cubic Hermite between the rows "
        text += f"(measured at {pvt.measured}) is off by at most: {errors}"
        lines += textwrap.wrap(printable(text), WIDTH, subsequent_indent="  ")
    return lines


def written_as_dict(jobs: Sequence[Job], audit_file: Path | None) -> dict[str, Any]:
    """The files, and the largest error of interpolation by joint where there is any, for JSON."""
    tables = [str(job.file) for job in jobs]
    found: dict[str, Any] = {"files": {"tables": tables, "audit": None if audit_file is None else str(audit_file)}}
    largest = _largest_errors(jobs)
    if largest:
        found["interpolation_error"] = {f"{name}_{unit}": value for name, unit, value in largest}
    return found


def _largest_errors(jobs: Sequence[Job]) -> list[tuple[str, str, float]]:
    """Joint, unit and largest error over all files; none where nothing is interpolated."""
    pvts = [job.pvt for job in jobs if job.pvt is not None]
    if not pvts:
        return []
    worst = np.max([pvt.error for pvt in pvts], axis=0)
    found = []
    for name, kind, value in zip(pvts[0].joint_names, pvts[0].joint_kinds, worst.tolist(), strict=True):
        unit, factor = AS_ON_SCREENS.of(kind)
        found.append((name, unit, rounded_up(value * factor)))
    return found


def pieces_note(outputs: Sequence[Path], count: int) -> str:
    """A note on files of other stretches that lie beside those written; "" without any."""
    left = [path.name for output in outputs for path in other_pieces(output, count)]
    if not left:
        return ""
    named = ", ".join(left[:3]) + (f" and {len(left) - 3} more" if len(left) > 3 else "")
    return printable(f"note: {named} {'are' if len(left) > 1 else 'is'} of a motion with other stretches")
