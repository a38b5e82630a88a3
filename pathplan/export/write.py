"""Writing a table, whole or in chunks, and what may be overwritten."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from pathplan.errors import InputError
from pathplan.export.header import Header
from pathplan.export.kinds import MAX_ROWS, kind_of
from pathplan.export.save import check_place, saving
from pathplan.table import JointTable

__all__ = ["check_destination", "may_replace", "write_table"]

COLUMNS = ("time", "position", "velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")
BLOCK = 4096  # rows formatted at once: bounds memory whatever the size of the chunks that come in


def write_table(
    table: JointTable | Iterable[JointTable], file: str | Path, *, overwrite: bool = False
) -> None:
    """Write a table, or the chunks of one in order, to a file whose suffix says the kind: .csv or .npz.

    CSV holds mm and deg with steps counted from 1; NPZ holds SI with steps counted from 0. Reading NPZ back
    gives the same table to the last bit. Reading CSV back gives times, torques and steps exactly, joint
    values, tool points and tool speeds within one unit in the last place (mm and deg are one rounding away
    from m and rad), and rotations within 2e-15, since they pass through quaternions.
    The same input gives the same bytes. The file is replaced in one instant after all is on disk; chunks are
    written as they come, so memory is bounded by the size of a chunk.

    Raises InputError for an unknown suffix, a place that can't be written, values that are not finite, chunks
    that don't belong together, or a file that exists and is neither our own output of the same task nor to be
    overwritten; PathplanError when the disk fails.
    """
    file = Path(file)
    kind = kind_of(file)
    check_place(file)
    chunks = iter([table] if isinstance(table, JointTable) else table)
    first = next(chunks, None)
    if first is None:
        raise InputError.at(str(file), "there are no rows to write")
    check_destination(file, first, overwrite=overwrite)
    header = Header.of(first)
    with saving(file) as stream:
        kind.write(_blocks(first, chunks, file), stream, header)


def check_destination(
    file: str | Path, table: JointTable | Mapping[str, Any], *, overwrite: bool = False
) -> None:
    """Refuse now, before long work, what `write_table` would refuse later. `table` may be its meta alone.

    Raises InputError: unknown suffix, missing folder, a directory, or a file that may not be replaced.
    """
    file = Path(file)
    kind_of(file)
    check_place(file)
    if file.exists() and not overwrite and not may_replace(file, table):
        raise InputError.at(
            str(file), "exists and is no earlier output of this task: choose another name or ask to overwrite"
        )


def may_replace(file: str | Path, table: JointTable | Mapping[str, Any]) -> bool:
    """Whether an existing file is our own earlier output of the same task (its title and its file name).

    `table` may be its meta alone. A table that names no task never replaces anything unasked.
    """
    file = Path(file)
    meta = table.meta if isinstance(table, JointTable) else table
    if not meta.get("task") or not meta.get("task_file"):
        return False
    try:
        before = kind_of(file).read_header(file).meta
    except (InputError, OSError):
        return False
    return _task_of(before) == _task_of(meta)


def _task_of(meta: Mapping[str, Any]) -> tuple[str, str]:
    return str(meta.get("task", "")), PurePath(str(meta.get("task_file", ""))).name


def _blocks(first: JointTable, rest: Iterator[JointTable], file: Path) -> Iterator[JointTable]:
    """The chunks in blocks of bounded size, each checked: finite, and of one table."""
    row = 0
    chunk: JointTable | None = first
    while chunk is not None:
        _check_belongs(first, chunk, row, file)
        for block in chunk.chunks(BLOCK):
            _check_finite(block, row, file)
            row += len(block)
            if row > MAX_ROWS:
                raise InputError.at(str(file), f"more than {MAX_ROWS} rows: write the table in several files")
            yield block
        chunk = next(rest, None)


def _check_belongs(first: JointTable, chunk: JointTable, row: int, file: Path) -> None:
    for name in ("joint_names", "joint_kinds", "cycle", "marks", "meta"):
        if getattr(first, name) != getattr(chunk, name):
            raise InputError.at(str(file), f"chunk at row {row + 1}: {name} differs from the first chunk's")
    for name in COLUMNS:
        if (getattr(first, name) is None) != (getattr(chunk, name) is None):
            raise InputError.at(str(file), f"chunk at row {row + 1}: has other columns than the first chunk")


def _check_finite(block: JointTable, row: int, file: Path) -> None:
    for name in COLUMNS:
        values = getattr(block, name)
        if values is None or np.isfinite(values).all():
            continue
        at = np.argwhere(~np.isfinite(values))[0]
        joint = f" of {block.joint_names[at[1]]}" if values.ndim == 2 else ""
        raise InputError.at(
            str(file), f"row {row + at[0] + 1}: {name}{joint} is not a finite number: nothing written"
        )
