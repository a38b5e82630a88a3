"""NPZ files are zip files: opened so that whatever is wrong within becomes one line."""

from __future__ import annotations

import contextlib
import errno
import struct
import zipfile
import zlib
from collections.abc import Iterator
from pathlib import Path

from pathplan.errors import InputError

__all__ = ["open_archive"]

_DAMAGE = (
    zipfile.BadZipFile,
    struct.error,
    zlib.error,
    EOFError,
    ValueError,
    NotImplementedError,
    RuntimeError,
    OverflowError,
)


@contextlib.contextmanager
def open_archive(file: Path) -> Iterator[zipfile.ZipFile]:
    """The zip file opened. Raises InputError in place of what zipfile or numpy stumble over inside the block."""
    with open(file, "rb") as stream:
        try:
            with zipfile.ZipFile(stream) as archive:
                yield archive
        except (*_DAMAGE, OSError) as error:
            # zipfile seeks where a damaged directory tells it to, even to before the start: that is EINVAL
            if isinstance(error, OSError) and error.errno != errno.EINVAL:
                raise
            raise InputError.at(str(file), "is cut short or damaged: not a whole NPZ file") from None
