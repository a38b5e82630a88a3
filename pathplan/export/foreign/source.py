"""Columns of numbers in a file that pathplan did not write, before anybody knows what they mean."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError

__all__ = ["MAX_COLUMNS", "SUFFIXES", "Array", "Source", "source_of"]

Array = NDArray[np.float64]
MAX_COLUMNS = 10_000
TEXT = (".csv", ".tsv", ".txt")
SUFFIXES = (*TEXT, ".npz", ".parquet")


class Source(Protocol):
    """What a file offers: names of its columns, units where a row of its own tells them ("" elsewhere)."""

    @property
    def names(self) -> Sequence[str]: ...

    @property
    def units(self) -> Sequence[str]: ...

    def read(self, wanted: Sequence[int]) -> Array:
        """The wanted columns (N, len(wanted)), not a number where a cell is empty. Raises InputError."""
        ...


def source_of(file: Path) -> Source:
    """The file opened as what its suffix says. Raises InputError."""
    from pathplan.export.foreign.arrays import ArraySource
    from pathplan.export.foreign.columnar import ParquetSource
    from pathplan.export.foreign.text import TextSource

    kinds: dict[str, Callable[[Path], Source]] = {suffix: TextSource for suffix in TEXT}
    kinds |= {".npz": ArraySource, ".parquet": ParquetSource}
    if file.suffix.lower() not in kinds:
        known = f"expected a table of another source as {', '.join(SUFFIXES[:-1])} or {SUFFIXES[-1]}"
        raise InputError.at(str(file), f"{known}, got {file.suffix or 'no suffix'}")
    return kinds[file.suffix.lower()](file)
