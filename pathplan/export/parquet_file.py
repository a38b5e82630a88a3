"""Joint tables as Parquet: the columns of the CSV file, float64 and int64, the header as metadata "pathplan".

Needs pyarrow, which comes with the extra "parquet". Steps and rows count from 1. Pages carry checksums.
"""

from __future__ import annotations

import contextlib
import io
import json
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

from pathplan.errors import InputError
from pathplan.export.columns import Array, Units, fitting, units_from, units_text
from pathplan.export.header import MAX_HEADER, Header, from_json, header_as_dict, header_from_dict
from pathplan.export.kinds import MAX_ROWS, Kind
from pathplan.export.rows import Numbers, faults, numbers, table_of
from pathplan.table import JointTable

if TYPE_CHECKING:
    from pyarrow.parquet import ParquetFile

KEY = b"pathplan"
MAX_COLUMNS = 10_000
ROW_GROUP = 65_536
OVERHEAD = 1 << 20  # bytes that pages may take beside their numbers
MISSING = 'Parquet needs pyarrow, which is not installed: pip install "pathplan[parquet]"'


def write(chunks: Iterator[JointTable], stream: BinaryIO, header: Header, units: Units) -> None:
    """See `Kind.write`."""
    pa, pq = _pyarrow(Path(stream.name))
    content = json.dumps(header_as_dict(header, 1, units_text(units)), allow_nan=False)
    sink, writer, schema = _Sink(stream), None, None
    try:
        for columns, block, steps in _row_groups(numbers(chunks, header, units)):
            if writer is None:
                fields = [pa.field(name, pa.float64(), nullable=False) for name in columns[:-1]]
                fields.append(pa.field(columns[-1], pa.int64(), nullable=False))
                schema = pa.schema(fields, metadata={KEY: content.encode()})
                writer = pq.ParquetWriter(
                    sink,
                    schema,
                    compression="zstd",
                    use_dictionary=False,
                    column_encoding={name: "PLAIN" for name in columns},
                    write_page_checksum=True,
                )
            arrays = [pa.array(np.ascontiguousarray(column)) for column in block.T]
            writer.write_table(pa.Table.from_arrays([*arrays, pa.array(steps)], schema=schema), ROW_GROUP)
        if writer is not None:
            writer.close()
    except BaseException:
        # What is left of the writer ends the file when it is collected, long after the stream was closed.
        sink.shut = True
        if writer is not None:
            with contextlib.suppress(Exception):
                writer.close()
        raise


class _Sink(io.RawIOBase):
    """A stream that takes bytes and, once it is shut, drops them."""

    def __init__(self, stream: BinaryIO) -> None:
        self._stream, self._size = stream, 0
        self.shut = False

    def writable(self) -> bool:
        return True

    def write(self, content: Any) -> int:
        if not self.shut:
            self._stream.write(content)
        self._size += len(content)
        return len(content)

    def tell(self) -> int:
        return self._size


def _row_groups(blocks: Iterator[Numbers]) -> Iterator[Numbers]:
    """The blocks joined and cut anew, so that the file does not depend on the chunks the table comes in."""
    held: list[Numbers] = []
    count = 0
    for names, block, steps in blocks:
        held.append((names, block, steps))
        count += len(block)
        while count >= ROW_GROUP:
            whole, all_steps = np.vstack([b for _, b, _ in held]), np.concatenate([s for _, _, s in held])
            yield names, whole[:ROW_GROUP], all_steps[:ROW_GROUP]
            held = [(names, whole[ROW_GROUP:], all_steps[ROW_GROUP:])]
            count -= ROW_GROUP
    if count:
        yield held[0][0], np.vstack([b for _, b, _ in held]), np.concatenate([s for _, _, s in held])


def _pyarrow(file: Path) -> tuple[Any, Any]:
    """pyarrow and pyarrow.parquet. Raises InputError where they are not installed."""
    try:
        import pyarrow
        import pyarrow.parquet
    except ImportError:
        raise InputError.at(str(file), MISSING) from None
    return pyarrow, pyarrow.parquet


