"""Rows of a table as numbers in the units of a file, and back: what CSV, JSON Lines and Parquet share."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.export.columns import JOINT_FIELDS, Array, Group, Units, groups
from pathplan.export.header import Header
from pathplan.quaternions import rotations, steady_quaternions
from pathplan.table import JointTable, tick_times

__all__ = ["Numbers", "clean_times", "faults", "numbers", "table_of", "tabled"]

Numbers = tuple[list[str], Array, NDArray[np.int64]]


def numbers(chunks: Iterator[JointTable], header: Header, units: Units) -> Iterator[Numbers]:
    """For each chunk the names of the columns, all numbers but those of step (N, C - 1), and step (N,) from 1.

    Quaternions of the pose don't change sign from one row to the next, nor from chunk to chunk.
    """
    known = groups(header.joint_names, header.joint_kinds, units)
    before = None
    for table in chunks:
        present = [group for group in known if getattr(table, group.field) is not None]
        parts = []
        for group in present[:-1]:
            if group.field == "time":
                values = clean_times(table)[:, None]
            elif group.field == "pose":
                assert table.pose is not None
                quaternions = steady_quaternions(table.pose[:, :3, :3], before)
                before = quaternions[-1]
                values = np.hstack([table.pose[:, :3, 3], quaternions])
            else:
                values = getattr(table, group.field).reshape(len(table), -1)
            parts.append(values * np.array(group.factors))
        block = np.hstack(parts) + 0.0  # adding zero turns -0.0 into 0.0
        yield [column for group in present for column in group.columns], block, table.step + 1


def clean_times(table: JointTable) -> Array:
    """Times; those that are ticks but for the rounding of a product become the float that prints cleanly."""
    if table.cycle is None:
        return table.time
    ticks = np.rint(table.time / table.cycle)
    if np.abs(ticks).max() > 2**52:
        return table.time
    clean = tick_times(ticks.astype(np.int64), table.cycle)
    return np.where(np.abs(clean - table.time) <= 4 * np.spacing(np.abs(table.time)), clean, table.time)


def faults(block: Array, present: Sequence[Group]) -> tuple[int, int, str] | None:
    """The first fault of numbers (N, C) in the columns of the groups: row, column, complaint; None without one.

    Faults are what is not finite, quaternions that are none, steps that are no step.
    """
    bad = np.argwhere(~np.isfinite(block))
    if len(bad):
        row, column = bad[0].tolist()
        return row, column, f"expected a finite number, got {block[row, column]}"
    column = 0
    for group in present:
        values = block[:, column : column + len(group.columns)]
        if group.field == "pose":
            with np.errstate(over="ignore"):
                length = np.linalg.norm(values[:, 3:], axis=1)
            off = np.flatnonzero(np.abs(length - 1) > 1e-9)
            if len(off):
                got = f"got length {length[off[0]]:.6g}"
                return int(off[0]), column + 3, f"expected a quaternion of length 1, {got}"
        if group.field == "step":
            steps = values[:, 0]
            off = np.flatnonzero((steps != np.rint(steps)) | (steps < 1) | (steps > 2**31))
            if len(off):
                got = f"got {steps[off[0]]:g}"
                return int(off[0]), column, f"expected the number of a step, 1 or above, {got}"
        column += len(group.columns)
    return None


def table_of(blocks: Sequence[Array], present: Sequence[Group], header: Header, where: str) -> JointTable:
    """The table of blocks (rows, columns) whose columns are those of the groups in order, faultless.

    Raises InputError at `where` for numbers that no table can hold.
    """
    arrays: dict[str, Any] = {}
    start = 0
    for group in present:  # one group at a time, so that the peak of memory is little above the table itself
        stop = start + len(group.columns)
        values = np.concatenate([block[:, start:stop] for block in blocks]) / np.array(group.factors)
        arrays[group.field] = values if group.field in ("pose", *JOINT_FIELDS) else values[:, 0]
        start = stop
    arrays["step"] = arrays["step"].astype(np.int64) - 1
    if "pose" in arrays:
        arrays["pose"] = _poses(arrays["pose"])
    for array in arrays.values():
        array.setflags(write=False)  # ours alone: spares the table its copy
    return tabled(arrays, header, where)


def tabled(arrays: dict[str, Any], header: Header, where: str) -> JointTable:
    """A table of SI arrays by field and all that its header says. Raises InputError at `where`."""
    try:
        return JointTable(
            **arrays,
            joint_names=header.joint_names,
            joint_kinds=header.joint_kinds,
            cycle=header.cycle,
            marks=header.marks,
            meta=header.meta,
        )
    except InputError as error:
        raise InputError.at(where, str(error).removeprefix("table: ")) from None


def _poses(values: Array) -> Array:
    poses = np.zeros((len(values), 4, 4))
    poses[:, :3, 3] = values[:, :3]
    poses[:, :3, :3] = rotations(values[:, 3:])
    poses[:, 3, 3] = 1.0
    return poses
