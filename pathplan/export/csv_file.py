"""Joint tables as CSV: comment lines with `key = JSON`, a row of column names with units, then numbers.

Numbers are the shortest text that reads back as the same float. Steps and rows count from 1.
"""

from __future__ import annotations

import csv
import io
import itertools
import os
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.export.columns import AS_ON_SCREENS, Array, Group, Units, fitting, units_from, units_text
from pathplan.export.header import (
    FORMAT,
    MAX_HEADER,
    RESERVED,
    Header,
    cycle_from,
    from_json,
    joints_from,
    json_line,
    mark_as_dict,
    mark_from,
    rows_from,
)
from pathplan.export.kinds import MAX_ROWS, Kind
from pathplan.export.rows import faults, numbers, table_of
from pathplan.table import JointTable, Mark

TITLE = "# pathplan joint table, format "
BREAKS_LIMITS = "# THIS TABLE BREAKS LIMITS: it failed its audit and must not be run"
BYTE_ORDER_MARK = "\ufeff".encode()  # some editors put it in front of UTF-8 text
MAX_LINE = 1 << 20  # characters, of a header line or a row
MAX_HEADER_LINES = 100_000
BLOCK = 1 << 24  # characters of rows that are read at once
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)


def write(chunks: Iterator[JointTable], stream: BinaryIO, header: Header, units: Units) -> None:
    """See `Kind.write`."""
    for line in _header_lines(header, units):
        stream.write(_encoded(line + "\n"))
    # How many rows there are is known at the end only, so room is kept: it tells when a file was cut short.
    place = stream.tell()
    stream.write(_rows_line(0))
    rows = 0
    for columns, block, steps in numbers(chunks, header, units):
        if rows == 0:
            stream.write(_encoded(_csv_line(columns)))
        stream.write(_encoded(_rows_text(block, steps)))
        rows += len(block)
    stream.seek(place)
    stream.write(_rows_line(rows))
    stream.seek(0, os.SEEK_END)


def _encoded(text: str) -> bytes:
    # Half of a surrogate pair can't be UTF-8; as \udc80 it is still the JSON that means the same.
    return text.encode("utf-8", "backslashreplace")


def _rows_line(rows: int) -> bytes:
    return f"# rows = {rows:<10}\n".encode()


def _header_lines(header: Header, units: Units) -> Iterator[str]:
    yield f"{TITLE}{FORMAT}"
    if header.meta.get("breaks_limits"):
        yield BREAKS_LIMITS
    for key, value in header.meta.items():
        yield f"# {key} = {json_line(value)}"
    yield f"# units = {json_line(units_text(units))}"
    yield f"# cycle_s = {json_line(header.cycle)}"
    yield f"# joints = {json_line(header.joints())}"
    for mark in header.marks:
        yield f"# mark = {json_line(mark_as_dict(mark, 1))}"


def _csv_line(cells: list[str]) -> str:
    line = io.StringIO()
    csv.writer(line, lineterminator="\n").writerow(cells)
    return line.getvalue()


def _rows_text(block: Array, steps: NDArray[np.int64]) -> str:
    # repr is the shortest text that reads back as the same float; nothing faster was found than joining it
    rows = zip(block.tolist(), steps.tolist(), strict=True)
    return "".join(f"{','.join(map(repr, row))},{step}\n" for row, step in rows)


def read_header(file: Path) -> Header:
    """See `Kind.read_header`."""
    with open(file, "rb") as stream:
        return _read_header(file, stream).header


def read(file: Path) -> JointTable:
    """See `Kind.read`."""
    with open(file, "rb") as stream:
        top = _read_header(file, stream)
        header = top.header
        present, order = _columns(file, top)
        blocks = list(_number_blocks(file, stream, top.lines + 1, present, order))
    rows = sum(map(len, blocks))
    if rows != top.rows or not rows:
        complaint = f"has {rows} rows where its header says {top.rows}: cut short or edited"
        raise InputError.at(str(file), complaint)
    return table_of(blocks, present, header, str(file))


def _line(file: Path, stream: BinaryIO, number: int) -> str:
    """The next line with its end, "" at the end of the file. Raises InputError for what is no line."""
    raw = stream.readline(MAX_LINE)
    if len(raw) >= MAX_LINE:
        raise InputError.at(str(file), f"line {number}: longer than {MAX_LINE} bytes")
    if raw and not raw.endswith(b"\n"):
        raise InputError.at(str(file), f"line {number}: the file is cut short in the middle of this line")
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError:
        raise InputError.at(str(file), f"line {number}: is not UTF-8 text") from None


@dataclass(frozen=True)
class _Top:
    """All that stands above the rows of a file."""

    header: Header
    units: Units
    rows: int
    names: str  # the line of column names
    lines: int  # how many lines all this is


