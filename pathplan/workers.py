"""Independent pieces of work on several cores: processes forked from this one, results in the order of the work.

What a piece gives does not depend on which process does it, so results are the same bytes with any number of them.
Forked processes start in some milliseconds and see everything this one holds; where they can't be had (anything but
Linux) the work is done here, piece after piece.
"""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import time
import warnings
from collections.abc import Callable, Iterable, Sequence
from types import TracebackType
from typing import TYPE_CHECKING, Any, NoReturn, TypeVar

from pathplan.errors import PathplanError

if TYPE_CHECKING:
    from multiprocessing.connection import Connection

__all__ = ["cores", "work_through"]

Item = TypeVar("Item")
Result = TypeVar("Result")

_PATIENCE = 3.0  # s for a process that was told to end, to tidy up
_WITH_PARENT = 1  # PR_SET_PDEATHSIG of prctl(2)


def cores() -> int:
    """How many processes can run at once on this machine."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def work_through(
    work: Callable[[Item], Result], items: Sequence[Item], jobs: int, tell: Callable[[int], None] | None = None
) -> list[Result]:
    """`work(item)` for every item, in order, by up to `jobs` processes at once.

    Results pass from process to process by pickle; `tell` is called with the number of items done. An exception of
    `work` is raised as it would be without processes: that of the first item that has one. When this process is
    interrupted, or ends in any way, the others end too. Raises PathplanError if one of them is ended from outside.
    """
    tell = tell or (lambda done: None)
    jobs = min(jobs, len(items))
    results: list[Result] = []
    if jobs < 2 or sys.platform != "linux":
        for item in items:
            results.append(work(item))
            tell(len(results))
        return results
    with _Workers(work, items, jobs) as workers:
        answers = workers.answers(tell)
    for item, (good, value) in zip(items, answers, strict=True):
        results.append(value if good else work(item))  # which raises again what it raised there
    return results


class _Workers:
    """Processes that each take the next item when they are done with one."""

    def __init__(self, work: Callable[[Any], Any], items: Sequence[Any], jobs: int) -> None:
        self.work, self.items, self.jobs = work, items, jobs
        self.ends: dict[Connection, int] = {}  # our end of the pipe of each process, by its id

    def __enter__(self) -> _Workers:
        from multiprocessing import Pipe

        # An interrupt between the birth of a process and the note of it would leave it alone in the world.
        before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGTERM})
        try:
            parent = os.getpid()
            for _ in range(self.jobs):
                here, there = Pipe()
                with warnings.catch_warnings():  # of other threads: ours only draws progress, and holds no lock of use
                    warnings.simplefilter("ignore", DeprecationWarning)
                    born = os.fork()
                if born == 0:
                    for end in (here, *self.ends):
                        end.close()
                    _serve(self.work, self.items, there, parent, before)
                there.close()
                self.ends[here] = born
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, before)
        return self

    def answers(self, tell: Callable[[int], None]) -> list[tuple[bool, Any]]:
        """(whether it came to an end, result) of every item; after the first that did not, of no later one."""
        from multiprocessing.connection import wait

        found: dict[int, tuple[bool, Any]] = {}
        waiting = list(range(len(self.items)))[::-1]
        busy: dict[Connection, int] = {}
        for end in self.ends:
            self._hand(end, waiting, busy)
        while busy:
            ready: list[Any] = wait(list(busy))
            for end in ready:
                number = busy.pop(end)
                try:
                    found[number] = end.recv()
                except (EOFError, OSError):
                    raise PathplanError("a process that took part in the work was ended from outside") from None
                tell(len(found))
                if not found[number][0]:
                    waiting = [other for other in waiting if other < number]
                self._hand(end, waiting, busy)
        failed = min((number for number, (good, _) in found.items() if not good), default=len(self.items))
        nothing = (False, None)
        return [found[k] if k <= failed else nothing for k in range(len(self.items))]

    def _hand(self, end: Connection, waiting: list[int], busy: dict[Connection, int]) -> None:
        if waiting:
            busy[end] = waiting.pop()
            with contextlib.suppress(OSError):  # it is gone: reading from it will tell
                end.send(busy[end])

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
        try:
            for end in self.ends:
                end.close()  # nothing more to do, for those who wait for it
            if error is not None:
                for born in self.ends.values():
                    os.kill(born, signal.SIGTERM)
            _await(list(self.ends.values()))
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _await(born: list[int]) -> None:
    """Wait for processes to end; those that don't are ended."""
    latest = time.monotonic() + _PATIENCE
    for process in born:
        while os.waitpid(process, os.WNOHANG)[0] == 0:
            if time.monotonic() > latest:
                os.kill(process, signal.SIGKILL)
                os.waitpid(process, 0)
                break
            time.sleep(0.002)


def _serve(
    work: Callable[[Any], Any], items: Sequence[Any], end: Connection, parent: int, mask: Iterable[int]
) -> NoReturn:
    """A process of its own, from here to its end: take numbers of items, give results."""
    try:
        _end_with(parent)
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # which a terminal sends to all: the parent says what it means
        signal.signal(signal.SIGTERM, _interrupted)
        signal.pthread_sigmask(signal.SIG_SETMASK, mask)
        while True:
            number = end.recv()
            try:
                answer = (True, work(items[number]))
            except Exception:
                answer = (False, None)
            end.send(answer)
    finally:
        os._exit(0)  # without what the parent would do at its end: flush streams, remove files


def _interrupted(number: int, frame: object) -> NoReturn:
    signal.signal(signal.SIGTERM, signal.SIG_IGN)  # once is enough; tidying up must not be interrupted again
    raise KeyboardInterrupt


def _end_with(parent: int) -> None:
    """Let the kernel end this process when its parent is gone, however it goes."""
    import ctypes

    ctypes.CDLL(None).prctl(_WITH_PARENT, signal.SIGKILL)
    if os.getppid() != parent:  # gone already
        os._exit(0)
