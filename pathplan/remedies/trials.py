"""Trying a changed task: first on the few steps that matter, then whole."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from pathplan.errors import LimitError, PathplanError
from pathplan.path import check_branches, follow_task
from pathplan.remedies.model import Kind, Remedy
from pathplan.task.changed import numbered
from pathplan.task.model import Task

__all__ = ["OutOfTime", "Trials", "window"]


LONG_TASK = 300  # steps: planning a longer task whole may take all the time there is, so it gets
SHARE = 1.0 / 3.0  # of what is left, to find other remedies in the rest


class OutOfTime(Exception):
    """The time for the search has run out."""


@dataclass
class Trials:
    """The refused task, and what has been tried on it; grows in place.

    `step` (0-based) is where it was refused. `quick`: the refusal shows while branches are followed, before corners.
    """

    task: Task
    error: PathplanError
    deadline: float
    tried: list[str] = field(default_factory=list)
    finished: bool = True
    too_long: bool = False  # planning the whole task has been given up once

    def __post_init__(self) -> None:
        self.step = int(self.error.data["step"])
        self.corner = bool(self.error.data.get("corner"))
        self.held = isinstance(self.error, LimitError)
        self.quick = not self._passes(window(self.task, self.step, self.corner), check_branches)

    def check_time(self) -> None:
        """Raises OutOfTime."""
        if time.monotonic() > self.deadline:
            raise OutOfTime

    def promises(self, task: Task, *steps: int) -> bool:
        """A quick look at the steps (0-based): what it refuses can't be planned."""
        return all(self._tried(task, step, check_branches if self.quick else self._followed) for step in steps)

    def follows(self, task: Task, *steps: int) -> bool:
        """The steps (0-based), with what leads to them, can be followed, corners and limits and all."""
        return all(self._tried(task, step, self._followed) for step in steps)

    def _tried(self, task: Task, step: int, how: Callable[[Task], object]) -> bool:
        self.check_time()
        return self._passes(window(task, step, self.corner), how)

    def _followed(self, task: Task) -> None:
        from pathplan.planning import follow_and_hold

        if self.held:
            follow_and_hold(task)
        else:
            follow_task(task)

    @staticmethod
    def _passes(task: Task, how: Callable[[Task], object]) -> bool:
        try:
            how(task)
        except PathplanError:
            return False
        return True

    def proven(
        self, what: Kind, text: str, task: Task, changes: Mapping[str, Any], step: int | None = None
    ) -> Remedy | PathplanError:
        """The remedy with the whole task planned, or why that is refused. `text` without the time it then takes."""
        from pathplan.planning import plan

        remedy = Remedy(what, text, step, changes, task, None)
        if self.too_long:
            return remedy
        end = self.deadline
        if len(task.steps) > LONG_TASK:
            end = min(end, time.monotonic() + (end - time.monotonic()) * SHARE)

        def within(*_: object) -> None:
            if time.monotonic() > end:
                raise OutOfTime

        try:
            within()
            return replace(remedy, duration=plan(task, progress=within).duration)
        except OutOfTime:  # what was found holds for the steps that were tried
            self.finished, self.too_long = False, True
            return remedy
        except PathplanError as error:
            return error


def window(task: Task, step: int, corner: bool = False) -> Task:
    """The few steps that decide whether `step` (0-based) can be followed, as a task of its own.

    Any branch within the limits can be had at the end of a joint step, wherever it comes from, and joint positions
    that are given leave no choice: nothing before the last of either matters. With `corner` the next step that moves
    belongs to it, for the corner between them.
    """
    steps = task.steps
    first, start = step, task.start
    while first > 0 and steps[first].motion != "joint":
        before = steps[first - 1].target
        if before is not None and before.joints is not None:
            start = before.joints
            break
        first -= 1
    end = step + 1
    if corner:
        end = next((i + 1 for i in range(end, len(steps)) if steps[i].motion != "wait"), end)
    return replace(task, start=start, steps=numbered(steps[first:end]))
