"""What the command line shows of a task that is refused, below the one line that says why."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from pathplan.errors import PathplanError
from pathplan.task import Task

__all__ = ["show_remedies", "show_targets"]


def show_remedies(
    args: argparse.Namespace, task: Task, refusal: PathplanError, seconds: float, show: Callable[[str], None]
) -> None:
    """What would make the task work, searched for so many seconds; nothing if quiet."""
    from pathplan.remedies import find_remedies
    from pathplan.report.progress import Progress
    from pathplan.report.remedies_screen import remedies_as_dict, remedies_screen

    if args.quiet:
        return
    remedies = None
    if seconds > 0 and refusal.data.get("step") is not None:
        with Progress(sys.stderr, quiet=args.json) as tell:
            remedies = find_remedies(task, refusal, seconds=seconds, progress=tell)
    if args.json:
        show(_document(args, task, refusal, {} if remedies is None else remedies_as_dict(remedies)))
    elif remedies is not None:
        show("\n".join(remedies_screen(remedies)))


def show_targets(args: argparse.Namespace, task: Task, refusal: PathplanError, show: Callable[[str], None]) -> None:
    """The branches at the targets of the task, each of the refused step; nothing if quiet."""
    from pathplan.path import target_branches
    from pathplan.report.targets_screen import targets_as_dict, targets_screen

    if args.quiet:
        return
    found = target_branches(task)
    if args.json:
        show(_document(args, task, refusal, {"targets": targets_as_dict(task, found)}))
    else:
        show("\n".join(targets_screen(task, found, refusal.data.get("step"))))


def _document(args: argparse.Namespace, task: Task, refusal: PathplanError, more: Mapping[str, Any]) -> str:
    """The JSON document of a refused task."""
    from pathplan.planning import versions
    from pathplan.report.outputs import json_text
    from pathplan.report.remedies_screen import refusal_as_dict

    head = {"pathplan": versions()["pathplan"], "task": task.title, "task_file": Path(args.file).name}
    return json_text({**head, "refused": refusal_as_dict(refusal), **more})
