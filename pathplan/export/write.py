"""Writing a table, whole or in chunks, and what may be overwritten."""

from __future__ import annotations

import dataclasses
from collections.abc import Collection, Iterable, Iterator, Mapping
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from pathplan.errors import InputError
from pathplan.export.columns import AS_ON_SCREENS, Units
from pathplan.export.header import Header
from pathplan.export.kinds import MAX_ROWS, kind_of
from pathplan.export.save import Batch, check_place, saving
from pathplan.table import JointTable
from pathplan.tomlfile import listed, nearest
from pathplan.units import toml_text

__all__ = [
    "ALWAYS",
    "OPTIONAL",
    "check_columns",
    "check_destination",
    "check_units",
    "chosen_columns",
    "may_replace",
    "write_table",
]

ALWAYS = ("time", "position", "step")  # a table without them is none
OPTIONAL = ("velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")
COLUMNS = ("time", "position", "velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")
BLOCK = 4096  # rows formatted at once: bounds memory whatever the size of the chunks that come in


def write_table(
    table: JointTable | Iterable[JointTable],
    file: str | Path,
    *,
    overwrite: bool = False,
    units: str | Units | None = None,
    columns: Collection[str] | None = None,
    batch: Batch | None = None,
) -> None:
    """Write a table, or the chunks of one in order, to a file: .csv, .jsonl, .npz or .parquet, by its suffix.

    NPZ holds SI with steps counted from 0, and reading it back gives the same table to the last bit. The
    other kinds hold mm and deg, or `units` such as "rad, m", with steps counted from 1. Reading them back
    gives times, torques and steps exactly, joint values, tool points and tool speeds within one unit in the
    last place (mm and deg are one rounding away from m and rad), and rotations within 2e-15, since they pass
    through quaternions. `columns` names the fields that are written beside time, position and step: of
    "velocity", "acceleration", "jerk", "torque", "pose" and "tool_speed"; None: all there are.
    The same input gives the same bytes. The file is replaced in one instant after all is on disk, or when the
    `batch` ends; chunks are written as they come, so memory is bounded by the size of a chunk.

    Raises InputError for an unknown suffix, unit or column, a place that can't be written, values that are
    not finite, chunks that don't belong together, or a file that exists and is neither our own output of the
    same task nor to be overwritten; PathplanError when the disk fails.
    """
    file = Path(file)
    kind = kind_of(file)
    kind.check(file)
    chosen = check_units(units, file)
    check_place(file)
    chunks = iter([table] if isinstance(table, JointTable) else table)
    if columns is not None:
        chunks = chosen_columns(chunks, columns, file)
    first = next(chunks, None)
    if first is None:
        raise InputError.at(str(file), "there are no rows to write")
    check_destination(file, first, overwrite=overwrite)
    header = Header.of(first)
    with saving(file) if batch is None else batch.part(file) as stream:
        kind.write(_blocks(first, chunks, file), stream, header, chosen)


def check_units(units: str | Units | None, file: str | Path) -> Units:
    """The units in which a file is to be written. Raises InputError for unknown ones, or where there is no choice."""
    if units is None:
        return AS_ON_SCREENS
    if kind_of(Path(file)).si:
        expected = "holds SI (rad, m) and nothing else: units can be chosen for other kinds of file"
        raise InputError.at(str(file), expected)
    return units if isinstance(units, Units) else Units.parse(units, "units")


def check_columns(columns: Collection[str], where: str = "columns") -> None:
    """Raises InputError at `where` for a name that is no column's."""
    for name in columns:
        if name not in OPTIONAL and name not in ALWAYS:
            expected = f"expected {listed(OPTIONAL)}"
            raise InputError.at(where, f"{expected}, got {toml_text(name)}{nearest(name, OPTIONAL)}")


def chosen_columns(chunks: Iterable[JointTable], columns: Collection[str], file: Path) -> Iterator[JointTable]:
    """The chunks with only these of the optional columns. Raises InputError for one unknown or not there."""
    check_columns(columns)
    left_out: dict[str, Any] = {name: None for name in OPTIONAL if name not in columns}
    for chunk in chunks:
        for name in columns:
            if name in OPTIONAL and getattr(chunk, name) is None:
                raise InputError.at(str(file), f"the table has no {name} to be written")
        yield dataclasses.replace(chunk, **left_out)


def check_destination(file: str | Path, table: JointTable | Mapping[str, Any], *, overwrite: bool = False) -> None:
    """Refuse now, before long work, what `write_table` would refuse later. `table` may be its meta alone.

    Raises InputError: unknown suffix, missing folder, a directory, or a file that may not be replaced.
    """
    file = Path(file)
    kind_of(file).check(file)
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
        raise InputError.at(str(file), f"row {row + at[0] + 1}: {name}{joint} is not a finite number: nothing written")
