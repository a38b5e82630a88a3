"""A file that is there whole or not at all: written beside, flushed to disk, then renamed into place.

What is written beside is called .NAME.HEX.part and locked as long as its writer lives. A writer that was killed
leaves such a part; the next one of the same name finds it unlocked and removes it.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import secrets
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from pathplan.errors import InputError, PathplanError

__all__ = ["Batch", "batched", "check_place", "saving"]

_PREFIX = 100  # characters of the name that go into the name of its part


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
    with batched() as batch, batch.part(file) as stream:
        yield stream


@contextlib.contextmanager
def batched() -> Iterator[Batch]:
    """Files that take their places together when the block ends without an exception, else none of them.

    Between the first rename and the last lies nothing but renames.
    """
    batch = Batch()
    try:
        yield batch
        batch.commit()
    finally:
        batch.discard()


class Batch:
    """Parts that are written one by one and renamed together: see `batched`."""

    def __init__(self) -> None:
        self._parts: list[tuple[Path, Path, Path]] = []  # part, target, the name as it was given

    @contextlib.contextmanager
    def part(self, file: Path) -> Iterator[BinaryIO]:
        """A stream whose content becomes `file` with the batch; raises as `saving` does."""
        check_place(file)
        target = Path(os.path.realpath(file))  # a link stays a link, to the new content
        _remove_leftovers(target)
        try:
            with _new_part(target) as stream:
                part = Path(stream.name)
                self._parts.append((part, target, file))
                yield stream
                stream.flush()
                if target.exists():  # its permissions are kept
                    os.chmod(part, stat.S_IMODE(target.stat().st_mode))
                os.fsync(stream.fileno())
        except OSError as error:
            raise _told(file, error) from error

    def commit(self) -> None:
        """All parts to their names. Raises as `saving` does."""
        folders: dict[Path, None] = {}
        while self._parts:
            part, target, file = self._parts[0]
            try:
                os.replace(part, target)
            except OSError as error:
                raise _told(file, error) from error
            del self._parts[0]
            folders[target.parent] = None
        for folder in folders:
            _record(folder)

    def discard(self) -> None:
        """Remove the parts that have not become files."""
        for part, _, _ in self._parts:
            with contextlib.suppress(OSError):  # what went wrong first is what must be told
                os.unlink(part)
        self._parts.clear()


def _new_part(target: Path) -> BinaryIO:
    """A new part of a target, locked. Raises OSError."""
    while True:
        part = target.with_name(f".{target.name[:_PREFIX]}.{secrets.token_hex(6)}.part")
        stream = open(part, "xb")
        try:
            # Between creating and locking another writer may have taken it for a leftover.
            if _lock(stream, wait=True) and _is_same(stream, part):
                return stream
        except BaseException:
            stream.close()
            with contextlib.suppress(OSError):
                os.unlink(part)
            raise
        stream.close()


def _remove_leftovers(target: Path) -> None:
    """Remove the parts of this target whose writers are gone. What can't be told or removed is left."""
    pattern = re.compile(re.escape(f".{target.name[:_PREFIX]}.") + r"[0-9a-f]{12}\.part")
    with contextlib.suppress(OSError):
        for name in os.listdir(target.parent):
            if pattern.fullmatch(name):
                with contextlib.suppress(OSError), open(target.with_name(name), "r+b") as stream:
                    if _lock(stream, wait=False):
                        os.unlink(stream.name)


def _lock(stream: BinaryIO, *, wait: bool) -> bool:
    """Whether the file is now ours alone. Where files can't be locked a part counts as in use."""
    try:
        import fcntl
    except ImportError:  # Windows, which does not let go of a file in use anyway
        return True
    try:
        fcntl.flock(stream.fileno(), fcntl.LOCK_EX | (0 if wait else fcntl.LOCK_NB))
    except OSError:  # in use; or a network disk without locks, where parts are written all the same
        return wait
    return True


def _is_same(stream: BinaryIO, part: Path) -> bool:
    """Whether the name still leads to the open file."""
    try:
        named = os.stat(part)
    except FileNotFoundError:
        return False
    return os.path.samestat(named, os.fstat(stream.fileno()))


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
    if code == errno.EFBIG:
        return PathplanError(f"{file}: larger than files may be here: nothing was changed")
    if code == errno.ENOENT:
        return InputError.at(str(file), f"can't be written: there is no folder {file.parent}")
    if code in (errno.EACCES, errno.EPERM, errno.EROFS):
        return InputError.at(str(file), f"can't be written: the folder {file.parent} is read-only for you")
    if code in (errno.ENAMETOOLONG, errno.EINVAL, errno.ENOTDIR, errno.ELOOP):
        return InputError.at(str(file), "can't be written: not a possible file name")
    reason = os.strerror(code) if code else str(error)
    return PathplanError(f"{file}: can't be written: {reason}: nothing was changed")
