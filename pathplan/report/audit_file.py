"""The audit as a file beside the table: JSON, whole or not at all, replaced only by the same task's."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path, PurePath
from typing import Any

from pathplan.errors import InputError

__all__ = ["audit_name", "is_own_audit", "json_text"]

LARGEST = 1 << 28  # bytes of an earlier audit that are read to see whose it is


def audit_name(table: Path) -> Path:
    """Where the audit of a table goes: out/pick.csv -> out/pick.audit.json. Raises InputError for no file name."""
    if not table.name:
        raise InputError.at(str(table) or ".", "is a directory: expected the name of a file")
    return table.with_name(table.stem + ".audit.json")


def json_text(document: Mapping[str, Any]) -> str:
    """A document as JSON in ASCII, which every stream takes; the same document gives the same text."""
    return json.dumps(document, indent=2, allow_nan=False)


def is_own_audit(file: Path, meta: Mapping[str, Any]) -> bool:
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
