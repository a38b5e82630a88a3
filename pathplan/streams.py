"""The standard streams as the command line uses them: whole texts, single lines of complaint, readers that go away."""

from __future__ import annotations

import contextlib
import os
import sys
from collections.abc import Iterator, Mapping
from typing import Any, TextIO

from pathplan.errors import PathplanError

__all__ = ["OUR_ERROR", "complain", "complaints_of", "flush", "json_text", "show", "version"]

OUR_ERROR = 70  # sysexits.h


def complaints_of(error: Exception) -> tuple[int, tuple[str, ...]]:
    """Exit status and lines for an error; one of our own shows where it arose if PATHPLAN_DEBUG is set."""
    if isinstance(error, PathplanError):
        return error.exit_status, tuple(getattr(error, "problems", ()) or (str(error),))
    if os.environ.get("PATHPLAN_DEBUG"):
        import traceback

        traceback.print_exception(error)
    what = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
    return OUR_ERROR, (f"internal error: {what} (please report; PATHPLAN_DEBUG=1 shows the traceback)",)


def version() -> str:
    """The version of this program."""
    from pathplan.planning import versions

    return versions()["pathplan"]


def json_text(document: Mapping[str, Any]) -> str:
    """A document as it goes to a stream, our version at its head."""
    from pathplan.report.outputs import json_text

    return json_text({"pathplan": version(), **document})


def show(text: str) -> None:
    """Text on the standard output, in whatever its encoding takes. Raises PathplanError if it can't be written."""
    out = sys.stdout
    if out is None:  # closed by whoever started us
        return
    encoding = getattr(out, "encoding", None) or "utf-8"
    with _leaving(out):
        out.write(text.encode(encoding, "backslashreplace").decode(encoding) + "\n")
        out.flush()


def flush(out: TextIO | None) -> None:
    """What was written, on its way. Raises PathplanError if it can't be written."""
    if out is not None:
        with _leaving(out):
            out.flush()


@contextlib.contextmanager
def _leaving(out: TextIO) -> Iterator[None]:
    try:
        yield
    except BrokenPipeError:  # the reader is gone, as `| head` goes: the verdict stands without it
        _drop(out)
    except OSError as error:
        _drop(out)
        raise PathplanError(f"standard output: can't be written: {error.strerror}") from None


def _drop(out: TextIO) -> None:
    """What is still to be written to the stream leads nowhere."""
    with contextlib.suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, out.fileno())
        os.close(nowhere)


def complain(line: str) -> None:
    """One line on the standard error stream, whatever the message holds."""
    shown = "".join(char if char.isprintable() else "?" for char in line)
    with contextlib.suppress(OSError, ValueError, AttributeError):
        print(f"pathplan: {shown}", file=sys.stderr, flush=True)
