"""A compact picture for a terminal: how much of its limits each joint uses, and when it sets the pace."""

from __future__ import annotations

import os
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from pathplan.auditing.model import TOLERANCE, JointAudit, Peak
from pathplan.report.gather import Picture, picture_of
from pathplan.report.outputs import WHOLE
from pathplan.report.text import clock, printable

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["Signs", "signs_for", "terminal_picture"]

Signs = Literal["blocks", "ascii"]
NAME, BAR, WORDS = 10, 16, 20
STRIP = 48  # with the rest, 100 columns
EIGHTHS = " ▏▎▍▌▋▊▉█"
HEIGHTS = " ▁▂▃▄▅▆▇█"
PART = 1 / 16  # of a cell of the strip: less is not shown
SHORT = {"acceleration": "accel."}


def signs_for(stream: Any) -> Signs | None:
    """What a stream can show: blocks on a terminal whose encoding has them, else ASCII; None if it is no terminal."""
    try:
        if stream is None or not stream.isatty() or os.environ.get("TERM") == "dumb":
            return None
        (EIGHTHS + HEIGHTS).encode(getattr(stream, "encoding", None) or "ascii")
    except UnicodeEncodeError:
        return "ascii"
    except (ValueError, LookupError):  # closed, or an encoding that nobody knows
        return None
    return "blocks"


def terminal_picture(plan: Plan, signs: Signs) -> Iterator[str]:
    """A line a joint, at most 100 columns: its largest share of any limit, and along the cycle where it sets the pace.

    The height of a sign in the strip is the part of its time in which the joint paces. Nothing for a plan whose rows
    are too many to be held.
    """
    if plan.ticks >= WHOLE:  # the rows would have to be evaluated once more
        return
    picture = picture_of(plan, buckets=1, most=2, tool=False)
    title = f"{'':{NAME}}  {'largest share of a limit':{BAR + 1 + WORDS}}"
    yield f"{title} sets the pace along {clock(picture.duration)}"
    audits = (*picture.audit.joints, *picture.audit.rows)
    for row, joint in enumerate(audits):
        yield _line(joint.name, _largest(joint), _strip(picture, row), signs)
    tool = picture.audit.tool_speed
    if tool is not None or any(picture.labels[run.value][0] < 0 for run in picture.pace):
        yield _line("tool", ("speed", tool) if tool is not None else None, _strip(picture, -1), signs)


def _largest(joint: JointAudit) -> tuple[str, Peak] | None:
    peaks = joint.peaks()
    if not peaks:
        return None
    quantity = max(peaks, key=lambda name: peaks[name].share)
    return quantity, peaks[quantity]


def _line(name: str, used: tuple[str, Peak] | None, parts: np.ndarray, signs: Signs) -> str:
    shown = printable(name)
    shown = shown if len(shown) <= NAME else shown[: NAME - 3] + "..."
    share, words = 0.0, "no limit"
    if used is not None:
        quantity, peak = used
        share, over = peak.share, peak.share > 1 + TOLERANCE
        percent = f"{max(100 * share, 100.1):.1f} %!" if over else f"{100 * share:.1f} %"
        words = f"{percent:>8} {SHORT.get(quantity, quantity)}"
    edge = "▏" if signs == "blocks" else "|"
    strip = "".join(_height(part, signs) for part in parts.tolist())
    return f"{shown:{NAME}}  {_bar(share, signs)}{edge}{words:{WORDS}} {edge}{strip}{edge}".rstrip()


def _bar(share: float, signs: Signs) -> str:
    filled = min(max(share, 0.0), 1.0) * BAR
    if signs == "ascii":
        return ("#" * round(filled)).ljust(BAR, ".")
    whole = int(filled)
    rest = EIGHTHS[round(8 * (filled - whole))] if whole < BAR else ""
    return ("█" * whole + rest).ljust(BAR)


def _height(part: float, signs: Signs) -> str:
    if part < PART:
        return " "
    if signs == "ascii":
        return "#" if part >= 0.5 else "-"
    return HEIGHTS[max(1, round(8 * part))]


def _strip(picture: Picture, row: int) -> np.ndarray:
    """Part (STRIP,) of each cell of the time axis in which a limit of this row paces."""
    start, end = float(picture.kept_time[0]), float(picture.kept_time[-1])
    edges = np.linspace(start, end if end > start else start + 1.0, STRIP + 1)
    paced = np.zeros(STRIP)
    for run in picture.pace:
        if picture.labels[run.value][0] == row:
            paced += np.clip(np.minimum(run.end, edges[1:]) - np.maximum(run.start, edges[:-1]), 0.0, None)
    return np.asarray(paced / np.diff(edges))
