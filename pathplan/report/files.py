"""Reports and figures as files, which replace nothing but earlier ones of the same task unless told to."""

from __future__ import annotations

import contextlib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pathplan.errors import InputError
from pathplan.export.save import check_place, saving
from pathplan.report.gather import picture_of
from pathplan.report.html import report_html, task_key

if TYPE_CHECKING:
    from pathplan.planning import Plan
    from pathplan.savings import Saving

__all__ = ["DRAWINGS", "PAGES", "check_picture", "note_of", "save_page", "write_report"]

LARGEST = 1 << 28  # bytes of an earlier file that are read to see whose it is
PAGES = (".html", ".htm")
DRAWINGS = (".png", ".svg", ".pdf")
TAKEN = "exists and is no earlier picture of this task: choose another name or ask to overwrite"


def write_report(
    plan: Plan, file: str | Path, *, savings: Sequence[Saving] | None = None, overwrite: bool = False
) -> None:
    """Write the report of a plan: one HTML file that needs nothing else. `savings` as `Plan.savings` finds them.

    The same plan gives the same bytes. Raises InputError for a suffix that is not .html, a place that can't be
    written, or a file that exists and is neither the report of the same task nor to be overwritten; PathplanError when
    the disk fails.
    """
    file = Path(file)
    check_picture(file, plan.meta, PAGES, overwrite=overwrite)
    save_page(report_html(picture_of(plan), savings), file)


def save_page(text: str, file: Path) -> None:
    """Write a page, whole or not at all."""
    with saving(file) as stream:
        stream.write(text.encode())


def check_picture(file: Path, meta: Mapping[str, Any], suffixes: Sequence[str], *, overwrite: bool) -> None:
    """Refuse before the long work what can't or may not be written; `meta` as in a table's header.

    Raises InputError as `write_report` does.
    """
    if file.suffix.lower() not in suffixes:
        got = f'"{file.suffix}"' if file.suffix else "none"
        raise InputError.at(str(file), f"unknown kind: expected {' or '.join(suffixes)}, got {got}")
    check_place(file)
    if file.exists() and not overwrite and not _is_own(file, meta):
        raise InputError.at(str(file), TAKEN)


def note_of(meta: Mapping[str, Any]) -> str:
    """What a picture's own record says, by which it is known again."""
    return f"pathplan-task {task_key(meta)}"


def _is_own(file: Path, meta: Mapping[str, Any]) -> bool:
    if not meta.get("task") or not meta.get("task_file"):
        return False
    marks = (note_of(meta).encode(), f'name="pathplan-task" content="{task_key(meta)}"'.encode())
    with contextlib.suppress(OSError):
        if file.stat().st_size <= LARGEST:
            content = file.read_bytes()
            return any(mark in content for mark in marks)
    return False
