"""Whole or not at all: full disks, kills, read-only folders, Ctrl-C, odd places."""

import errno
import os
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import pathplan.export.save
from pathplan.errors import InputError, PathplanError
from pathplan.export import read_table, write_table
from pathplan.export.save import batched, saving
from tests.kills import environment, kill_writer, stop_plan

SUFFIXES = (".csv", ".jsonl", ".npz", ".parquet")


class FullDisk:
    """A stream on a disk that is full after so many bytes."""

    def __init__(self, stream, room):
        self.stream, self.room = stream, room

    def write(self, content):
        self.room -= len(content)
        if self.room < 0:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return self.stream.write(content)

    def __getattr__(self, name):
        return getattr(self.stream, name)

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.stream.close()


@pytest.fixture
def open_on_full_disk(monkeypatch):
    def opened(path, mode):
        return FullDisk(open(path, mode), 2000)

    monkeypatch.setattr(pathplan.export.save, "open", opened, raising=False)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_full_disk_leaves_the_old_file_and_no_litter(full_table, tmp_path, suffix, open_on_full_disk):
    file = tmp_path / f"t{suffix}"
    file.write_bytes(b"old")
    with pytest.raises(PathplanError) as error:
        write_table(full_table, file, overwrite=True)
    assert str(error.value) == f"{file}: the disk is full: nothing was changed"
    assert error.value.exit_status == 1
    assert file.read_bytes() == b"old" and list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize(
    ("code", "kind", "message"),
    [
        (errno.ENOSPC, PathplanError, "the disk is full: nothing was changed"),
        (errno.EDQUOT, PathplanError, "the disk is full: nothing was changed"),
        (errno.EIO, PathplanError, "can't be written: Input/output error: nothing was changed"),
        (errno.EACCES, InputError, "can't be written: the folder {} is read-only for you"),
        (errno.EROFS, InputError, "can't be written: the folder {} is read-only for you"),
    ],
)
@pytest.mark.parametrize("function", ["replace", "fsync"])
def test_trouble_at_the_last_moment(full_table, tmp_path, monkeypatch, function, code, kind, message):
    file = tmp_path / "t.csv"
    file.write_bytes(b"old")

    def fails(*_):
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr(os, function, fails)
    with pytest.raises(PathplanError) as error:
        write_table(full_table, file, overwrite=True)
    assert type(error.value) is kind
    assert str(error.value) == f"{file}: {message.format(tmp_path)}"
    assert file.read_bytes() == b"old" and list(tmp_path.iterdir()) == [file]


def test_a_read_only_folder_is_told(full_table, tmp_path, monkeypatch):
    """Root may write anywhere, so the refusal of the system is put in its mouth."""

    def refuses(path, mode):
        raise PermissionError(errno.EACCES, "Permission denied", str(path))

    monkeypatch.setattr(pathplan.export.save, "open", refuses, raising=False)
    with pytest.raises(InputError) as error:
        write_table(full_table, tmp_path / "t.csv")
    complaint = f"can't be written: the folder {tmp_path} is read-only for you"
    assert str(error.value) == f"{tmp_path / 't.csv'}: {complaint}"


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("what", [KeyboardInterrupt, InputError])
def test_an_interruption_between_chunks_leaves_nothing(full_table, tmp_path, suffix, what):
    def chunks():
        yield full_table.part(0, 20)
        raise what("stopped here")

    with pytest.raises(what, match="stopped here"):
        write_table(chunks(), tmp_path / f"t{suffix}")
    assert list(tmp_path.iterdir()) == []


def test_the_new_file_is_on_disk_before_it_takes_the_name(full_table, tmp_path, monkeypatch):
    events = []
    real_fsync, real_replace = os.fsync, os.replace
    monkeypatch.setattr(os, "fsync", lambda fd: (events.append("fsync"), real_fsync(fd)))
    monkeypatch.setattr(os, "replace", lambda a, b: (events.append("replace"), real_replace(a, b)))
    write_table(full_table, tmp_path / "t.csv")
    assert events == ["fsync", "replace", "fsync"]  # the file, its name, the folder


