"""Point lists from CSV: a line of column names, then rows of numbers; every complaint names row and column.

Comma-separated UTF-8 text. Lines that begin with # and empty lines are left out. A column may name its unit behind an
underscore ("x_mm", "elbow_rad"); without, it counts in mm or deg.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.tomlfile import nearest
from pathplan.units import DIMENSIONS, toml_text

__all__ = ["MOST_BYTES", "MOST_POINTS", "PointList", "read_points"]

Array = NDArray[np.float64]
MOST_BYTES = 20_000_000
MOST_POINTS = 50_000
_MOST_COLUMNS = 64
_NUMBER = re.compile(r"\s*[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,4})?\s*", re.ASCII)
_FAR = 1e3  # m, rad: beyond this a value is a slip, and its square spoils what comes after


@dataclass(frozen=True)
class PointList:
    """The columns of a file, in SI. `lines` (m,) are the line numbers of the rows, for messages."""

    file: str
    columns: Mapping[str, Array]  # name without unit -> (m,)
    lines: tuple[int, ...]
    digest: str  # SHA-256 of the file

    def __len__(self) -> int:
        return len(self.lines)

    def row(self, index: int) -> str:
        """'row 3 (line 5)' of a row counted from 0."""
        return f"row {index + 1} (line {self.lines[index]})"

    def array(self, names: Sequence[str]) -> Array:
        """(m, len(names)) of columns that are there."""
        return np.column_stack([self.columns[name] for name in names])


def read_points(path: Path, dimensions: Mapping[str, str], required: Sequence[str], *, fewest: int) -> PointList:
    """The numbers of a CSV file.

    Args:
        path: the file.
        dimensions: column name without unit -> dimension; any other column is refused.
        required: names that must be there.
        fewest: rows that there must be.

    Raises:
        InputError: no such file, too large, not UTF-8, a missing or unknown column, a row of another length, what is
            no finite number, too few or too many rows; one line with row and column.
    """
    name = _printable(path.name)
    text, digest = _text(path, name)
    lines = [(number, line) for number, line in enumerate(text.splitlines(), start=1) if _counts(line)]
    if not lines:
        raise InputError.at(name, "there are no columns and no rows in it")
    columns = _columns(lines[0][1], name, dimensions, required)
    rows = lines[1:]
    if len(rows) < fewest:
        raise InputError.at(name, f"expected at least {fewest} rows of numbers, got {len(rows)}")
    if len(rows) > MOST_POINTS:
        raise InputError.at(name, f"expected at most {MOST_POINTS} rows of numbers, got {len(rows)}")
    values = _values(rows, [column for column, _ in columns], name)
    values *= [size for _, size in columns]
    far = np.argwhere(np.abs(values) > _FAR)
    if len(far):
        index, k = far[0]
        place = f"row {index + 1} (line {rows[index][0]}), column {columns[k][0]}"
        got = toml_text(rows[index][1].split(",")[k].strip())
        raise InputError.at(name, place, f"expected at most {_FAR:g} m or rad, got {got[1:-1]}")
    values.flags.writeable = False
    found = {_bare(column, dimensions): values[:, k] for k, (column, _) in enumerate(columns)}
    return PointList(name, found, tuple(number for number, _ in rows), digest)


def _text(path: Path, name: str) -> tuple[str, str]:
    try:
        if path.exists() and not path.is_file():
            raise InputError.at(name, "is no regular file, expected a CSV file")
        with open(path, "rb") as file:
            raw = file.read(MOST_BYTES + 1)
    except FileNotFoundError:
        raise InputError.at(name, "no such file") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError.at(name, f"can't be read: {_printable(reason)}") from None
    if len(raw) > MOST_BYTES:
        raise InputError.at(name, f"larger than {MOST_BYTES // 1_000_000} MB, expected a CSV file of less")
    try:
        return raw.decode("utf-8-sig"), hashlib.sha256(raw).hexdigest()
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError.at(name, f"line {line}", "not UTF-8 text, expected a CSV file") from None


def _counts(line: str) -> bool:
    return bool(line.strip()) and not line.lstrip().startswith("#")


def _columns(line: str, name: str, dimensions: Mapping[str, str], required: Sequence[str]) -> list[tuple[str, float]]:
    """Columns as written with the size of their unit in SI; all of `required` among them."""
    written = [cell.strip().strip('"') for cell in line.split(",")]
    if len(written) > _MOST_COLUMNS:
        raise InputError.at(name, f"expected at most {_MOST_COLUMNS} columns, got {len(written)}")
    if all(_NUMBER.fullmatch(cell) for cell in written):
        raise InputError.at(name, f"expected column names ({', '.join(required)}) in the first line, got numbers")
    found: dict[str, tuple[str, float]] = {}
    for column in written:
        bare = _bare(column, dimensions)
        if bare not in dimensions:
            hint = nearest(column, list(dimensions)) or f", expected {', '.join(dimensions)}"
            raise InputError.at(name, f"column {toml_text(column)}: unknown{hint}")
        if bare in found:
            raise InputError.at(name, f"column {toml_text(column)}: is there twice")
        dimension = DIMENSIONS[dimensions[bare]]
        unit = column[len(bare) + 1 :] if column != bare else dimension.screen
        found[bare] = column, dimension.units.get(unit, 1.0)
    for bare in required:
        if bare not in found:
            raise InputError.at(name, f"column {toml_text(bare)}: missing, there is {', '.join(written)}")
    return list(found.values())


def _bare(column: str, dimensions: Mapping[str, str]) -> str:
    """The name without its unit; a column that is known with all its letters stays as it is."""
    if column in dimensions:
        return column
    bare, _, unit = column.rpartition("_")
    return bare if bare in dimensions and unit in DIMENSIONS[dimensions[bare]].units else column


def _values(rows: Sequence[tuple[int, str]], columns: Sequence[str], name: str) -> Array:
    """(m, columns) as written."""
    values = np.empty((len(rows), len(columns)))
    for index, (number, line) in enumerate(rows):
        cells = line.split(",")
        where = f"row {index + 1} (line {number})"
        if len(cells) != len(columns):
            raise InputError.at(name, where, f"expected {len(columns)} numbers, got {len(cells)}")
        for k, cell in enumerate(cells):
            if not _NUMBER.fullmatch(cell):
                got = toml_text(cell.strip())
                raise InputError.at(name, f"{where}, column {columns[k]}", f"expected a number, got {got}")
            values[index, k] = float(cell)
    return values


def _printable(text: str) -> str:
    return "".join(char if char.isprintable() else "?" for char in text)
