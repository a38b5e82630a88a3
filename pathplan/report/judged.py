"""A table from a file, judged against the arm it belongs to, and what the screen says of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

import pathplan
from pathplan.errors import InputError
from pathplan.report.screen import audit_screen, verdict
from pathplan.report.text import printable
from pathplan.table import JointTable

if TYPE_CHECKING:
    from pathplan.arm import Arm
    from pathplan.auditing import Audit

__all__ = ["Judged", "first_exceedance", "judge_file", "judged_as_dict", "judged_screen", "written_line"]


@dataclass(frozen=True)
class Judged:
    """A table that was read, and what its arm's limits say of it.

    `notes`: what people should know of how it was judged. Without an arm there is no audit, and the note says why.
    `breaks`: which limit it breaks, "" for none known.
    """

    file: str
    table: JointTable
    arm: Arm | None
    audit: Audit | None
    notes: tuple[str, ...]
    breaks: str


def judge_file(file: str, arm_file: str | None, tool: str | None) -> Judged:
    """Read a table and judge it against an arm file; None: the one its header names, if that lies beside it.

    The arm carries `tool`; None: the tool that the header names, or the bare mechanical interface. Raises
    InputError for a file that can't be read, or an arm or tool that can't be this table's.
    """
    table = pathplan.read_table(file)
    arm, notes = _arm_of(table, Path(file), arm_file)
    audit = None
    if arm is not None:
        arm = _with_tool(arm, table, tool)
        try:
            audit = pathplan.audit(table, arm)
        except InputError as error:
            raise InputError.at(file, str(error).removeprefix("table: ")) from None
    breaks = ""
    if audit is not None and not audit.passed:
        breaks = first_exceedance(audit)
    elif table.meta.get("breaks_limits"):
        breaks = "its header says so"
    return Judged(file, table, arm, audit, notes, breaks)


def first_exceedance(audit: Audit) -> str:
    """The first finding that breaks a limit, and how many more there are."""
    texts = [finding.text for finding in audit.findings if finding.level == "exceedance"]
    return texts[0] + (f" (and {len(texts) - 1} more)" if len(texts) > 1 else "")


def _arm_of(table: JointTable, file: Path, given: str | None) -> tuple[Arm | None, tuple[str, ...]]:
    """The arm, and notes on what does not match the table's header."""
    name, sources = table.meta.get("arm"), table.meta.get("sources")
    sources = sources if isinstance(sources, Mapping) else {}
    if given is not None:
        arm = pathplan.load_arm(given)
    else:
        others = [PurePath(str(source)).name for source in sources if source != table.meta.get("task_file")]
        beside = [file.with_name(other) for other in others if other and file.with_name(other).is_file()]
        if not beside:
            named = f"names {', '.join(others)}, which is not beside it" if others else "names no arm file"
            return None, (f"{file}: not judged, its header {named}: give --arm FILE",)
        arm = pathplan.load_arm(beside[0])
    notes = []
    if name is not None and name != arm.name:
        notes.append(f"the table was planned for arm {name}, and is judged against {arm.name}")
    for source, digest in arm.sources.items():
        if sources.get(source, digest) != digest:
            notes.append(f"{source} has changed since the table was planned")
    return arm, tuple(notes)


def _with_tool(arm: Arm, table: JointTable, given: str | None) -> Arm:
    name = table.meta.get("tool") if given is None else given
    if given is None and name not in arm.tools:
        return arm
    return arm.equipped(tool=name)


def judged_as_dict(judged: Judged, written: Sequence[Path]) -> dict[str, Any]:
    """The table's meta, its verdict and audit as plain types for JSON; `passed` is None where nothing judged it."""
    passed = None if judged.audit is None and not judged.breaks else not judged.breaks
    return {
        **judged.table.meta,
        "table": judged.file,
        "passed": passed,
        "notes": list(judged.notes),
        "audit": judged.audit and judged.audit.to_dict(),
        "files": {"tables": [str(file) for file in written], "audit": None},
    }


def judged_screen(judged: Judged, written: Sequence[Path] | None) -> str:
    """What was judged against what, and the audit; or, where files were to be written, the verdict and these."""
    lines = [f"note: {note}" for note in judged.notes]
    if judged.arm is not None and judged.audit is not None:
        how = f"table {judged.file}, judged against {judged.arm.name} with tool {judged.arm.tool.name}"
        lines.insert(0, how if written is None else f"{how}: {verdict(judged.audit)}")
    if written is not None:
        lines.append(written_line(written, len(judged.table)))
    text = "\n".join(map(printable, lines))
    if written is None and judged.audit is not None:
        text += "\n\n" + audit_screen(judged.audit)
    return text


def written_line(tables: Sequence[Path], rows: int, audit_file: Path | None = None) -> str:
    """Which files were written."""
    files = [f"{table} ({rows} row{'s' * (rows != 1)})" for table in tables]
    files += [str(audit_file)] if audit_file is not None else []
    return printable(f"written: {', '.join(files)}" if files else "nothing written")
