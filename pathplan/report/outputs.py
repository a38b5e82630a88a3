"""What a plan leaves behind: its tables and the audit beside the first, each whole or not there at all."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

from pathplan.errors import InputError
from pathplan.export import check_destination, may_replace, write_table
from pathplan.export.save import check_place, saving
from pathplan.table import JointTable

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["WHOLE", "audit_name", "check_outputs", "json_text", "marked", "write_plan"]

WHOLE = 200_000  # ticks up to which a table is held whole; longer ones are evaluated again for each file
LARGEST = 1 << 28  # bytes of an earlier audit that are read to see whose it is
TAKEN = "exists and is no earlier output of this task: choose another name or use --overwrite"


def audit_name(table: Path) -> Path:
    """Where the audit of a table goes: out/pick.csv -> out/pick.audit.json. Raises InputError for no file name."""
    if not table.name:
        raise InputError.at(str(table), "is a directory: expected the name of a file")
    return table.with_name(table.stem + ".audit.json")


def json_text(document: Mapping[str, Any]) -> str:
    """A document as JSON in ASCII, which every stream takes; the same document gives the same text."""
    return json.dumps(document, indent=2, allow_nan=False)


def check_outputs(
    tables: Sequence[Path], audit_file: Path | None, meta: Mapping[str, Any], *, overwrite: bool
) -> None:
    """Refuse before the long work what can't or may not be written. `meta` as in the table's header.

    Raises InputError: an unknown kind, a place where no file can be, a name given twice, or a file that exists and
    is neither our own output of the same task nor to be overwritten.
    """
    for index, table in enumerate(tables):
        check_destination(table, meta, overwrite=True)
        if table.resolve() in [other.resolve() for other in tables[:index]]:
            raise InputError.at(str(table), "given twice with -o")
        if table.exists() and not overwrite and not may_replace(table, meta):
            raise InputError.at(str(table), TAKEN)
    if audit_file is not None:
        check_place(audit_file)
        if audit_file.exists() and not overwrite and not _is_own_audit(audit_file, meta):
            raise InputError.at(str(audit_file), TAKEN)


def write_plan(
    plan: Plan,
    tables: Sequence[Path],
    audit_file: Path,
    document: Mapping[str, Any],
    *,
    overwrite: bool,
    tell: Callable[[str, int, int], None],
) -> None:
    """Write the tables and the document of the audit, which takes its place only when the tables are in theirs.

    A table that breaks limits says so in its header. Raises as `write_table` does.
    """
    with saving(audit_file) as stream:
        stream.write(json_text(document).encode() + b"\n")
        for table in tables:
            write_table(_pieces(plan, tell), table, overwrite=overwrite)


def marked(table: JointTable) -> JointTable:
    """The table with a header that says that it breaks limits."""
    return dataclasses.replace(table, meta={**table.meta, "breaks_limits": True})


def _pieces(plan: Plan, tell: Callable[[str, int, int], None]) -> Iterator[JointTable]:
    done = 0
    for piece in plan.table.chunks() if plan.ticks < WHOLE else plan.rows():
        tell("writing", done, plan.ticks + 1)
        yield piece if plan.audit.passed else marked(piece)
        done += len(piece)


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
