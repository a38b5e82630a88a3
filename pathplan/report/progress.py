"""A progress bar for long work: on a terminal only, drawn beside the work, wiped when it ends."""

from __future__ import annotations

import contextlib
import os
import shutil
import threading
import time
from types import TracebackType
from typing import TextIO

__all__ = ["Progress"]

DELAY = 0.5  # s of work before anything is drawn
EVERY = 0.1  # s
WIDTH = 24  # characters of the bar


class Progress:
    """Tells how far work has come: `with Progress(sys.stderr) as tell: tell("timing", 3, 7)`.

    Nothing is drawn where the stream is no terminal, when `quiet`, or if the work ends within `delay` s. A thread
    draws, so that the seconds go on while one part takes long.
    """

    def __init__(self, stream: TextIO | None, *, quiet: bool = False, delay: float = DELAY) -> None:
        self.stream = None if quiet or not _is_terminal(stream) else stream
        self.delay = delay
        self.state = ("", 0, 1)
        self.drawn = 0  # characters on the line now
        self._ended = threading.Event()
        self._thread: threading.Thread | None = None

    def __call__(self, what: str, done: int, total: int) -> None:
        """What is being done, how many parts of it are done, and of how many."""
        self.state = (what, done, total)

    def __enter__(self) -> Progress:
        if self.stream is not None:
            self._thread = threading.Thread(target=self._draw_on, name="progress", daemon=True)
            self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._ended.set()
        if self._thread is not None:
            self._thread.join()
        if self.drawn:
            self._put("")

    def _draw_on(self) -> None:
        start = time.monotonic()
        wait = self.delay
        while not self._ended.wait(wait):
            wait = EVERY
            self._put(self.line(time.monotonic() - start))

    def line(self, seconds: float) -> str:
        """The line as it stands after so many seconds."""
        what, done, total = self.state
        if done <= 0 or done >= total:  # how far it has come is not known
            return f"{what} ...  {seconds:.0f} s"
        filled = round(done / total * WIDTH)
        bar = "#" * filled + "." * (WIDTH - filled)
        return f"{what:<7} [{bar}] {100 * done / total:3.0f} %  {seconds:.0f} s"

    def _put(self, text: str) -> None:
        """Put a text in place of the one before, shortened so that a narrow terminal does not wrap it."""
        assert self.stream is not None
        text = text[: shutil.get_terminal_size().columns - 1]
        blank = " " * (self.drawn - len(text))
        back = "\b" * len(blank) if text else "\r"
        with contextlib.suppress(OSError, ValueError):  # the terminal is gone: the work goes on without it
            self.stream.write(f"\r{text}{blank}{back}")
            self.stream.flush()
        self.drawn = len(text)


def _is_terminal(stream: TextIO | None) -> bool:
    try:
        return stream is not None and stream.isatty() and os.environ.get("TERM") != "dumb"
    except ValueError:  # closed
        return False
