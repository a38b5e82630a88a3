"""The search for what would make a refused task work."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator

from pathplan.errors import InputError, LimitError, PathplanError, UnreachableError
from pathplan.remedies.branches import other_branches, turned_over
from pathplan.remedies.frames import moved_workpiece
from pathplan.remedies.freedoms import free_axes, free_roll
from pathplan.remedies.model import Remedies, Remedy
from pathplan.remedies.steps import joint_step, less_load, orientation_tolerance, served_pose, smaller_blend
from pathplan.remedies.trials import OutOfTime, Trials
from pathplan.task.model import Task

__all__ = ["SECONDS", "find_remedies"]

SECONDS = 10.0

# Each gives the remedies of its kind, the nearest only, proven; what it tried in vain goes into `Trials.tried`.
KINDS: tuple[Callable[[Trials], Iterator[Remedy]], ...] = (
    smaller_blend,
    served_pose,
    free_axes,
    orientation_tolerance,
    joint_step,
    other_branches,
    free_roll,
    less_load,
    moved_workpiece,
    turned_over,
)


def find_remedies(
    task: Task,
    error: PathplanError,
    *,
    seconds: float = SECONDS,
    progress: Callable[[str, int, int], None] | None = None,
) -> Remedies:
    """The nearest changes that let a refused task be planned.

    Tried are another branch (of the start, at a target on the way, by a joint step on the spot), a joint step in place
    of a line or arc, a tolerance of its orientation, a free roll of the tool, axes left free, a smaller blend where a
    corner is refused, the nearest pose that an arm with fewer than six axes serves, a lighter payload where a pose
    can't be held, and the workpiece moved: the smallest shift along x, y or z, up to half the arm's length, and turn
    about z, up to 90 deg, of each frame that the step is in, or of its target if that is in none. They are found on the
    few steps that decide, by
    bisection to 0.1 mm and 0.1 deg; then the whole task is planned with each of them.

    Parameters
    ----------
    task, error
        The task, and the UnreachableError or LimitError with which `plan` refuses it.
    seconds
        After this time the search ends: what is found by then is returned, `Remedies.finished` is False. One
        path that is being followed at that moment is followed to its end.
    progress
        Called with what is being done, how many kinds of remedy are done, and of how many.

    Raises
    ------
    InputError
        The error is of another kind, or names no step of the task.
    """
    step = error.data.get("step")
    if not isinstance(error, UnreachableError | LimitError) or step is None or not 0 <= step < len(task.steps):
        raise InputError("remedies: expected the UnreachableError or LimitError of a step with which plan refused it")
    say = progress or (lambda what, done, total: None)
    say("remedies", 0, len(KINDS))
    trials = Trials(task, error, time.monotonic() + seconds)
    found: list[Remedy] = []
    for done, kind in enumerate(KINDS, start=1):
        try:
            found.extend(kind(trials))
        except OutOfTime:
            trials.finished = False
            break
        say("remedies", done, len(KINDS))
    return Remedies(tuple(found), tuple(trials.tried), trials.finished)