@contextlib.contextmanager
def opened(file: Path) -> Iterator[ParquetFile]:
    """A Parquet file of bounded size, opened; whatever pyarrow stumbles over within becomes one line.

    Raises InputError also where pyarrow is not installed.
    """
    pa, pq = _pyarrow(file)
    damage = (pa.ArrowException, OSError, MemoryError, ValueError, KeyError, OverflowError, TypeError)
    with open(file, "rb") as stream:
        try:
            limits = {"thrift_string_size_limit": MAX_HEADER, "thrift_container_size_limit": 1_000_000}
            parquet = pq.ParquetFile(stream, page_checksum_verification=True, **limits)
            _check_size(file, parquet)
            yield parquet
        except damage as error:
            if isinstance(error, OSError) and error.errno:
                raise
            raise InputError.at(str(file), "is cut short or damaged: not a whole Parquet file") from None


def _check_size(file: Path, parquet: ParquetFile) -> None:
    """Refuse what is stated to be larger than any table, before anything of that size is read."""
    meta = parquet.metadata
    if meta.num_rows > MAX_ROWS:
        raise InputError.at(str(file), f"more than {MAX_ROWS} rows")
    if meta.num_columns > MAX_COLUMNS:
        raise InputError.at(str(file), f"more than {MAX_COLUMNS} columns")
    if meta.num_rows < 0 or sum(meta.row_group(i).num_rows for i in range(meta.num_row_groups)) != meta.num_rows:
        raise ValueError("row groups and rows disagree")


def numbers_in(parquet: ParquetFile, column: int, name: str) -> Array:
    """A column (N,) of numbers as float64, NaN where there is none. Raises what `opened` turns into one line."""
    meta = parquet.metadata
    for group in range(meta.num_row_groups):
        chunk = meta.row_group(group).column(column)
        most = 9 * meta.row_group(group).num_rows + OVERHEAD
        if chunk.total_uncompressed_size > most or chunk.num_values != meta.row_group(group).num_rows:
            raise ValueError("a column of sizes that do not fit")
    array = parquet.read(columns=[name], use_threads=False).column(0)
    if len(array) != meta.num_rows:
        raise ValueError("a column of another length")
    return np.asarray(array.cast("float64", safe=False).to_numpy(), dtype=np.float64)


def own_header(parquet: ParquetFile) -> bytes | None:
    """The header that pathplan wrote, None in the file of another."""
    return (parquet.metadata.metadata or {}).get(KEY)


def _header(file: Path, parquet: ParquetFile) -> tuple[Header, Units]:
    where = str(file)
    text = own_header(parquet)
    if text is None:
        raise InputError.at(where, "not a joint table written by pathplan: it has no header")
    content = from_json(text.decode("utf-8", "replace"), where)
    return header_from_dict(content, 1, where), units_from(content.get("units"), where)


def read_header(file: Path) -> Header:
    """See `Kind.read_header`."""
    with opened(file) as parquet:
        return _header(file, parquet)[0]


def read(file: Path) -> JointTable:
    """See `Kind.read`."""
    where = str(file)
    with opened(file) as parquet:
        header, units = _header(file, parquet)
        names = list(parquet.schema_arrow.names)
        present = fitting(header.joint_names, header.joint_kinds, names, units, where)
        columns = [column for group in present for column in group.columns]
        for name in columns:
            expected = "int64" if name == columns[-1] else "double"
            got = str(parquet.schema_arrow.field(name).type)
            if got != expected:
                raise InputError.at(where, f"column {name}: holds {got[:40]}, expected {expected}")
        if not parquet.metadata.num_rows:
            raise InputError.at(where, "has no rows")
        block = np.column_stack([numbers_in(parquet, names.index(name), name) for name in columns])
    fault = faults(block, present)
    if fault is not None:
        raise InputError.at(where, f"row {fault[0] + 1}, column {columns[fault[1]]}", fault[2])
    return table_of([block], present, header, where)


KIND = Kind(".parquet", write, read, read_header, check=_pyarrow)
