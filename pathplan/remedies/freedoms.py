"""Remedies by asking less: the roll of a tool that may turn about its own axis, axes that a pose leaves free."""

from __future__ import annotations

from collections.abc import Iterator

from pathplan.remedies.model import Remedy
from pathplan.remedies.trials import Trials
from pathplan.remedies.words import step_text
from pathplan.task.changed import with_step
from pathplan.task.model import Step

__all__ = ["free_axes", "free_roll"]


def free_roll(trials: Trials) -> Iterator[Remedy]:
    """A free roll of the refused step, else of the step before it too, which leaves free how it starts."""
    task, step = trials.task, trials.step
    if not _may_roll(task.steps[step]):
        return
    before = next((i for i in range(step - 1, -1, -1) if task.steps[i].motion != "wait"), None)
    choices = [[step]]
    if before is not None and task.steps[step].motion != "joint" and _may_roll(task.steps[before]):
        choices.append([before, step])
    for indices in choices:
        changed = task
        for index in indices:
            changed = with_step(changed, index, roll_free=True)
        what = f'{" and ".join(step_text(task, index) for index in indices)}: roll = "free"'
        if not trials.follows(changed, step):
            continue
        text = f"{what}, if the tool may turn about its own z axis"
        found = trials.proven("roll", text, changed, {"steps": list(indices)}, step)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(what)


def _may_roll(step: Step) -> bool:
    """The step goes to a pose, whose roll is asked."""
    given = step.target is not None and step.target.joints is not None
    return not given and step.motion not in ("wait", "taught") and not step.roll_free


def free_axes(trials: Trials) -> Iterator[Remedy]:
    """The axes of the refused step left free that it says where to put."""
    task, step = trials.task, trials.step
    asked = task.steps[step].axes
    if not asked:
        return
    what = f"{step_text(task, step)}: {' and '.join(asked)} left free"
    changed = with_step(task, step, axes={})
    if trials.follows(changed, step):
        found = trials.proven("axes", what, changed, {"axes": sorted(asked)}, step)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(what)
