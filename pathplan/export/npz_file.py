"""Joint tables as NPZ: one array a field, SI, steps counted from 0, plus `header`, a JSON text.

`numpy.load(file)` opens it without pickles. Only arrays of the one plain layout that we write are read: their
headers are matched, not evaluated, and sizes are checked before anything is allocated.
"""

from __future__ import annotations

import json
import re
import shutil
import struct
import tempfile
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import IO, Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.export.archive import open_archive
from pathplan.export.columns import Units
from pathplan.export.header import MAX_HEADER, MAX_JOINTS, Header, from_json, header_as_dict, header_from_dict
from pathplan.export.kinds import MAX_ROWS, Kind
from pathplan.export.rows import tabled
from pathplan.table import JointTable

FIELDS = ("time", "position", "velocity", "acceleration", "jerk", "torque", "step", "pose", "tool_speed")
UNITS_TEXT = "SI: s, rad, m, N m, N; steps and rows count from 0; pose is base_from_tool"
IN_MEMORY = 1 << 22  # bytes of each field kept in memory while chunks come in, before a file takes over
_ARRAY_HEADER = re.compile(
    r"\{'descr': '(<f8|<i8|<U\d{1,9})', 'fortran_order': False, 'shape': \(((?:\d{1,12},? ?){0,3})\), \} *\n",
    re.ASCII,
)


def write(chunks: Iterator[JointTable], stream: BinaryIO, header: Header, units: Units) -> None:
    """See `Kind.write`; SI in any case. Rows are spooled per field, since an array's header states its length."""
    folder = Path(stream.name).parent
    spools: dict[str, IO[bytes]] = {}
    shapes: dict[str, tuple[int, ...]] = {}
    rows = 0
    try:
        for table in chunks:
            rows += len(table)
            for field in FIELDS:
                values = getattr(table, field)
                if values is None:
                    continue
                if field not in spools:
                    spools[field] = tempfile.SpooledTemporaryFile(IN_MEMORY, dir=str(folder))
                    shapes[field] = values.shape[1:]
                kind = "<i8" if field == "step" else "<f8"
                spools[field].write(np.ascontiguousarray(values, dtype=kind).tobytes())
        with zipfile.ZipFile(stream, "w", zipfile.ZIP_STORED) as archive:
            text = np.array(_header_text(header))
            with archive.open(_entry("header"), "w", force_zip64=True) as member:
                np.lib.format.write_array_header_1_0(member, _layout(f"<U{text.dtype.itemsize // 4}", ()))
                member.write(text.astype(text.dtype.newbyteorder("<")).tobytes())
            for field, spool in spools.items():
                spool.seek(0)
                with archive.open(_entry(field), "w", force_zip64=True) as member:
                    layout = _layout("<i8" if field == "step" else "<f8", (rows, *shapes[field]))
                    np.lib.format.write_array_header_1_0(member, layout)
                    shutil.copyfileobj(spool, member, 1 << 20)
    finally:
        for spool in spools.values():
            spool.close()


def _layout(descr: str, shape: tuple[int, ...]) -> dict[str, Any]:
    return {"descr": descr, "fortran_order": False, "shape": shape}


def _entry(field: str) -> zipfile.ZipInfo:
    """A member dated at the start of zip time, so that identical tables are identical files."""
    entry = zipfile.ZipInfo(f"{field}.npy", date_time=(1980, 1, 1, 0, 0, 0))
    entry.create_system = 3  # Unix, on whatever system this runs
    entry.external_attr = 0o644 << 16
    return entry


def _header_text(header: Header) -> str:
    return json.dumps(header_as_dict(header, 0, UNITS_TEXT), allow_nan=False)


def read_header(file: Path) -> Header:
    """See `Kind.read_header`."""
    with open_archive(file) as archive:
        return _header(file, archive)


def read(file: Path) -> JointTable:
    """See `Kind.read`."""
    with open_archive(file) as archive:
        header = _header(file, archive)
        arrays = {field: _array(file, archive, field) for field in _fields(file, archive)}
    for field, array in arrays.items():
        bad = np.argwhere(~np.isfinite(array))
        if len(bad):
            where = ", ".join(str(i) for i in bad[0][1:])
            place = f"row {bad[0][0] + 1}, array {field}" + (f" [{where}]" if where else "")
            raise InputError.at(str(file), place, f"expected a finite number, got {array[tuple(bad[0])]}")
    return tabled(arrays, header, str(file))


def _fields(file: Path, archive: zipfile.ZipFile) -> list[str]:
    names = [name.removesuffix(".npy") for name in archive.namelist()]
    for name in names:
        if name not in (*FIELDS, "header") or names.count(name) > 1:
            raise InputError.at(str(file), f"array {name[:60]}: unknown, or there twice")
    for field in ("time", "position", "step"):
        if field not in names:
            raise InputError.at(str(file), f"array {field}: missing")
    return [field for field in FIELDS if field in names]


def _header(file: Path, archive: zipfile.ZipFile) -> Header:
    where = str(file)
    if "header.npy" not in archive.namelist():
        raise InputError.at(where, "not a joint table written by pathplan: it has no header")
    return header_from_dict(from_json(str(_array(file, archive, "header")), where), 0, where)


def _array(file: Path, archive: zipfile.ZipFile, field: str) -> NDArray[Any]:
    """One array, read-only. Raises InputError, or what `open_archive` turns into one line."""
    entry = archive.getinfo(f"{field}.npy")
    where = f"{file}: array {field}"
    if entry.compress_type != zipfile.ZIP_STORED:  # stored members can't be larger than the file itself
        raise InputError.at(where, "is compressed: expected a plain array, as pathplan writes it")
    with archive.open(entry) as member:
        magic = member.read(10)
        if magic[:8] != b"\x93NUMPY\x01\x00":
            raise InputError.at(where, "is not an array of the kind that pathplan writes")
        match = _ARRAY_HEADER.fullmatch(member.read(struct.unpack("<H", magic[8:])[0]).decode("latin-1"))
        if match is None:
            raise InputError.at(where, "is not an array of the kind that pathplan writes")
        kind = match[1]
        shape = tuple(int(size) for size in re.findall(r"\d+", match[2]))
        _check_layout(field, kind, shape, where)
        size = np.dtype(kind).itemsize
        for length in shape:
            size *= length
        content = member.read(size)
        if len(content) != size or member.read(1):
            raise InputError.at(where, f"expected {size} bytes of numbers, which is not what there is")
    if kind.startswith("<U"):
        return np.array(content.decode("utf-32-le"))
    return np.frombuffer(content, dtype=kind).reshape(shape)


def _check_layout(field: str, kind: str, shape: tuple[int, ...], where: str) -> None:
    """The kind and shape a field must have, before anything of that size is read."""
    if field == "header":
        if not kind.startswith("<U") or shape != () or int(kind[2:]) > MAX_HEADER:
            raise InputError.at(where, "is not a text of sensible size")
        return
    if kind != ("<i8" if field == "step" else "<f8"):
        raise InputError.at(where, f"holds {kind}, expected {'<i8' if field == 'step' else '<f8'}")
    dimensions = {"time": 1, "step": 1, "tool_speed": 1, "pose": 3}.get(field, 2)
    if len(shape) != dimensions or 0 in shape or max(shape[1:], default=0) > MAX_JOINTS:
        raise InputError.at(where, f"has shape {shape}, expected {dimensions} sensible dimensions")
    if shape[0] > MAX_ROWS:
        raise InputError.at(where, f"more than {MAX_ROWS} rows")


KIND = Kind(".npz", write, read, read_header, si=True)
