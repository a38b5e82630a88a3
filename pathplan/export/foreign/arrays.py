"""Columns of an NPZ file: arrays of numbers (rows,) or (rows, joints), compressed or not, nothing executed.

Headers of arrays are matched, not evaluated; arrays of Python objects are never loaded.
"""

from __future__ import annotations

import re
import zipfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.export.archive import open_archive
from pathplan.export.foreign.source import MAX_COLUMNS, Array
from pathplan.export.header import MAX_JOINTS
from pathplan.export.kinds import MAX_ROWS

__all__ = ["ArraySource"]

MAX_ARRAY_HEADER = 4096  # bytes
MAX_MEMBERS = 1000
_HEADER = re.compile(
    r"\{'descr': '(?P<kind>[<>|=][fiub][1248])', 'fortran_order': (?P<columns>True|False), "
    r"'shape': \((?P<shape>(?:\d{1,12},? ?){0,3})\),? ?\} *\n",
    re.ASCII,
)


@dataclass(frozen=True)
class _Member:
    """One array of numbers in the file."""

    name: str
    kind: str
    by_columns: bool
    shape: tuple[int, ...]


class ArraySource:
    """See `pathplan.export.foreign.source.Source`. A column of a two-dimensional array q is called q[1], q[2], ..."""

    def __init__(self, file: Path) -> None:
        self.file = file
        self._columns: list[tuple[_Member, int]] = []
        with open_archive(file) as archive:
            if len(archive.namelist()) > MAX_MEMBERS:
                raise InputError.at(str(file), f"more than {MAX_MEMBERS} arrays")
            for entry in archive.infolist():
                member = _member(archive, entry)
                if member is None or not 1 <= len(member.shape) <= 2:
                    continue
                width = 1 if len(member.shape) == 1 else member.shape[1]
                if width <= MAX_JOINTS and len(self._columns) + width <= MAX_COLUMNS:
                    self._columns += [(member, k) for k in range(width)]
        if not self._columns:
            raise InputError.at(str(file), "has no arrays of numbers by row, or by row and joint")

    @property
    def names(self) -> Sequence[str]:
        return [m.name if len(m.shape) == 1 else f"{m.name}[{k + 1}]" for m, k in self._columns]

    @property
    def units(self) -> Sequence[str]:
        return [""] * len(self._columns)

    def read(self, wanted: Sequence[int]) -> Array:
        """See `Source.read`."""
        members = {self._columns[at][0].name: self._columns[at][0] for at in wanted}
        first = next(iter(members.values()))
        for member in members.values():
            if member.shape[0] != first.shape[0]:
                rows = f"{member.shape[0]} rows where array {first.name} has {first.shape[0]}"
                raise InputError.at(str(self.file), f"array {member.name}: has {rows}")
        if not 0 < first.shape[0] <= MAX_ROWS:
            raise InputError.at(str(self.file), f"array {first.name}: expected 1 to {MAX_ROWS} rows")
        with open_archive(self.file) as archive:
            arrays = {name: _array(archive, member) for name, member in members.items()}
        columns = []
        for at in wanted:
            member, k = self._columns[at]
            array = arrays[member.name]
            columns.append(array if array.ndim == 1 else array[:, k])
        return np.column_stack(columns).astype(np.float64)


def _member(archive: zipfile.ZipFile, entry: zipfile.ZipInfo) -> _Member | None:
    """What an entry says of itself; None for one that is no array of numbers."""
    with archive.open(entry) as stream:
        header = _array_header(stream.read(MAX_ARRAY_HEADER))
    if header is None:
        return None
    shape = tuple(int(size) for size in re.findall(r"\d+", header[0]["shape"]))
    name = entry.filename.removesuffix(".npy")
    return _Member(name, header[0]["kind"], header[0]["columns"] == "True", shape)


def _array_header(start: bytes) -> tuple[re.Match[str], int] | None:
    """The header at the start of an array file, and where the numbers begin; None for what is none of numbers."""
    if start[:6] != b"\x93NUMPY" or start[6:7] not in (b"\x01", b"\x02", b"\x03") or len(start) < 12:
        return None
    begin = 10 if start[6] == 1 else 12
    length = int.from_bytes(start[8:begin], "little")
    match = _HEADER.fullmatch(start[begin : begin + length].decode("latin-1"))
    return None if match is None else (match, begin + length)


def _array(archive: zipfile.ZipFile, member: _Member) -> NDArray[np.generic]:
    """The numbers of a member. Raises what `open_archive` turns into one line."""
    kind = np.dtype(member.kind)
    size = kind.itemsize
    for length in member.shape:
        size *= length
    with archive.open(f"{member.name}.npy") as stream:
        header = _array_header(stream.read(MAX_ARRAY_HEADER))
        assert header is not None
    with archive.open(f"{member.name}.npy") as stream:
        stream.read(header[1])
        content = stream.read(size)
        if len(content) != size or stream.read(1):
            raise ValueError("another size than stated")
    return np.frombuffer(content, dtype=kind).reshape(member.shape, order="F" if member.by_columns else "C")
