"""Remedies by another branch: of the start, at a target on the way, or taken up by a joint step on the spot."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from pathplan.errors import PathplanError
from pathplan.path.cartesian import tool_of
from pathplan.path.newton import joint_weights
from pathplan.path.states import LIMIT_SLACK
from pathplan.remedies.model import Remedy
from pathplan.remedies.trials import Trials
from pathplan.remedies.words import configuration_text, joints_text, step_text
from pathplan.task.changed import with_inserted, with_start, with_step
from pathplan.task.model import Array, Step, Task
from pathplan.tomlfile import read_only
from pathplan.units import to_screen

__all__ = ["other_branches", "turned_over"]

MOST = 24  # joint vectors tried at one place, the nearest first
SAME = 1e-6  # rad or m


def other_branches(trials: Trials) -> Iterator[Remedy]:
    """Another start, or another configuration or joint vector at a target that leaves the step no choice of branch."""
    task, step = trials.task, trials.step
    for index in range(step, -1, -1):
        at = task.steps[index]
        if at.configuration:
            yield from _other_configuration(trials, index)
        if at.motion == "taught" or (index == step and at.target is not None and at.target.joints is not None):
            return  # where the path leads is given
        if at.target is not None and at.target.joints is not None:
            yield from _other_joints(trials, index)
            return
        if at.motion == "joint":
            return  # any branch can be had here already
    yield from _other_start(trials)


def _other_configuration(trials: Trials, index: int) -> Iterator[Remedy]:
    """Other words for the branch at a step's target; planning says which."""
    task, asked = trials.task, trials.task.steps[index].configuration
    free = with_step(task, index, configuration={})
    what = f"{step_text(task, index)}: another configuration"
    if not (trials.promises(free, trials.step) and trials.follows(free, trials.step)):
        trials.tried.append(what)
        return
    labels = task.arm.solver.labels
    others = {tuple((part, label[part]) for part in asked if part in label): None for label in labels}
    words = [dict(other) for other in others if dict(other) != dict(asked)]
    words.sort(key=lambda other: sum(other[part] != asked[part] for part in other))
    for other in words:
        changed = with_step(task, index, configuration=other)
        if not (trials.promises(changed, trials.step) and trials.follows(changed, trials.step)):
            continue
        text = f"{step_text(task, index)}: {configuration_text(other)} in place of {configuration_text(asked)}"
        found = trials.proven("branch", text, changed, {"configuration": other}, index)
        if isinstance(found, Remedy):
            yield found
            return
    trials.tried.append(what)


def _other_joints(trials: Trials, index: int) -> Iterator[Remedy]:
    """Another joint vector of the same tool pose at a step whose target is one."""
    task, at = trials.task, trials.task.steps[index]
    assert at.target is not None and at.target.joints is not None
    for q in _others(task, at.target.joints):
        changed = with_step(task, index, target=_given(task, at, q))
        if trials.promises(changed, index, trials.step) and trials.follows(changed, index, trials.step):
            words = joints_text(task.arm, q)
            text = f"{step_text(task, index)}: joints = {words}, another branch of the same tool pose"
            found = trials.proven("branch", text, changed, {"joints": q}, index)
            if isinstance(found, Remedy):
                yield found
                return
    trials.tried.append(f"{step_text(task, index)}: other branches of its tool pose")


def _given(task: Task, step: Step, q: Array) -> object:
    from dataclasses import replace

    assert step.target is not None
    target = replace(step.target, joints=read_only(q))
    if target.frame_from_tool is None:
        return target
    own = task.arm.tool.flange_from_tool
    swap = np.linalg.solve(own, tool_of(task.arm, step.tool).flange_from_tool)
    return replace(target, frame_from_tool=read_only(task.arm.forward(q) @ swap))


def _other_start(trials: Trials) -> Iterator[Remedy]:
    task = trials.task
    for q in _others(task, task.start):
        changed = with_start(task, q)
        if trials.promises(changed, trials.step) and trials.follows(changed, trials.step):
            text = f"start in another branch of the same tool pose: start = {joints_text(task.arm, q)}"
            found = trials.proven("branch", text, changed, {"start": q})
            if isinstance(found, Remedy):
                yield found
                return
    trials.tried.append("other branches of the start")


def turned_over(trials: Trials) -> Iterator[Remedy]:
    """A joint step before the refused line, arc, curve or taught path, to where the path can be followed from."""
    task, step = trials.task, trials.task.steps[trials.step]
    if step.motion == "joint":
        return
    if step.taught is not None:
        places: Sequence[Array] = [step.taught.points[0]]
        where = "to its first point"
    else:
        before = _start_of(trials)
        if before is None:
            return
        places, where = _others(task, before), "to another branch of the same tool pose"
    for q in places:
        changed = with_inserted(task, trials.step, q)
        later = trials.step + 1
        if trials.promises(changed, later) and trials.follows(changed, later):
            text = f"a joint step before {step_text(task, trials.step)}, {where}: joints = {joints_text(task.arm, q)}"
            found = trials.proven("branch", text, changed, {"joints": q, "before": trials.step}, trials.step)
            if isinstance(found, Remedy):
                yield found
                return
    trials.tried.append(f"a joint step before {step_text(task, trials.step)}, {where}")


def _start_of(trials: Trials) -> Array | None:
    """Some joint vector (n,) at which the refused step starts."""
    from pathplan.path import follow_task
    from pathplan.remedies.trials import window

    if trials.step == 0:
        return trials.task.start
    try:
        return np.asarray(follow_task(window(trials.task, trials.step - 1)).targets[-1])
    except PathplanError:
        return None


def _others(task: Task, q: Array) -> list[Array]:
    """Other joint vectors of the tool pose at q (n,), within the limits, the nearest first, rounded as written."""
    arm = task.arm
    try:
        answers = arm.inverse(arm.forward(q), outside=q)
    except PathplanError:
        return []
    weights = joint_weights(arm)
    away = (np.abs(answers - q) * weights).max(axis=1)
    order = np.argsort(away, kind="stable")
    units = np.array([to_screen(1.0, "angle" if joint.kind == "revolute" else "length") for joint in arm.joints])
    rounded = np.round(answers[order] * units, 4) / units
    low, high = np.array([joint.position for joint in arm.joints]).T
    return [
        row
        for row, far in zip(np.clip(rounded, low - LIMIT_SLACK, high + LIMIT_SLACK), away[order], strict=True)
        if far > SAME
    ][:MOST]
