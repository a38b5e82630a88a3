"""Joint tables as JSON Lines: one object a row with the columns of the CSV file, all lines alike.

The first row has one key more, "pathplan": the header as a JSON text. Numbers are the shortest text that reads
back as the same float. Steps and rows count from 1.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np

from pathplan.errors import InputError
from pathplan.export.columns import Array, Group, Units, fitting, units_from, units_text
from pathplan.export.header import MAX_HEADER, Header, from_json, header_as_dict, header_from_dict, rows_from
from pathplan.export.kinds import MAX_ROWS, Kind
from pathplan.export.rows import faults, numbers, table_of
from pathplan.table import JointTable

HEADER = "pathplan"  # the first row's key
ROOM = 10  # digits kept free for the number of rows, known at the end only
MAX_LINE = 1 << 20  # bytes of every row but the first


def write(chunks: Iterator[JointTable], stream: BinaryIO, header: Header, units: Units) -> None:
    """See `Kind.write`."""
    rows, place = 0, 0
    for columns, block, steps in numbers(chunks, header, units):
        keys = [json.dumps(column, ensure_ascii=False).replace("%", "%%") for column in columns]
        line = "{" + ", ".join(f"{key}: %s" for key in keys) + "}\n"
        texts = [line % (*map(repr, row), step) for row, step in zip(block.tolist(), steps.tolist(), strict=True)]
        if rows == 0:
            text, place = _header_text(header, units)
            begin = _encoded(f'{texts[0][:-2]}, "{HEADER}": ')
            place += len(begin)
            stream.write(begin + text + b"}\n")
            del texts[0]
        stream.write(_encoded("".join(texts)))
        rows += len(block)
    stream.seek(place)
    stream.write(f"{rows:<{ROOM}}".encode())
    stream.seek(0, os.SEEK_END)


def _header_text(header: Header, units: Units) -> tuple[bytes, int]:
    """The header as a JSON string, ASCII, and where the number of rows begins in it."""
    content = header_as_dict(header, 1, units_text(units), rows="ROWS")
    text = json.dumps(json.dumps(content, allow_nan=False))
    begin, _, end = text.partition('\\"ROWS\\"')  # of the first key but one, so it can't be a name of the user's
    return f"{begin}{' ' * ROOM}{end}".encode("ascii"), len(begin)


def _encoded(text: str) -> bytes:
    # Half of a surrogate pair can't be UTF-8; as \udc80 it is still the JSON that means the same.
    return text.encode("utf-8", "backslashreplace")


def read_header(file: Path) -> Header:
    """See `Kind.read_header`."""
    with open(file, "rb") as stream:
        return _top(file, stream).header


def read(file: Path) -> JointTable:
    """See `Kind.read`."""
    where = str(file)
    with open(file, "rb") as stream:
        top = _top(file, stream)
        header, names = top.header, list(top.first)
        present = fitting(header.joint_names, header.joint_kinds, names, top.units, where)
        columns = [column for group in present for column in group.columns]
        blocks = [_block(file, [list(top.first.values())], 0, names, columns, present)]
        while block := _rows(file, stream, sum(map(len, blocks)), names):
            blocks.append(_block(file, block, sum(map(len, blocks)), names, columns, present))
    count = sum(map(len, blocks))
    if count != top.rows:
        raise InputError.at(where, f"has {count} rows where its header says {top.rows}: cut short or edited")
    return table_of(blocks, present, header, where)


@dataclass(frozen=True)
class _Top:
    """What the first row tells: the header, and the row itself without it."""

    header: Header
    units: Units
    rows: int
    first: dict[str, Any]


def _top(file: Path, stream: BinaryIO) -> _Top:
    where = str(file)
    raw = stream.readline(MAX_HEADER)
    if len(raw) >= MAX_HEADER:
        raise InputError.at(where, f"row 1: longer than {MAX_HEADER} bytes")
    start = raw.lstrip()[:1]
    if start != b"{" or f'"{HEADER}"'.encode() not in raw:
        raise InputError.at(where, f"not a joint table written by pathplan: its first row has no {HEADER}")
    first = dict(_pairs(raw, f"{where}: row 1"))
    text = first.pop(HEADER, None)
    if not isinstance(text, str):
        raise InputError.at(where, f"not a joint table written by pathplan: its first row has no {HEADER}")
    content = from_json(text, where)
    header, units = header_from_dict(content, 1, where), units_from(content.get("units"), where)
    return _Top(header, units, rows_from(content.get("rows"), MAX_ROWS, where), first)


def _pairs(raw: bytes, where: str) -> list[tuple[str, Any]]:
    """The keys and values of a row in order. Raises InputError at `where`."""
    if not raw.endswith(b"\n"):
        raise InputError.at(where, "the file is cut short in the middle of this row")
    try:
        pairs = json.loads(raw.decode("utf-8"), object_pairs_hook=_Pairs)
    except UnicodeDecodeError:
        raise InputError.at(where, "is not UTF-8 text") from None
    except (ValueError, RecursionError):
        raise InputError.at(where, "is not JSON") from None
    if not isinstance(pairs, _Pairs):
        raise InputError.at(where, "expected an object with the columns as keys")
    return pairs


class _Pairs(list[tuple[str, Any]]):
    """An object of JSON with its keys as they stand, repeated ones too."""


def _rows(file: Path, stream: BinaryIO, row: int, names: Sequence[str]) -> list[list[Any]]:
    """The values of the next rows, as many as fit into a block."""
    found: list[list[Any]] = []
    while len(found) < 4096:
        raw = stream.readline(MAX_LINE)
        if not raw:
            break
        where = f"{file}: row {row + len(found) + 1}"
        if len(raw) >= MAX_LINE:
            raise InputError.at(where, f"longer than {MAX_LINE} bytes")
        if row + len(found) >= MAX_ROWS:
            raise InputError.at(str(file), f"more than {MAX_ROWS} rows")
        pairs = _pairs(raw, where)
        if [name for name, _ in pairs] != names:
            raise InputError.at(where, "its columns are not those of the first row")
        found.append([value for _, value in pairs])
    return found


def _block(
    file: Path, rows: list[list[Any]], row: int, names: list[str], columns: list[str], present: Sequence[Group]
) -> Array:
    """Numbers (rows, columns) of rows of values, columns in the order of the groups, all judged."""
    order = [names.index(column) for column in columns]
    values = np.empty((len(rows), len(order)))
    for index, cells in enumerate(rows):
        for column, at in enumerate(order):
            cell = cells[at]
            if isinstance(cell, bool) or not isinstance(cell, int | float):
                place = f"row {row + index + 1}, column {columns[column]}"
                raise InputError.at(str(file), place, f"expected a number, got {str(cell)[:40]!r}")
            values[index, column] = _as_float(cell)
    fault = faults(values, present)
    if fault is not None:
        raise InputError.at(str(file), f"row {row + fault[0] + 1}, column {columns[fault[1]]}", fault[2])
    return values


def _as_float(value: int | float) -> float:
    try:
        return float(value)
    except OverflowError:  # an integer beyond 1e308
        return float("inf")


KIND = Kind(".jsonl", write, read, read_header)
