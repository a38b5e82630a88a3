"""Columns of a text file: comma, semicolon, tab or blanks between cells, a row of names, perhaps one of units.

Lines that begin with # or % are remarks; the last of them above the numbers may hold the names. With semicolons, tabs
or blanks a comma may be the decimal sign. Empty cells, nan and null count as not a number.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np

from pathplan.errors import InputError
from pathplan.export.foreign.source import MAX_COLUMNS, Array
from pathplan.export.foreign.words import unit_of
from pathplan.export.kinds import MAX_ROWS

__all__ = ["TextSource"]

MAX_LINE = 1 << 20  # bytes
MAX_TOP = 10_000  # lines above the numbers
BLOCK_LINES, BLOCK_BYTES = 4096, 1 << 24
NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?|[+-]?inf(inity)?", re.ASCII | re.IGNORECASE)
NOTHING = ("", "nan", "-nan", "na", "n/a", "null", "none", "-")
REMARK = ("#", "%")


@dataclass(frozen=True)
class _Form:
    """How cells stand in a line."""

    delimiter: str | None  # None: blanks
    decimal_comma: bool

    def cells(self, line: str) -> list[str]:
        if self.delimiter is None:
            return line.split()
        if '"' not in line:
            found = line.split(self.delimiter)
        else:
            try:
                found = next(csv.reader([line], delimiter=self.delimiter, skipinitialspace=True), [])
            except csv.Error:  # a line end inside, or a cell of more than 128 KiB
                found = line.split(self.delimiter)
        return [cell.strip() for cell in found]

    def number(self, cell: str) -> float | None:
        """The number in a cell, nan for an empty one, None for what is no number."""
        if self.decimal_comma:
            cell = cell.replace(",", ".")
        if cell.lower() in NOTHING:
            return float("nan")
        return float(cell) if NUMBER.fullmatch(cell) else None


class TextSource:
    """See `pathplan.export.foreign.source.Source`. Raises InputError for what is no table of numbers."""

    def __init__(self, file: Path) -> None:
        self.file = file
        with open(file, "rb") as stream:
            self._find_top(stream)

    def _find_top(self, stream: BinaryIO) -> None:
        """Names, units and form, from the lines above the first row of numbers."""
        above: list[str] = []  # lines that hold no numbers, remarks among them, without their signs
        first = ""
        for number, line in _lines(self.file, stream):
            if len(above) >= MAX_TOP:
                raise InputError.at(str(self.file), f"no row of numbers in its first {MAX_TOP} lines")
            if line.startswith(REMARK):
                above.append(line.lstrip("".join(REMARK)).strip())
                continue
            if _is_numbers(line):
                first, self.first_line = line, number
                break
            above.append(line)
        if not first:
            raise InputError.at(str(self.file), "has no row of numbers")
        self.form = _form_of(first)
        width = len(self.form.cells(first))
        if width > MAX_COLUMNS:
            raise InputError.at(str(self.file), f"more than {MAX_COLUMNS} columns")
        rows = [self.form.cells(line) for line in above[-2:]]
        if not self.form.cells(first)[-1]:  # every row of numbers ends with a delimiter, which names need not
            rows = [[*cells, ""] if len(cells) == width - 1 else cells for cells in rows]
        rows = [cells for cells in rows if len(cells) == width]
        units = [""] * width
        if rows and any(rows[-1]) and all(not cell or unit_of(cell) for cell in rows[-1]) and len(rows) > 1:
            units = rows.pop()
        # without names the columns are told by their numbers
        self.names: Sequence[str] = rows[-1] if rows else [str(k + 1) for k in range(width)]
        self.units: Sequence[str] = units
        self.named = bool(rows)

    def read(self, wanted: Sequence[int]) -> Array:
        """See `Source.read`."""
        blocks = []
        with open(self.file, "rb") as stream:
            rows = 0
            lines = ((k, text) for k, text in _lines(self.file, stream) if k >= self.first_line)
            while block := _block(lines):
                if rows + len(block) > MAX_ROWS:
                    raise InputError.at(str(self.file), f"more than {MAX_ROWS} rows")
                blocks.append(self._parsed(block, wanted, rows))
                rows += len(block)
        return np.concatenate(blocks)

    def _parsed(self, block: list[tuple[int, str]], wanted: Sequence[int], row: int) -> Array:
        """Numbers (rows, wanted) of lines; what is no number is told by row, line and column."""
        width = len(self.names)
        texts = [text.replace(",", ".") if self.form.decimal_comma else text for _, text in block]
        try:
            # reads no more than the wanted columns, so that others may hold text
            quick = np.loadtxt(texts, delimiter=self.form.delimiter, comments=None, ndmin=2, usecols=tuple(wanted))
        except ValueError:  # which row and column is found out below
            quick = None
        counts = {text.count(self.form.delimiter) for text in texts} if self.form.delimiter else {width - 1}
        if quick is not None and quick.shape == (len(block), len(wanted)) and counts == {width - 1}:
            return np.asarray(quick, dtype=np.float64)
        values = np.empty((len(block), len(wanted)))
        for index, (number, text) in enumerate(block):
            cells = self.form.cells(text)
            place = f"row {row + index + 1} (line {number})"
            if len(cells) != width:
                raise InputError.at(str(self.file), place, f"expected {width} values, got {len(cells)}")
            for column, at in enumerate(wanted):
                value = self.form.number(cells[at])
                if value is None:
                    where = f"{place}, column {self.names[at][:60]}"
                    raise InputError.at(str(self.file), where, f"expected a number, got {cells[at][:40]!r}")
                values[index, column] = value
        return values


def _lines(file: Path, stream: BinaryIO) -> Iterator[tuple[int, str]]:
    """Lines that are not empty, with their numbers from 1. Raises InputError for what is no text."""
    number = 0
    while raw := stream.readline(MAX_LINE):
        number += 1
        if number == 1:
            if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
                raise InputError.at(str(file), "is UTF-16 text: save it as UTF-8")
            raw = raw.removeprefix(b"\xef\xbb\xbf")
        if len(raw) >= MAX_LINE:
            raise InputError.at(str(file), f"line {number}: longer than {MAX_LINE} bytes")
        try:
            line = raw.decode("utf-8").strip(" \r\n\v\f")
        except UnicodeDecodeError:
            raise InputError.at(str(file), f"line {number}: is not UTF-8 text") from None
        if "\0" in line:
            raise InputError.at(str(file), f"line {number}: is no text")
        if line.strip("\t"):
            yield number, line


def _block(lines: Iterator[tuple[int, str]]) -> list[tuple[int, str]]:
    """The next lines, remarks left out."""
    found: list[tuple[int, str]] = []
    size = 0
    for number, text in lines:
        if not text.startswith(REMARK):
            found.append((number, text))
            size += len(text)
        if len(found) >= BLOCK_LINES or size >= BLOCK_BYTES:
            break
    return found


def _form_of(line: str) -> _Form:
    """How the cells of a row of numbers stand in it."""
    for delimiter in ("\t", ";"):
        if delimiter in line:
            return _Form(delimiter, bool(re.search(r"\d,\d", line)) and not re.search(r"\d\.\d", line))
    return _Form("," if "," in line else None, False)


def _is_numbers(line: str) -> bool:
    """Whether a line is a row of numbers: its first cell is one, and at least half of them are."""
    form = _form_of(line)
    numbers = [form.number(cell) for cell in form.cells(line)]
    known = [number is not None for number, cell in zip(numbers, form.cells(line), strict=True) if cell]
    return bool(known) and known[0] and sum(known) >= len(known) / 2
