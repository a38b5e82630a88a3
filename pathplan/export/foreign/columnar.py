"""Columns of a Parquet file: those of numbers; empty cells count as not a number."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from pathplan.errors import InputError
from pathplan.export.foreign.source import Array
from pathplan.export.parquet_file import numbers_in, opened

__all__ = ["ParquetSource"]

NUMBERS = (
    "double",
    "float",
    "halffloat",
    "bool",
    *(f"{sign}int{size}" for sign in ("", "u") for size in (8, 16, 32, 64)),
)


class ParquetSource:
    """See `pathplan.export.foreign.source.Source`. Raises InputError for a file without columns of numbers."""

    def __init__(self, file: Path) -> None:
        self.file = file
        with opened(file) as parquet:
            schema = parquet.schema_arrow
            # a nested column takes several places in the file: those behind it are found by their own names
            plain = [parquet.metadata.schema.column(k).path for k in range(parquet.metadata.num_columns)]
            kinds = {name: str(schema.field(k).type) for k, name in enumerate(schema.names)}
            self._places = {
                name: plain.index(name)
                for name, kind in kinds.items()
                if kind in NUMBERS and plain.count(name) == 1 and schema.names.count(name) == 1
            }
        if not self._places:
            raise InputError.at(str(file), "has no columns of numbers")
        self.names: Sequence[str] = list(self._places)
        self.units: Sequence[str] = [""] * len(self.names)

    def read(self, wanted: Sequence[int]) -> Array:
        """See `Source.read`."""
        names = [self.names[at] for at in wanted]
        with opened(self.file) as parquet:
            if not parquet.metadata.num_rows:
                raise InputError.at(str(self.file), "has no rows")
            return np.column_stack([numbers_in(parquet, self._places[name], name) for name in names])
