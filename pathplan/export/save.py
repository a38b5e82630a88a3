"""A file that is there whole or not at all: written beside, flushed to disk, then renamed into place.

What is written beside is called .NAME.HEX.part, and its writer holds a lock as long as it lives. A writer that was
killed leaves such a part; the next one of the same name finds that nobody holds it and removes it.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import secrets
import stat
from collections.abc import Iterator, Sequence
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
    """Parts that are written one by one and renamed together: see `batched`.

    The first part in each folder stays open and locked until the end, and speaks for all the others there.
    """

    def __init__(self) -> None:
        self._mark = secrets.token_hex(4)
        self._count = 0
        self._parts: list[tuple[Path, Path, Path]] = []  # part, target, the name as it was given
        self._held: dict[Path, BinaryIO] = {}  # by folder

    @contextlib.contextmanager
    def part(self, file: Path) -> Iterator[BinaryIO]:
        """A stream whose content becomes `file` with the batch; raises as `saving` does."""
        check_place(file)
        target = Path(os.path.realpath(file))  # a link stays a link, to the new content
        _remove_leftovers(target)
        try:
            stream = self._opened(target)
            try:
                part = Path(stream.name)
                self._parts.append((part, target, file))
                yield stream
                stream.flush()
                if target.exists():  # its permissions are kept
                    os.chmod(part, stat.S_IMODE(target.stat().st_mode))
                os.fsync(stream.fileno())
            finally:
                if self._held.get(target.parent) is not stream:
                    stream.close()
        except OSError as error:
            raise _told(file, error) from error

    def _opened(self, target: Path) -> BinaryIO:
        """A new part of a target; the first in its folder is locked and kept. Raises OSError."""
        while True:
            self._count += 1
            name = f".{target.name[:_PREFIX]}.{self._mark}{self._count % 0x10000:04x}.part"
            stream = open(target.with_name(name), "xb")
            if target.parent in self._held:
                return stream
            try:
                # Between creating and locking another writer may have taken it for a leftover.
                if _lock(stream, wait=True) and _is_same(stream, target.with_name(name)):
                    self._held[target.parent] = stream
                    return stream
            except BaseException:
                stream.close()
                with contextlib.suppress(OSError):
                    os.unlink(target.with_name(name))
                raise
            stream.close()

    def commit(self) -> None:
        """All parts to their names. Raises as `saving` does."""
        changed: list[Path] = []
        while self._parts:
            part, target, file = self._parts[0]
            try:
                os.replace(part, target)
            except OSError as error:
                raise _told(file, error, changed) from error
            del self._parts[0]
            changed.append(target)
        for folder in dict.fromkeys(target.parent for target in changed):
            _record(folder)

    def discard(self) -> None:
        """Remove the parts that have not become files."""
        for part, _, _ in self._parts:
            with contextlib.suppress(OSError):  # what went wrong first is what must be told
                os.unlink(part)
        self._parts.clear()
        for stream in self._held.values():
            with contextlib.suppress(OSError):  # bytes that were still to be written, on a disk that is full
                stream.close()
        self._held.clear()


def _remove_leftovers(target: Path) -> None:
    """Remove the parts of this target whose writers are gone. What can't be told or removed is left."""
    own = re.compile(re.escape(f".{target.name[:_PREFIX]}.") + r"([0-9a-f]{8})[0-9a-f]{4}\.part")
    with contextlib.suppress(OSError):
        names = os.listdir(target.parent)
        for name in names:
            match = own.fullmatch(name)
            if match is None:
                continue
            mates = [other for other in names if re.search(rf"\.{match[1]}[0-9a-f]{{4}}\.part$", other)]
            if not any(_in_use(target.with_name(mate)) for mate in mates):
                with contextlib.suppress(OSError):
                    os.unlink(target.with_name(name))


def _in_use(part: Path) -> bool:
    """Whether a living writer holds a part; True where that can't be told."""
    try:
        with open(part, "r+b") as stream:
            return not _lock(stream, wait=False)
    except FileNotFoundError:
        return False
    except OSError:
        return True


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


def _told(file: Path, error: OSError | ValueError, changed: Sequence[Path] = ()) -> PathplanError:
    """One line about trouble with a place or a disk; `changed` are the files of a batch that took their places."""
    if changed:
        reason = os.strerror(error.errno) if isinstance(error, OSError) and error.errno else str(error)
        named = ", ".join(target.name for target in changed)
        return PathplanError(f"{file}: can't take its place: {reason}: {named} did before")
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
