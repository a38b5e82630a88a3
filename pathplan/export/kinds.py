"""The kinds of table file there are. Adding one: a file with a `Kind`, and its name in `kinds` below."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from pathplan.errors import InputError
from pathplan.export.columns import Units
from pathplan.export.header import Header
from pathplan.table import JointTable

__all__ = ["MAX_BYTES", "MAX_ROWS", "Kind", "kind_of"]

MAX_ROWS = 20_000_000  # five hours at 1 kHz; with MAX_BYTES it bounds what reading a hostile file can cost
MAX_BYTES = 16_000_000_000  # of a file to be read: what MAX_ROWS rows of a six-axis arm take as text


@dataclass(frozen=True)
class Kind:
    """One kind of file.

    `write(chunks, stream, header, units)`: chunks of one table, in order, into a seekable binary stream; the
    same table in other chunks gives the same bytes. `read(file)`: the table, or InputError naming what is
    damaged. `read_header(file)`: the same for the header alone, at the cost of the header alone. `si`: the
    kind holds SI and nothing else. `check(file)` raises InputError where the kind needs what is not installed.
    """

    suffix: str
    write: Callable[[Iterator[JointTable], BinaryIO, Header, Units], None]
    read: Callable[[Path], JointTable]
    read_header: Callable[[Path], Header]
    si: bool = False
    check: Callable[[Path], object] = lambda file: None


def kinds() -> Mapping[str, Kind]:
    """Every kind by its suffix."""
    from pathplan.export import csv_file, jsonl_file, npz_file, parquet_file

    return {module.KIND.suffix: module.KIND for module in (csv_file, jsonl_file, npz_file, parquet_file)}


def kind_of(file: Path) -> Kind:
    """The kind of a file by its suffix. Raises InputError listing the known ones."""
    known = kinds()
    if file.suffix.lower() not in known:
        got = f'"{file.suffix}"' if file.suffix else "none"
        *others, last = known
        expected = f"{', '.join(others)} or {last}"
        raise InputError.at(str(file), f"unknown kind of table: expected {expected}, got {got}")
    return known[file.suffix.lower()]
