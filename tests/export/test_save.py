"""Whole or not at all: full disks, kills, read-only folders, Ctrl-C, odd places."""

import errno
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

import pathplan.export.save
from pathplan.errors import InputError, PathplanError
from pathplan.export import read_table, write_table
from pathplan.export.save import saving

SUFFIXES = (".csv", ".npz")


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


WRITER = """
import sys
import numpy as np
from pathplan.export import write_table
from pathplan.table import JointTable, tick_times
rows = 20000
table = JointTable(time=tick_times(np.arange(rows), .001), position=np.full((rows, 6), float(sys.argv[2])),
                   joint_kinds=("revolute",) * 6, cycle=.001, meta={"task": "t", "task_file": "t.toml"})
print("ready", flush=True)
while True:
    write_table(table, sys.argv[1])
"""


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_kill_at_any_instant_leaves_a_whole_file(tmp_path, suffix):
    file = tmp_path / f"t{suffix}"
    for attempt in range(3):
        with subprocess.Popen(
            [sys.executable, "-c", WRITER, str(file), str(attempt)],
            stdout=subprocess.PIPE,
            env={**os.environ, "PYTHONPATH": str(Path(pathplan.export.save.__file__).parents[2])},
        ) as writer:
            assert writer.stdout.readline() == b"ready\n"
            time.sleep(0.05 + 0.13 * attempt)
            writer.send_signal(signal.SIGKILL)
        if file.exists():
            assert len(read_table(file)) == 20000


def test_saving_is_all_or_nothing(tmp_path):
    file = tmp_path / "any.txt"
    with saving(file) as stream:
        stream.write(b"first")
    with pytest.raises(ZeroDivisionError), saving(file) as stream:
        stream.write(b"second")
        raise ZeroDivisionError
    assert file.read_bytes() == b"first" and list(tmp_path.iterdir()) == [file]
