"""A file that is there whole or not at all: written beside, flushed to disk, then renamed into place."""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from pathplan.errors import InputError, PathplanError

__all__ = ["check_place", "saving"]


def check_place(file: Path) -> None:
    """Refuse, with InputError, a place where no file can be: missing folder, a directory, a device."""
    try:
        folder = file.parent.stat()
        if not stat.S_ISDIR(folder.st_mode):
            raise InputError.at(str(file), f"can't be written: {file.parent} is not a folder")
        mode = stat.S_IFREG
        with contextlib.suppress(FileNotFoundError):
            mode = file.stat().st_mode
    except (OSError, ValueError) as error:
        raise _told(file, error) from None
    if stat.S_ISDIR(mode):
        raise InputError.at(str(file), "is a directory: expected the name of a file")
    if not stat.S_ISREG(mode):
        raise InputError.at(str(file), "is a device or pipe: expected the name of a file")


@contextlib.contextmanager
def saving(file: Path) -> Iterator[BinaryIO]:
    """A stream whose content becomes `file` when the block ends without an exception.

    Until the rename the old file is untouched; a new name is in the folder's own record before the block
    returns. An exception, Ctrl-C included, removes the part written. Trouble with the disk becomes one line:
    InputError where the place is wrong, PathplanError where the disk is.
    """
    check_place(file)
    target = Path(os.path.realpath(file))  # a link stays a link, to the new content
    part = target.with_name(f".{target.name[:100]}.{secrets.token_hex(6)}.part")
    try:
        try:
            with open(part, "xb") as stream:
                yield stream
                stream.flush()
                if target.exists():  # its permissions are kept
                    os.chmod(part, stat.S_IMODE(target.stat().st_mode))
                os.fsync(stream.fileno())
            os.replace(part, target)
        except BaseException:
            with contextlib.suppress(OSError):  # what went wrong first is what must be told
                os.unlink(part)
            raise
    except OSError as error:
        raise _told(file, error) from error
    _record(target.parent)


def _record(folder: Path) -> None:
    """Flush the folder's own record, so that a power cut after this can't bring the old name back."""
    # Folders can't be flushed everywhere (Windows, some network disks); the file itself is whole either way.
    with contextlib.suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def _told(file: Path, error: OSError | ValueError) -> PathplanError:
    """One line about trouble with a place or a disk."""
    code = error.errno if isinstance(error, OSError) else errno.EINVAL
    if code in (errno.ENOSPC, errno.EDQUOT):
        return PathplanError(f"{file}: the disk is full: nothing was changed")
    if code == errno.ENOENT:
        return InputError.at(str(file), f"can't be written: there is no folder {file.parent}")
    if code in (errno.EACCES, errno.EPERM, errno.EROFS):
        return InputError.at(str(file), f"can't be written: the folder {file.parent} is read-only for you")
    if code in (errno.ENAMETOOLONG, errno.EINVAL, errno.ENOTDIR, errno.ELOOP):
        return InputError.at(str(file), "can't be written: not a possible file name")
    reason = os.strerror(code) if code else str(error)
    return PathplanError(f"{file}: can't be written: {reason}: nothing was changed")
