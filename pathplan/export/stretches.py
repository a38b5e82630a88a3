"""A motion cut at its stop points: one table a stretch, each from rest to rest on its own clock."""

from __future__ import annotations

import contextlib
import dataclasses
import re
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.errors import InputError
from pathplan.table import JointTable, Mark, tick_times

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["numbered", "other_pieces", "plans_of_stretches", "tables_of_stretches"]

AT_REST = 1e-9  # of the largest velocity or acceleration of the joint


def plans_of_stretches(plan: Plan) -> list[tuple[Plan, Mapping[str, Any]]]:
    """A plan for every stretch, and what its header says of its place: number, start, waits and marks around it.

    Rows of a stretch are evaluated from the same timing as those of the whole.
    """
    found: list[tuple[Plan, dict[str, Any]]] = []
    before: dict[str, Any] = {}
    names = [step.mark for step in plan.task.steps]
    cycle = plan.task.cycle
    for part in plan.parts:
        if part.stretch is None:
            assert part.wait is not None
            side, place = ("before", before) if not found else ("after", found[-1][1])
            waited = float(tick_times(part.last - part.first, cycle))
            place[f"wait_{side}_s"] = place.get(f"wait_{side}_s", 0.0) + waited
            if names[part.wait.step] is not None:
                place.setdefault(f"marks_{side}", []).append(names[part.wait.step])
            continue
        alone = dataclasses.replace(part, first=0, last=part.last - part.first)
        place = {"number": len(found) + 1, "of": 0, "start_s": float(tick_times(part.first, cycle)), **before}
        before = {}
        found.append((dataclasses.replace(plan, parts=(alone,)), place))
    for _, place in found:
        place["of"] = len(found)
    return list(found)


def tables_of_stretches(table: JointTable) -> list[JointTable]:
    """The table cut where all its joints rest, by its columns of velocity and acceleration.

    Raises InputError for a table without them, or one that does not start and end at rest.
    """
    if table.velocity is None or table.acceleration is None:
        raise InputError("split: the table has no velocity and acceleration, by which its stop points could be told")
    moving = np.zeros(len(table), dtype=bool)
    for values in (table.velocity, table.acceleration):
        moving |= (np.abs(values) > AT_REST * np.abs(values).max(axis=0)).any(axis=1)
    if moving[0] or moving[-1]:
        raise InputError(f"split: the table does not {'start' if moving[0] else 'end'} at rest")
    edges = np.flatnonzero(np.diff(moving.astype(np.int8)))
    starts, ends = edges[0::2], edges[1::2] + 1
    if not len(starts):
        raise InputError("split: nothing moves in this table")
    borders = [*starts.tolist()[1:], len(table) - 1]
    pieces = []
    for k, (first, last, following) in enumerate(zip(starts.tolist(), ends.tolist(), borders, strict=True)):
        before = first if k == 0 else 0
        place: dict[str, Any] = {"number": k + 1, "of": len(starts), "start_s": float(table.time[first])}
        place |= _around(table, 0, before, "before") | _around(table, last, following, "after")
        pieces.append(_cut(table, first, last, place))
    return pieces


def _around(table: JointTable, first: int, last: int, side: str) -> dict[str, Any]:
    """The rest between two rows, and the marks that fall into it."""
    if first == last:
        return {}
    waited = table.time[last] - table.time[first] if table.cycle is None else tick_times(last - first, table.cycle)
    found: dict[str, Any] = {f"wait_{side}_s": float(waited)}
    marks = [mark.name for mark in table.marks if first < mark.row <= last]
    return found | ({f"marks_{side}": marks} if marks else {})


def _cut(table: JointTable, first: int, last: int, place: dict[str, Any]) -> JointTable:
    """Rows first to last, both included, with their own clock and marks."""
    piece = table.part(first, last + 1)
    time = piece.time - piece.time[0] if table.cycle is None else tick_times(np.arange(len(piece)), table.cycle)
    marks = tuple(
        Mark(mark.name, float(time[mark.row - first]), mark.row - first, mark.step)
        for mark in table.marks
        if first < mark.row <= last
    )
    step = np.concatenate([piece.step[1:2], piece.step[1:]])  # the first row ends the step before
    return dataclasses.replace(piece, time=time, step=step, marks=marks, meta={**table.meta, "stretch": place})


def numbered(file: Path, number: int, count: int) -> Path:
    """The name of one of so many: out/pick.csv -> out/pick-03.csv."""
    return file.with_name(f"{file.stem}-{number:0{len(str(count))}}{file.suffix}")


def other_pieces(file: Path, count: int) -> list[Path]:
    """Files named like the pieces of this one that are none of so many: of a motion with other stretches."""
    names = {numbered(file, number, count).name for number in range(1, count + 1)}
    pattern = re.compile(re.escape(file.stem) + r"-\d{1,6}" + re.escape(file.suffix))
    with contextlib.suppress(OSError):
        return sorted(path for path in file.parent.iterdir() if pattern.fullmatch(path.name) and path.name not in names)
    return []
