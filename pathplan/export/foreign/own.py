"""Whether a file says that pathplan wrote it."""

from __future__ import annotations

import contextlib
import zipfile
from pathlib import Path

from pathplan.errors import InputError
from pathplan.export.csv_file import BYTE_ORDER_MARK, TITLE
from pathplan.export.foreign.source import SUFFIXES
from pathplan.export.kinds import kinds
from pathplan.export.parquet_file import opened, own_header

__all__ = ["is_own"]


def is_own(file: Path) -> bool:
    """Whether it is to be read by `read_table`: by its first line, its header array, its metadata or its kind.

    A file that can't be read counts as one, since `read_table` tells what is wrong with it.
    """
    suffix = file.suffix.lower()
    if suffix not in kinds():
        return False
    if suffix not in SUFFIXES or not file.is_file():
        return True
    try:
        if suffix == ".csv":
            with open(file, "rb") as stream:
                return stream.read(40).removeprefix(BYTE_ORDER_MARK).startswith(TITLE.encode())
        if suffix == ".npz":
            with contextlib.suppress(ValueError, RuntimeError, NotImplementedError, OverflowError):
                with zipfile.ZipFile(file) as archive:
                    return "header.npy" in archive.namelist()
            return True
        with opened(file) as parquet:
            return own_header(parquet) is not None
    except zipfile.BadZipFile:
        return True
    except (OSError, InputError):
        return True
