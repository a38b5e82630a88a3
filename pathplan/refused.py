"""What the command line shows of a task that is refused, below the one line that says why."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

from pathplan.errors import PathplanError
from pathplan.task import Task

__all__ = ["show_remedies"]


def show_remedies(
    args: argparse.Namespace, task: Task, refusal: PathplanError, seconds: float, show: Callable[[str], None]
) -> None:
    """What would make the task work, searched for so many seconds; nothing if quiet."""
    from pathplan.planning import versions
    from pathplan.remedies import find_remedies
    from pathplan.report.outputs import json_text
    from pathplan.report.progress import Progress
    from pathplan.report.remedies_screen import refusal_as_dict, remedies_as_dict, remedies_screen

    if args.quiet:
        return
    remedies = None
    if seconds > 0 and refusal.data.get("step") is not None:
        with Progress(sys.stderr, quiet=args.json) as tell:
            remedies = find_remedies(task, refusal, seconds=seconds, progress=tell)
    if args.json:
        document: dict[str, Any] = {"pathplan": versions()["pathplan"], "task": task.title}
        document |= {"task_file": Path(args.file).name, "refused": refusal_as_dict(refusal)}
        show(json_text(document | ({} if remedies is None else remedies_as_dict(remedies))))
    elif remedies is not None:
        show("\n".join(remedies_screen(remedies)))
