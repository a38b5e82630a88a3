"""Many tasks in one call: a line or two of each, and a summary table of all, as text and as data."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

from pathplan.report.plan_data import bound_at_pace
from pathplan.report.screen import verdict
from pathplan.report.text import aligned, clock, fit, printable

if TYPE_CHECKING:
    from pathplan.auditing import Audit
    from pathplan.planning import Plan

__all__ = ["Summary", "batch_as_dict", "batch_screen", "summary_of"]

STATUSES = {1: "not followed", 2: "bad input"}  # what a task without a plan came to
NAME = 28  # columns


@dataclass(frozen=True)
class Summary:
    """A plan in one line of a table. `paced`: what limits the motion for most of its time, and for which part of it."""

    verdict: str
    duration: float  # s
    bound: float  # s, at the plan's pace
    paced: str
    rows: int


class Outcome(Protocol):
    """What came of a task, as the command line has it."""

    @property
    def file(self) -> str: ...
    @property
    def status(self) -> int: ...
    @property
    def complaints(self) -> tuple[str, ...]: ...
    @property
    def text(self) -> str: ...
    @property
    def document(self) -> Mapping[str, Any] | None: ...
    @property
    def summary(self) -> Summary | None: ...


def summary_of(plan: Plan) -> Summary:
    """What the summary tells of a plan."""
    return Summary(verdict(plan.audit), plan.duration, bound_at_pace(plan), _paced(plan.audit), plan.ticks + 1)


def _paced(audit: Audit) -> str:
    """The joint and the limit that set the pace for the largest part of the time in motion, 'shoulder jerk 34 %'."""
    times: dict[str, float] = {}
    total = 0.0
    for step in audit.pacing:
        for part in step.parts:
            if part.quantity == "none":
                continue
            name = part.quantity if part.joint is None else f"{part.joint} {part.quantity}"
            times[name] = times.get(name, 0.0) + part.part * step.duration
        total += step.duration
    if not times:
        return "-"
    worst = max(times, key=lambda name: times[name])
    return f"{worst} {100 * times[worst] / total:.0f} %"


def batch_screen(outcomes: Sequence[Outcome]) -> str:
    """Lines of at most 100 columns: what each plan came to, and the summary."""
    told = "\n".join(outcome.text for outcome in outcomes if outcome.text)
    return (told + "\n\n" if told else "") + "\n".join(_table(outcomes))


def _table(outcomes: Sequence[Outcome]) -> list[str]:
    table = [["task", "verdict", "cycle time", "bound", "paced by, part of time", "rows"]]
    for outcome in outcomes:
        summary, name = outcome.summary, _shortened(printable(outcome.file))
        if summary is None:
            table.append([name, STATUSES.get(outcome.status, "error"), "-", "-", "-", "-"])
        else:
            # the bound rounded down, so that what is printed stays true
            bound = clock(math.floor(summary.bound * 1e3) / 1e3)
            table.append(
                [name, _short(summary.verdict), clock(summary.duration), bound, printable(summary.paced),
                 str(summary.rows)]
            )  # fmt: skip
    lines = list(aligned(table, [NAME, 13, 12, 12, 23, 9], left=(0, 1, 4)))
    for row, outcome in enumerate(outcomes, start=1):
        if outcome.summary is None:
            start = lines[row].rstrip(" -")
            lines[row] = fit(f"{start}: {printable(_reason(outcome))}")
    good = sum(outcome.status == 0 for outcome in outcomes)
    failed = len(outcomes) - good
    lines.append(f"{good} of {len(outcomes)} tasks within limits" + (f", {failed} not" if failed else ""))
    return lines


def _short(text: str) -> str:
    """A verdict without how many times limits are broken."""
    return text.split(" (")[0]


def _shortened(name: str) -> str:
    """A long path by its end, which tells tasks apart."""
    return name if len(name) <= NAME else "..." + name[-(NAME - 3) :]


def _reason(outcome: Outcome) -> str:
    """Why there is no plan, without the file, whose name stands beside it."""
    reason = outcome.complaints[0]
    for start in (f"{outcome.file}: ", f"{outcome.file.rsplit('/', 1)[-1]}: "):
        reason = reason.removeprefix(start)
    more = len(outcome.complaints) - 1
    return reason + (f" (and {more} more)" if more else "")


def batch_as_dict(outcomes: Sequence[Outcome], status: int) -> dict[str, Any]:
    """One document of all tasks: that of each as for a task alone, or None, with its file, status and complaints."""
    return {
        "passed": status == 0,
        "status": status,
        "tasks": [
            {
                "file": outcome.file,
                "status": outcome.status,
                "complaints": list(outcome.complaints),
                "document": outcome.document,
            }
            for outcome in outcomes
        ],
    }