def test_places_where_no_file_can_be(full_table, tmp_path):
    (tmp_path / "folder.csv").mkdir()
    (tmp_path / "file").write_text("x")
    os.mkfifo(tmp_path / "pipe.csv")
    refusals = {
        tmp_path / "folder.csv": "is a directory: expected the name of a file",
        tmp_path / "pipe.csv": "is a device or pipe: expected the name of a file",
        tmp_path / "gone" / "t.csv": f"can't be written: there is no folder {tmp_path / 'gone'}",
        tmp_path / "file" / "t.csv": f"can't be written: {tmp_path / 'file'} is not a folder",
        tmp_path / ("x" * 300 + ".csv"): "can't be written: not a possible file name",
        Path(f"{tmp_path}/a\0b.csv"): "can't be written: not a possible file name",
    }
    for file, message in refusals.items():
        with pytest.raises(InputError) as error:
            write_table(full_table, file, overwrite=True)
        assert str(error.value) == f"{file}: {message}"
    reads = {
        tmp_path / "folder.csv": "is a directory: expected a table file",
        tmp_path / "pipe.csv": "is a device or pipe: expected a table file",
        tmp_path / "gone.csv": "there is no such file",
        tmp_path / "gone" / "t.npz": "there is no such file",
    }
    for file, message in reads.items():
        with pytest.raises(InputError) as error:
            read_table(file)
        assert str(error.value) == f"{file}: {message}"


@pytest.mark.parametrize(
    ("name", "got"), [("t.xls", '".xls"'), ("table", "none"), ("t.csv.bak", '".bak"'), (".csv", "none")]
)
def test_unknown_suffixes_list_the_known(full_table, tmp_path, name, got):
    message = f"{tmp_path / name}: unknown kind of table: expected .csv, .jsonl, .npz or .parquet, got {got}"
    with pytest.raises(InputError) as error:
        write_table(full_table, tmp_path / name)
    assert str(error.value) == message
    with pytest.raises(InputError) as error:
        read_table(tmp_path / name)
    assert str(error.value) == message


def test_suffixes_in_capitals_are_known(full_table, tmp_path):
    write_table(full_table, tmp_path / "T.CSV")
    assert len(read_table(tmp_path / "T.CSV")) == 50


def test_permissions_and_links_stay(full_table, tmp_path):
    real = tmp_path / "real.csv"
    real.write_text("old")
    real.chmod(0o640)
    link = tmp_path / "link.csv"
    link.symlink_to(real)
    write_table(full_table, link, overwrite=True)
    assert link.is_symlink() and real.stat().st_mode & 0o777 == 0o640
    assert len(read_table(real)) == 50


def test_a_new_file_has_the_permissions_of_any_new_file(full_table, tmp_path):
    (tmp_path / "plain").write_text("x")
    write_table(full_table, tmp_path / "t.csv")
    assert (tmp_path / "t.csv").stat().st_mode == (tmp_path / "plain").stat().st_mode


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_kill_at_any_instant_leaves_a_whole_file(tmp_path, suffix):
    """Two kills a kind; many more: python -m tests.kills 200."""
    rng = np.random.default_rng()
    for _ in range(2):
        kill_writer(tmp_path / f"t{suffix}", rng)


def left_part(file, content=b"half"):
    """A part as a killed writer leaves it."""
    part = file.with_name(f".{file.name}.0123456789ab.part")
    part.write_bytes(content)
    return part


def test_leftovers_of_a_killed_writer_go_with_the_next_write(full_table, tmp_path):
    file = tmp_path / "t.csv"
    left_part(file)
    others = [left_part(tmp_path / "u.csv"), tmp_path / ".t.csv.mine.part", tmp_path / "t.csv.0123456789ab.part"]
    for other in others[1:]:
        other.write_bytes(b"mine")
    write_table(full_table, file)
    assert sorted(tmp_path.iterdir()) == sorted([file, *others])


def test_the_part_of_a_living_writer_stays(full_table, tmp_path):
    file = tmp_path / "t.csv"
    with saving(file) as stream:
        stream.write(b"mine")
        write_table(full_table, file)
        assert len(read_table(file)) == 50
    assert file.read_bytes() == b"mine" and list(tmp_path.iterdir()) == [file]


def test_parts_of_a_living_batch_stay(full_table, tmp_path):
    """All parts of a batch but the first are closed by then; the first speaks for them."""
    files = [tmp_path / f"{k}.csv" for k in range(3)]
    with batched() as batch:
        for file in files:
            write_table(full_table, file, batch=batch)
        write_table(full_table.part(0, 9), files[2])  # another writer of the same file
        assert len(list(tmp_path.glob(".*.part"))) == 3
    assert [len(read_table(file)) for file in files] == [50, 50, 50] and not list(tmp_path.glob(".*.part"))


def test_a_batch_of_more_files_than_may_be_open(full_table, tmp_path):
    import resource

    before = resource.getrlimit(resource.RLIMIT_NOFILE)
    resource.setrlimit(resource.RLIMIT_NOFILE, (64, before[1]))
    try:
        with batched() as batch:
            for k in range(100):
                write_table(full_table.part(0, 2), tmp_path / f"{k}.csv", batch=batch)
    finally:
        resource.setrlimit(resource.RLIMIT_NOFILE, before)
    assert len(list(tmp_path.iterdir())) == 100


