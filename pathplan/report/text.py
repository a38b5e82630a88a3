"""Lines for a terminal: columns, widths, and names from files made harmless."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from pathplan.auditing.exceedances import clock

__all__ = ["WIDTH", "aligned", "clock", "fit", "printable"]

WIDTH = 100


def aligned(table: Sequence[Sequence[str]], most: Sequence[int], left: Sequence[int] = (0,)) -> Iterator[str]:
    """Columns as wide as they need to be, up to `most`; those in `left` begin at the left edge."""
    widths = [min(most[c], max(len(row[c]) for row in table)) for c in range(len(table[0]))]
    for row in table:
        cells = []
        for c, (cell, width) in enumerate(zip(row, widths, strict=True)):
            cell = cell if len(cell) <= width else cell[: width - 3] + "..."
            cells.append(cell.ljust(width) if c in left else cell.rjust(width))
        yield fit("  ".join(cells).rstrip())


def fit(line: str, tail: str = "") -> str:
    """A line cut so that it fits the screen with its tail, which is kept whole."""
    room = WIDTH - len(tail)
    return (line if len(line) <= room else line[: room - 3] + "...") + tail


def printable(text: str) -> str:
    """Names from files: nothing that moves the cursor or ends the line."""
    return "".join(char if char.isprintable() else "?" for char in text)
