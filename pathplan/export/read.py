"""Reading a table file that pathplan wrote."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator
from pathlib import Path

from pathplan.errors import InputError
from pathplan.export.kinds import MAX_BYTES, kind_of
from pathplan.table import JointTable

__all__ = ["read_table", "reading"]


def read_table(file: str | Path) -> JointTable:
    """The table in a file written by `write_table` (SI; see there for what is exact).

    Nothing in the file is executed, and its size is bounded. Raises InputError, one line with row and column,
    for a file that is missing, cut short, damaged, or not ours.
    """
    file = Path(file)
    kind = kind_of(file)
    with reading(file):
        return kind.read(file)


@contextlib.contextmanager
def reading(file: Path) -> Iterator[None]:
    """Refuse what can't be read as a file of bounded size, and tell in one line what goes wrong within."""
    if file.is_dir():
        raise InputError.at(str(file), "is a directory: expected a table file")
    if file.exists() and not file.is_file():
        raise InputError.at(str(file), "is a device or pipe: expected a table file")
    try:
        if file.exists() and file.stat().st_size > MAX_BYTES:
            raise InputError.at(str(file), f"is larger than {MAX_BYTES // 10**9} GB: no table is read of that size")
        yield
    except FileNotFoundError:
        raise InputError.at(str(file), "there is no such file") from None
    except PermissionError:
        raise InputError.at(str(file), "can't be read: no permission") from None
    except OSError as error:
        reason = os.strerror(error.errno) if error.errno else error
        raise InputError.at(str(file), f"can't be read: {reason}") from None