def _read_header(file: Path, stream: BinaryIO) -> _Top:
    where = str(file)
    start = stream.read(40).removeprefix(BYTE_ORDER_MARK)
    if not start.startswith(TITLE.encode()):
        got = repr(start.decode("ascii", "replace").splitlines()[0]) if start.strip() else "nothing"
        raise InputError.at(where, f"not a joint table written by pathplan: it starts with {got}")
    stream.seek(0)
    first = _line(file, stream, 1).removeprefix("\ufeff").rstrip("\r\n")
    if first != f"{TITLE}{FORMAT}":
        got = first[len(TITLE) :][:20]
        raise InputError.at(where, f"format {got} of table: this pathplan reads {FORMAT}")
    values: dict[str, object] = {}
    marks: list[Mark] = []
    for number in itertools.count(2):
        text = _line(file, stream, number)
        if not text.startswith("#"):
            break
        if number > MAX_HEADER_LINES or stream.tell() > MAX_HEADER:
            raise InputError.at(where, f"more than {MAX_HEADER_LINES} header lines or {MAX_HEADER >> 20} MiB of them")
        key, equals, value = text[1:].partition(" = ")
        key = key.strip()
        if not equals:
            continue  # a remark, such as the one about broken limits
        parsed = from_json(value, f"{where}: line {number}")
        if key == "mark":
            marks.append(mark_from(parsed, 1, f"{where}: line {number}"))
        elif key in values:
            raise InputError.at(where, f"line {number}", f"{key[:40]} is stated twice")
        else:
            values[key] = parsed
    for key in ("joints", "cycle_s", "rows"):
        if key not in values:
            raise InputError.at(where, f'header has no line "# {key} = ..."')
    rows = rows_from(values["rows"], MAX_ROWS, where)
    names, kinds = joints_from(values["joints"], where)
    meta = {key: value for key, value in values.items() if key not in RESERVED}
    header = Header(names, kinds, cycle_from(values["cycle_s"], where), tuple(marks), meta)
    units = units_from(values["units"], where) if "units" in values else AS_ON_SCREENS
    return _Top(header, units, rows, text, number)


def _columns(file: Path, top: _Top) -> tuple[tuple[Group, ...], list[int]]:
    """The groups that the file has, and where their columns stand in a row."""
    where, header = str(file), top.header
    try:
        names = next(csv.reader([top.names.rstrip("\r\n")]), [])
    except csv.Error:  # a line end inside, or a name of more than 128 KiB
        raise InputError.at(where, "the row of column names is damaged") from None
    if not names and header.joint_kinds:
        raise InputError.at(where, "has a header but no row of column names")
    present = fitting(header.joint_names, header.joint_kinds, names, top.units, where)
    return present, [names.index(column) for group in present for column in group.columns]


def _number_blocks(
    file: Path, stream: BinaryIO, line: int, present: Sequence[Group], order: list[int]
) -> Iterator[Array]:
    """Blocks (rows, columns) of numbers, columns in the order of the groups, all judged."""
    columns = [column for group in present for column in group.columns]
    row = 0
    while True:
        lines: list[str] = []
        size = 0
        while len(lines) < 4096 and size < BLOCK and (text := _line(file, stream, line + row + len(lines))):
            lines.append(text)
            size += len(text)
        if not lines:
            return
        place = _Place(file, line, row, columns, order)
        if row + len(lines) > MAX_ROWS:
            raise InputError.at(str(file), f"more than {MAX_ROWS} rows")
        block = _parsed(lines, place)
        fault = faults(block, present)
        if fault is not None:
            raise place.error(fault[0], fault[2], fault[1])
        row += len(lines)
        yield block


@dataclass(frozen=True)
class _Place:
    """Where a block stands, so that messages can name a row and column."""

    file: Path
    line: int  # of the first row of the file
    row: int  # of the block's first row
    columns: list[str]
    order: list[int]

    def error(self, index: int, complaint: str, column: int | None = None) -> InputError:
        name = "" if column is None else f", column {self.columns[column]}"
        row = self.row + index
        return InputError.at(str(self.file), f"row {row + 1} (line {self.line + row}){name}", complaint)


def _parsed(lines: list[str], place: _Place) -> Array:
    """Numbers (rows, columns) of lines, columns in the order of the groups."""
    width = len(place.order)
    if all(map(str.strip, lines)):  # loadtxt would skip an empty line
        try:
            block = np.loadtxt(lines, delimiter=",", comments=None, ndmin=2)
        except ValueError:  # which row and column is found out below
            block = None
        if block is not None and block.shape == (len(lines), width):
            return block[:, place.order]
    values = np.empty((len(lines), width))
    for index, text in enumerate(lines):
        cells = text.rstrip("\r\n").split(",")
        if len(cells) != width:
            raise place.error(index, f"expected {width} values, got {0 if cells == [''] else len(cells)}")
        for column, at in enumerate(place.order):
            cell = cells[at].strip()
            if not _NUMBER.fullmatch(cell) and cell.lower() not in ("nan", "inf", "-inf"):
                raise place.error(index, f"expected a number, got {cell[:40]!r}", column)
            values[index, column] = float(cell)
    return values


KIND = Kind(".csv", write, read, read_header)
