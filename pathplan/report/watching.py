"""A task that is planned again whenever one of its files is saved: what the live page shows of it."""

from __future__ import annotations

import hashlib
import os
import threading
import time
import tomllib
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pathplan.errors import PathplanError
from pathplan.report.compare import Gist, changes_section, gist_of, signed
from pathplan.report.gather import picture_of
from pathplan.report.html import digests, page_parts, title_of
from pathplan.report.page_data import page_data
from pathplan.report.scene import scene_of
from pathplan.report.screen import verdict
from pathplan.report.text import clock, printable

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["State", "Watching", "files_of"]

EVERY = 0.05  # s between looks at the files
SETTLE = 0.03  # s that a save may still be going on
MOST_FILES = 500
LONGEST = 1024  # of a text that may be a file's name
SUFFIXES = (".toml", ".csv", ".npz", ".parquet", ".urdf")
Stamp = tuple[int, int, int, int] | None


@dataclass(frozen=True)
class State:
    """What is known now. `version` grows with every change, `planned` is that of the last good plan (0: none yet)."""

    version: int
    planned: int = 0
    trouble: str = ""  # why the files as they are now give no plan
    doing: bool = False
    title: str = ""
    parts: dict[str, str] = field(default_factory=dict, repr=False)
    data: Any = field(default=None, repr=False)
    meta: dict[str, Any] = field(default_factory=dict, repr=False)
    gist: Gist | None = field(default=None, repr=False)

    def news(self, seen: int) -> dict[str, Any]:
        """What a page that has seen a version does not know yet, as JSON values."""
        found: dict[str, Any] = {"version": self.version, "trouble": self.trouble, "doing": self.doing}
        if self.planned > seen:
            digest = digests(self.parts)
            sections = {name: {"html": html, "digest": digest[name]} for name, html in self.parts.items()}
            found |= {"title": self.title, "sections": sections, "data": self.data}
        return found


class Watching:
    """Plans, and plans again when a file that the task is made of has changed.

    `make` loads and plans; `say` is told in one line what came of it. `look` is to be called again and again, from one
    thread; `state` and `wait` may be used from any.
    """

    def __init__(self, file: Path, make: Callable[[], Plan], say: Callable[[str], None] = lambda line: None) -> None:
        self.file = file
        self.make = make
        self.say = say
        self._changed = threading.Condition()
        self._state = State(version=time.time_ns() // 1_000_000)  # beyond what a page saw of a watch before this one
        self._stamps: dict[Path, Stamp] = {}
        self._contents: dict[Path, str] = {}

    @property
    def state(self) -> State:
        with self._changed:
            return self._state

    def wait(self, seen: int, seconds: float) -> State | None:
        """The state as soon as it is another than a version seen, None if it still is that after so many seconds."""
        with self._changed:
            if self._changed.wait_for(lambda: self._state.version != seen, seconds):
                return self._state
            return None

    def wake(self) -> None:
        """Let all who wait see that there is something new, as when the watch ends."""
        self._put()

    def _put(self, **changes: Any) -> None:
        with self._changed:
            self._state = replace(self._state, version=self._state.version + 1, **changes)
            if "parts" in changes:
                self._state = replace(self._state, planned=self._state.version)
            self._changed.notify_all()

    def run(self, ended: threading.Event) -> None:
        """Look until the event is set."""
        while not ended.is_set():
            self.look()
            ended.wait(EVERY)

    def look(self) -> bool:
        """Plan again if any file is other than it was; True if so."""
        stamps = {path: _stamp(path) for path in {self.file, *self._stamps}}
        if stamps == self._stamps:
            return False
        first = not self._stamps
        if not first:
            time.sleep(SETTLE)
        self._stamps = {path: _stamp(path) for path in (*stamps, *files_of(self.file))}
        contents = {path: _digest(path) for path in self._stamps}
        same = contents == self._contents
        self._contents = contents
        if same and not first:  # saved as it was
            return False
        self._plan()
        return True

    def _plan(self) -> None:
        self._put(doing=True)
        before = self._state.gist
        try:
            plan = self.make()
            picture = picture_of(plan)
            scene = scene_of(picture)
            gist = gist_of(picture)
            parts = page_parts(picture, scene)
            if before is not None:
                parts["changes"] = changes_section(before, gist)
            self._put(
                doing=False,
                trouble="",
                title=title_of(picture),
                parts=parts,
                data=page_data(picture, scene),
                meta=dict(picture.meta),
                gist=gist,
            )
        except PathplanError as error:
            lines = getattr(error, "problems", None) or (str(error),)
            self._put(doing=False, trouble="\n".join(map(printable, lines)))
            for line in lines:
                self.say(line)
        except Exception as error:  # the watch outlives what one plan can't stand
            what = printable(f"internal error: {type(error).__name__}: {error}")
            self._put(doing=False, trouble=what)
            self.say(what)
        else:
            change = f" ({signed(gist.times[0][1] - before.times[0][1])})" if before is not None else ""
            self.say(f"cycle time {clock(plan.duration)}{change}: {verdict(plan.audit)}")


def files_of(file: Path) -> set[Path]:
    """The files that a task is made of: its own, and every text in it that names one, in those files again.

    A text names a file if there is one of that name beside the file it stands in, or if it ends like one of ours, so
    that a file that is missing is noticed when it comes. What can't be read names nothing.
    """
    found, open_files = {file}, [file]
    while open_files and len(found) < MOST_FILES:
        path = open_files.pop()
        if path.suffix.lower() != ".toml":
            continue
        try:
            texts = list(_texts(tomllib.loads(path.read_text(encoding="utf-8-sig"))))
        except (OSError, ValueError, RecursionError):
            continue
        for text in texts:
            if not 0 < len(text) <= LONGEST or not text.isprintable():
                continue
            other = path.parent / text
            if other not in found and (other.suffix.lower() in SUFFIXES or _is_file(other)):
                found.add(other)
                open_files.append(other)
    return found


def _texts(value: Any) -> Iterator[str]:
    if isinstance(value, str):
        yield value
    elif isinstance(value, dict | list):
        inner: Iterable[Any] = value.values() if isinstance(value, dict) else value
        for item in inner:
            yield from _texts(item)


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def _stamp(path: Path) -> Stamp:
    try:
        found = os.stat(path)
    except (OSError, ValueError):
        return None
    return found.st_mtime_ns, found.st_ctime_ns, found.st_size, found.st_ino


def _digest(path: Path) -> str:
    try:
        with open(path, "rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except (OSError, ValueError) as error:
        return type(error).__name__