def test_a_file_of_a_batch_that_can_not_take_its_place(full_table, tmp_path, monkeypatch):
    real, files = os.replace, [tmp_path / f"{k}.csv" for k in range(3)]

    def replace_but_one(part, target):
        if target == files[1]:
            raise OSError(errno.EIO, "Input/output error")
        real(part, target)

    monkeypatch.setattr(os, "replace", replace_but_one)
    with pytest.raises(PathplanError) as error, batched() as batch:
        for file in files:
            write_table(full_table, file, batch=batch)
    assert str(error.value) == f"{files[1]}: can't take its place: Input/output error: 0.csv did before"
    assert list(tmp_path.iterdir()) == [files[0]]


def test_a_leftover_that_can_not_be_removed_is_left(full_table, tmp_path, monkeypatch):
    file = tmp_path / "t.csv"
    part = left_part(file)
    real = os.unlink
    monkeypatch.setattr(os, "unlink", lambda path, **more: real(path) if str(path) != str(part) else fails())

    def fails():
        raise PermissionError(errno.EPERM, "Operation not permitted")

    write_table(full_table, file)
    assert sorted(tmp_path.iterdir()) == sorted([file, part])


def test_files_of_a_batch_take_their_places_together(full_table, tmp_path):
    one, two = tmp_path / "1.csv", tmp_path / "2.npz"
    one.write_bytes(b"old")
    with batched() as batch:
        write_table(full_table, one, overwrite=True, batch=batch)
        assert one.read_bytes() == b"old"
        write_table(full_table, two, batch=batch)
        assert not two.exists()
    assert len(read_table(one)) == len(read_table(two)) == 50
    assert sorted(tmp_path.iterdir()) == [one, two]


@pytest.mark.parametrize("what", [KeyboardInterrupt, InputError])
def test_a_batch_that_ends_early_changes_nothing(full_table, tmp_path, what):
    one = tmp_path / "1.csv"
    one.write_bytes(b"old")
    with pytest.raises(what, match="stopped here"), batched() as batch:
        write_table(full_table, one, overwrite=True, batch=batch)
        raise what("stopped here")
    assert one.read_bytes() == b"old" and list(tmp_path.iterdir()) == [one]


LIMITED = """
import resource, sys
import numpy as np
from pathplan.cli import main
from pathplan.export import write_table
from pathplan.table import JointTable
resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
q = np.random.default_rng(1).normal(size=(20000, 6))
table = JointTable(np.arange(20000.) / 1000, q, joint_kinds=("revolute",) * 6, cycle=.001)
try:
    write_table(table, sys.argv[1], overwrite=True)
except Exception as error:
    print(type(error).__name__, error)
"""


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_disk_that_takes_no_more_leaves_the_old_file(tmp_path, suffix):
    """The system itself refuses further bytes: a limit on the size of files stands for a full disk."""
    file = tmp_path / f"t{suffix}"
    file.write_bytes(b"old")
    command = [sys.executable, "-c", LIMITED, str(file)]
    done = subprocess.run(command, capture_output=True, text=True, env=environment(), timeout=60)
    refusal = f"PathplanError {file}: larger than files may be here: nothing was changed\n"
    assert (done.stdout, done.stderr) == (refusal, "")
    assert file.read_bytes() == b"old" and list(tmp_path.iterdir()) == [file]


def test_a_folder_that_is_read_only_indeed(full_table, tmp_path):
    """For whoever may write anywhere, a file system mounted read-only says the same."""
    folder = Path("/sys") if os.geteuid() == 0 else tmp_path / "locked"
    if folder.parent == tmp_path:
        folder.mkdir(mode=0o500)
    file = folder / "t.csv"
    with pytest.raises(InputError) as error:
        write_table(full_table, file)
    assert str(error.value) == f"{file}: can't be written: the folder {folder} is read-only for you"


def test_saving_is_all_or_nothing(tmp_path):
    file = tmp_path / "any.txt"
    with saving(file) as stream:
        stream.write(b"first")
    with pytest.raises(ZeroDivisionError), saving(file) as stream:
        stream.write(b"second")
        raise ZeroDivisionError
    assert file.read_bytes() == b"first" and list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGINT])
def test_a_command_stopped_at_any_instant_leaves_one_plan_or_the_other(tmp_path, how):
    stop_plan(tmp_path, np.random.default_rng(), how)
