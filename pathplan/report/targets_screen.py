"""The branches at the targets of a task, as text and as data."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from pathplan.path.targets import TargetBranches
from pathplan.report.text import aligned, printable
from pathplan.task import Task
from pathplan.units import format_quantity, format_value, joint_dimension, to_screen

__all__ = ["targets_as_dict", "targets_screen"]

MOST_TARGETS = 12
MOST_BRANCHES = 16  # of one target that is shown whole
WIDTHS = (6, 18, 8, 30, 24, 8)


def targets_screen(task: Task, found: TargetBranches, focus: int | None = None) -> Iterator[str]:
    """Lines of at most 100 columns: how many branches reach each target and the one used, or with most room.

    Of many targets those with the least room are shown; of the step `focus` (0-based), which was refused, each branch.
    """
    if not len(found.step):
        return
    planned = bool((found.used >= 0).any())
    best = _best(found)
    room = np.where(found.within.any(axis=1), _weighed(task, found)[np.arange(len(best)), best], -np.inf)
    shown = np.sort(np.argsort(room, kind="stable")[:MOST_TARGETS])
    if focus is not None:
        shown = np.union1d(shown, np.flatnonzero(found.step == focus))
    which = "used" if planned else "with most room"
    parts = ", ".join(dict.fromkeys(part for label in found.labels for part in label))
    table = [["step", "", "branches", which, "nearest limit", "singular"]]
    for k in shown:
        step = task.steps[int(found.step[k])]
        inside, reached = int(found.within[k].sum()), int(found.reached[k].sum())
        cells = [str(step.index + 1), printable(step.name), f"{inside} of {reached}"]
        if reached == 0:
            table.append([*cells, "out of reach", "-", "-"])
            continue
        table.append([*cells, *_branch_cells(task, found, int(k), int(best[k]))])
        if step.index == focus:
            others = [b for b in np.flatnonzero(found.reached[k])[:MOST_BRANCHES] if b != best[k]]
            table += [["", "", "", *_branch_cells(task, found, int(k), int(b))] for b in others]
    named = f" ({parts})" if parts else ""
    yield f"targets: branches{named} within the limits, of those that reach the pose"
    yield from aligned(table, WIDTHS, left=(1, 3, 4))
    if len(shown) < len(found.step):
        more = len(found.step) - len(shown)
        yield f"... and {more} targets with more room; all of them, with every branch, in --json"


def _best(found: TargetBranches) -> Any:
    """(L,) the branch used; without one that with most room of those within the limits, else the one least beyond."""
    room = np.where(found.within, found.margin, np.where(found.reached, found.margin - 1e6, -np.inf))
    return np.where(found.used >= 0, found.used, room.argmax(axis=1))


def _weighed(task: Task, found: TargetBranches) -> Any:
    """Margins that can be compared: rad, and metres over the arm's length."""
    slides = np.array([kind == "prismatic" for kind in task.arm.limit_kinds])
    return found.margin / np.where(slides[found.limit], task.arm.length, 1.0)


def _branch_cells(task: Task, found: TargetBranches, k: int, b: int) -> list[str]:
    words = ", ".join(found.labels[b].values()) or f"branch {b + 1}"
    return [words, _margin_text(task, found, k, b), format_value(float(found.singular[k, b]), 2)]


def _margin_text(task: Task, found: TargetBranches, k: int, b: int) -> str:
    margin, row = float(found.margin[k, b]), int(found.limit[k, b])
    if not np.isfinite(margin):
        return "-"
    kind = task.arm.limit_kinds[row]
    size = format_quantity(abs(margin), joint_dimension(kind, "position") if kind else "number", 3)
    return printable(f"{task.arm.limits.names[row]} {size}{' beyond' if margin < 0 else ''}")


def targets_as_dict(task: Task, found: TargetBranches) -> list[dict[str, Any]]:
    """Every target and every branch that reaches it, for JSON: mm and deg, steps counted from 1."""
    arm = task.arm
    kinds = [joint_dimension(kind, "position") if kind else "number" for kind in arm.limit_kinds]
    units = np.array([to_screen(1.0, joint_dimension(joint.kind, "position")) for joint in arm.joints])
    scale = np.array([to_screen(1.0, kind) for kind in kinds])[found.limit]
    positions, margins = (found.q * units).tolist(), (found.margin * scale).tolist()
    singular, limit = found.singular.tolist(), found.limit.tolist()
    out = []
    for k, step in enumerate(found.step.tolist()):
        branches = []
        for b in np.flatnonzero(found.reached[k]).tolist():
            finite = bool(np.isfinite(margins[k][b]))
            branches.append(
                {
                    "configuration": dict(found.labels[b]),
                    "used": bool(b == found.used[k]),
                    "within_limits": bool(found.within[k, b]),
                    "nearest_limit": arm.limits.names[limit[k][b]] if finite else None,
                    "margin": margins[k][b] if finite else None,
                    "margin_unit": {"angle": "deg", "length": "mm"}.get(kinds[limit[k][b]], "") if finite else None,
                    "smallest_singular_value": singular[k][b],
                    "position": positions[k][b],
                }
            )
        out.append({"step": step + 1, "name": task.steps[step].name, "branches": branches})
    return out
