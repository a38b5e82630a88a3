"""What a plan or a table leaves behind: tables, and a plan's audit beside the first; all of it or nothing."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

from pathplan.errors import InputError
from pathplan.export import check_destination, check_units, may_replace, write_table
from pathplan.export.columns import Units
from pathplan.export.pvt import Pvt, pvt_of_plan, pvt_of_table
from pathplan.export.save import batched, check_place
from pathplan.export.stretches import numbered, plans_of_stretches, tables_of_stretches
from pathplan.table import JointTable

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = [
    "WHOLE",
    "Job",
    "Writing",
    "audit_name",
    "check_jobs",
    "check_outputs",
    "jobs_of_plan",
    "jobs_of_table",
    "json_text",
    "marked",
    "write_jobs",
]

WHOLE = 200_000  # ticks up to which a table is held whole; longer ones are evaluated again for each file
LARGEST = 1 << 28  # bytes of an earlier audit that are read to see whose it is
TAKEN = "exists and is no earlier output of this task: choose another name or use --overwrite"


@dataclass(frozen=True)
class Writing:
    """How tables are written: what may be overwritten, units and columns as `write_table` takes them.

    `pvt` (s): rows of position and velocity at this period in place of the table; `split`: one file a stretch.
    """

    overwrite: bool = False
    units: Units | None = None
    columns: tuple[str, ...] | None = None
    pvt: float | None = None
    split: bool = False


@dataclass(frozen=True, eq=False)
class Job:
    """One file to be written: its rows in pieces, evaluated as they are asked for, and how many there are."""

    file: Path
    rows: Callable[[], Iterator[JointTable]]
    count: int
    pvt: Pvt | None


def audit_name(table: Path) -> Path:
    """Where the audit of a table goes: out/pick.csv -> out/pick.audit.json. Raises InputError for no file name."""
    if not table.name:
        raise InputError.at(str(table), "is a directory: expected the name of a file")
    return table.with_name(table.stem + ".audit.json")


def json_text(document: Mapping[str, Any]) -> str:
    """A document as JSON in ASCII, which every stream takes; the same document gives the same text."""
    return json.dumps(document, indent=2, allow_nan=False)


def check_outputs(tables: Sequence[Path], audit_file: Path | None, meta: Mapping[str, Any], writing: Writing) -> None:
    """Refuse before the long work what can't or may not be written. `meta` as in the table's header.

    Raises InputError: an unknown kind, a place where no file can be, a name given twice, or a file that exists and
    is neither our own output of the same task nor to be overwritten.
    """
    for index, table in enumerate(tables):
        check_destination(table, meta, overwrite=True)
        if writing.units is not None:
            check_units(writing.units, table)
        if table.resolve() in [other.resolve() for other in tables[:index]]:
            raise InputError.at(str(table), "given twice with -o")
        if not writing.split:
            _check_free(table, meta, writing)
    if audit_file is not None:
        check_place(audit_file)
        if audit_file.exists() and not writing.overwrite and not _is_own_audit(audit_file, meta):
            raise InputError.at(str(audit_file), TAKEN)


def check_jobs(jobs: Sequence[Job], meta: Mapping[str, Any], writing: Writing) -> None:
    """Refuse files of single stretches that exist and may not be replaced: their names are known late."""
    for job in jobs:
        check_place(job.file)
        _check_free(job.file, meta, writing)


def _check_free(file: Path, meta: Mapping[str, Any], writing: Writing) -> None:
    if file.exists() and not writing.overwrite and not may_replace(file, meta):
        raise InputError.at(str(file), TAKEN)


def jobs_of_plan(plan: Plan, outputs: Sequence[Path], writing: Writing) -> list[Job]:
    """The files that a plan becomes. A table that breaks limits says so in its header. Raises InputError."""
    stretches = plans_of_stretches(plan) if writing.split else [(plan, {})]
    if not stretches:
        raise InputError("split: nothing moves in this plan")
    meta = {} if plan.audit.passed else {"breaks_limits": True}
    jobs = []
    for number, (piece, place) in enumerate(stretches, start=1):
        more = {**meta, **({"stretch": dict(place)} if place else {})}
        pvt = None if writing.pvt is None else pvt_of_plan(piece, writing.pvt)
        rows = _rows_of(piece) if pvt is None else pvt.rows
        count = piece.ticks + 1 if pvt is None else pvt.count
        for output in outputs:
            file = numbered(output, number, len(stretches)) if writing.split else output
            jobs.append(Job(file, _with_meta(rows, more), count, pvt))
    return jobs


def jobs_of_table(table: JointTable, outputs: Sequence[Path], writing: Writing) -> list[Job]:
    """The files that a table becomes. Raises InputError for what the table does not tell."""
    stretches = tables_of_stretches(table) if writing.split else [table]
    jobs = []
    for number, piece in enumerate(stretches, start=1):
        pvt = None if writing.pvt is None else pvt_of_table(piece, writing.pvt)
        for output in outputs:
            file = numbered(output, number, len(stretches)) if writing.split else output
            jobs.append(
                Job(file, piece.chunks if pvt is None else pvt.rows, len(piece) if pvt is None else pvt.count, pvt)
            )
    return jobs


def _rows_of(plan: Plan) -> Callable[[], Iterator[JointTable]]:
    return lambda: plan.table.chunks() if plan.ticks < WHOLE else plan.rows()


def _with_meta(rows: Callable[[], Iterator[JointTable]], more: Mapping[str, Any]) -> Callable[[], Iterator[JointTable]]:
    if not more:
        return rows
    return lambda: (dataclasses.replace(piece, meta={**piece.meta, **more}) for piece in rows())


def write_jobs(
    jobs: Sequence[Job],
    writing: Writing,
    tell: Callable[[str, int, int], None],
    *,
    audit: tuple[Path, Mapping[str, Any]] | None = None,
) -> None:
    """Write all files, and the document of a plan's audit; they take their places together, the audit last.

    Raises as `write_table` does; then nothing has changed.
    """
    with batched() as batch:
        done, total = 0, sum(job.count for job in jobs)
        for job in jobs:
            pieces = _told(job.rows(), tell, done, total)
            options: dict[str, Any] = {"units": writing.units, "columns": writing.columns}
            write_table(pieces, job.file, overwrite=writing.overwrite, batch=batch, **options)
            done += job.count
        if audit is not None:
            with batch.part(audit[0]) as stream:
                stream.write(json_text(audit[1]).encode() + b"\n")


def _told(
    pieces: Iterator[JointTable], tell: Callable[[str, int, int], None], done: int, total: int
) -> Iterator[JointTable]:
    """The pieces as they come, telling how far they are."""
    for piece in pieces:
        tell("writing", done, total)
        yield piece
        done += len(piece)


def marked(table: JointTable) -> JointTable:
    """The table with a header that says that it breaks limits."""
    return dataclasses.replace(table, meta={**table.meta, "breaks_limits": True})


def _is_own_audit(file: Path, meta: Mapping[str, Any]) -> bool:
    """Whether an existing file is the audit of the same task (its title and file name) as a table's `meta` says."""
    if not meta.get("task") or not meta.get("task_file"):
        return False
    try:
        if file.stat().st_size > LARGEST:
            return False
        before = json.loads(file.read_bytes())
    except (OSError, ValueError, RecursionError):
        return False
    if not isinstance(before, dict) or "pathplan" not in before or "audit" not in before:
        return False
    return _task_of(before) == _task_of(meta)


def _task_of(meta: Mapping[str, Any]) -> tuple[str, str]:
    return str(meta.get("task")), PurePath(str(meta.get("task_file"))).name
