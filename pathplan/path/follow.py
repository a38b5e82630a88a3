"""From a task to its joint path: geometry, branches, corners, pieces, stretches."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from itertools import chain

import numpy as np

from pathplan.errors import PathplanError, UnreachableError
from pathplan.path.assembly import assemble
from pathplan.path.bending import with_bends
from pathplan.path.bounds import Crossing, first_crossing
from pathplan.path.cartesian import CartesianPath, cartesian_path, tool_frames
from pathplan.path.choice import Choice, Routes, candidate_states, choose, routes, with_limits
from pathplan.path.fastest import least_time, limited_rows
from pathplan.path.fit import Pieces, Trouble, fit
from pathplan.path.five import decides_roll, with_virtual_roll
from pathplan.path.geometry import poses_of
from pathplan.path.hermite import derivatives_at
from pathplan.path.joint import Array
from pathplan.path.ladder import best_ways
from pathplan.path.layout import Layout, lay_out
from pathplan.path.motions import motions_of
from pathplan.path.refusals import limit_text, motion_words, place_text
from pathplan.path.rungs import rungs_of
from pathplan.path.settling import TIGHTNESS, settled
from pathplan.path.singular import singularity
from pathplan.path.states import States
from pathplan.path.taskpath import TaskPath
from pathplan.path.tracking import Tracks, track
from pathplan.task.model import Task
from pathplan.task.places import check_positions

__all__ = ["check_branches", "follow_task"]

Progress = Callable[[str, int, int], None]

_PARTS = 6  # of the work, taking about the same time each, that progress is told of
_SAMPLES = 200  # of a stretch, to compare paths by
_CHOICES = 40  # of branches, each found unusable only on the finished path


def follow_task(task: Task, progress: Progress | None = None) -> TaskPath:
    """The joint path of a task: lines and arcs followed to 1 um and 1 urad, corners within their regions,
    limits kept.

    The branches are those that make the task shortest by the velocity limits. A choice that turns out
    unusable on the finished path (a limit passed between samples, a corner that runs into a singularity)
    is barred and the next best taken.

    Raises
    ------
    InputError
        A step makes no line or arc, turns the tool by a half turn, or has a blend that can't be kept.
    UnreachableError
        A target is out of reach, or no branch can follow a step; the message names step, share, pose and
        reason, and `data` holds step, share, pose, joint, limit, singular, best.
    """
    say = progress or _silent
    refusal: UnreachableError | None = None
    for paths in _decided(task, say):
        followed = []
        for path in paths:
            try:
                followed.append(_followed(path, task, say))
            except UnreachableError as found:
                refusal = refusal or found
        if followed:
            return followed[0] if len(followed) == 1 else min(followed, key=_time_about)
    assert refusal is not None
    raise refusal


def _time_about(path: TaskPath) -> float:
    """s that the joints take for a path, about, as if there were no jerk limits."""
    total = 0.0
    for stretch in path.stretches:
        matrix, velocity, acceleration, _ = limited_rows(stretch.arm)
        s = np.linspace(0.0, stretch.path.length, _SAMPLES)
        total += least_time(s, stretch.path(s) @ matrix.T, velocity, acceleration)
    return total


def _decided(task: Task, say: Progress) -> Iterator[list[CartesianPath]]:
    """The programmed geometry of a task, everything that it leaves free decided: ways to do so, where the first ones
    can't be followed others.
    """
    say("path", 0, _PARTS)
    _check_given_joints(task)
    if any(step.roll_free for step in task.steps) and decides_roll(task.arm):
        task = with_virtual_roll(task)
    path = cartesian_path(task)
    if path.free is None or not path.free.chosen:
        yield [settled(path, None)]
        return
    ways = best_ways(path, rungs_of(path))
    for tightness in TIGHTNESS:
        yield [settled(path, way, tightness) for way in ways]


def _followed(path: CartesianPath, task: Task, say: Progress) -> TaskPath:
    """The joint path of a task in which nothing is free any more."""
    path, frames, states, tracks, ways = _tracked(path, say)
    barred_legs: set[tuple[int, int, int]] = set()
    barred_states: set[int] = set()
    refusal: PathplanError | None = None
    for _ in range(_CHOICES):
        try:
            choice = choose(path, states, tracks, ways, barred_legs=barred_legs, barred_states=barred_states)
        except UnreachableError:
            if refusal is not None:
                break
            raise
        say("path", 3, _PARTS)
        layout = lay_out(path, motions_of(path, choice, tracks, ways, frames))
        say("path", 4, _PARTS)
        try:
            pieces = fit(layout.spans)
            crossing = first_crossing(pieces, path.task.arm.limits)
        except Trouble as trouble:
            found = _trouble_words(path, layout, trouble)
            span = trouble.span
        else:
            if crossing is None:
                say("path", 5, _PARTS)
                return assemble(task, path, choice, layout, pieces)
            found = _crossing_words(path, layout, pieces, crossing)
            span = int(pieces.span[crossing.piece])
        refusal = refusal or found
        _bar(layout, choice, span, barred_legs, barred_states)
    assert refusal is not None
    raise refusal


def check_branches(task: Task) -> None:
    """The quick part of `follow_task`: raises what it raises where no branch can follow a step, as far as samples
    along the steps tell. Corners, and limits between samples, are left aside.
    """
    refusal: UnreachableError | None = None
    for decided in chain.from_iterable(_decided(task, _silent)):
        path, _, states, tracks, ways = _tracked(decided, _silent)
        try:
            choose(path, states, tracks, ways)
            return
        except UnreachableError as found:
            refusal = refusal or found
    assert refusal is not None
    raise refusal


def _tracked(path: CartesianPath, say: Progress) -> tuple[CartesianPath, Array, States, Tracks, Routes]:
    """The path with its steps bent where they tolerate it, tool frames of the legs, the states at the targets, and
    every branch along the steps.
    """
    say("path", 1, _PARTS)
    frames = tool_frames(path)
    states = candidate_states(path, frames)
    rows = np.array([i for i, leg in enumerate(path.legs) if leg.segment >= 0], dtype=np.intp)
    tracks = track(path.course, path.segments, frames[rows])
    states = with_limits(path, states, tracks)
    path, tracks = with_bends(path, tracks, frames[rows])
    ways = routes(path, states, tracks)
    say("path", 2, _PARTS)
    return path, frames, states, tracks, ways


def _silent(what: str, done: int, total: int) -> None:
    """No progress is told."""


def _check_given_joints(task: Task) -> None:
    """Refuse a start or a target given as a joint vector outside the position limits."""
    check_positions(task.start, task.arm, f"{task.file.name if task.file else task.title}: start")
    for step in task.steps:
        if step.target is not None and step.target.joints is not None:
            check_positions(step.target.joints, task.arm, step.where)


def _bar(
    layout: Layout, choice: Choice, span: int, barred_legs: set[tuple[int, int, int]], barred_states: set[int]
) -> None:
    """Bar what led to a span: the state its step starts from, or the state in the middle of its corner."""
    leg = int(layout.spans.motions.leg[layout.spans.before[span]])
    if layout.spans.corner[span]:
        barred_states.add(int(choice.state[leg + 1]))
    else:
        barred_legs.add((leg, int(choice.state[leg]), int(choice.segment[leg])))


def _trouble_words(path: CartesianPath, layout: Layout, trouble: Trouble) -> UnreachableError:
    arm = path.task.arm
    text, singular = singularity(arm, trouble.q)
    reason = f"it meets {text}" if trouble.kind == "singular" else "it leaves the reach of the arm"
    data = {"singular": singular} if trouble.kind == "singular" else {}
    return _refusal(path, layout, trouble.span, trouble.at, trouble.q, reason, data)


def _crossing_words(path: CartesianPath, layout: Layout, pieces: Pieces, crossing: Crossing) -> UnreachableError:
    arm, piece = path.task.arm, crossing.piece
    q = derivatives_at(pieces.coefficients[:, piece : piece + 1], np.array([crossing.local]))[0, 0]
    limit = float(arm.limits.position[crossing.row, crossing.side])
    data = {"joint": arm.limits.names[crossing.row], "limit": limit}
    at = float(pieces.start[piece]) + crossing.local
    return _refusal(path, layout, int(pieces.span[piece]), at, q, limit_text(arm, crossing.row, crossing.side), data)


def _refusal(
    path: CartesianPath,
    layout: Layout,
    span: int,
    at: float,
    q: np.ndarray,
    reason: str,
    data: Mapping[str, object],
) -> UnreachableError:
    spans = layout.spans
    i, where = np.array([span]), np.array([at])
    motion = int(spans.before[span])
    step = path.legs[spans.motions.leg[motion]].step
    if spans.programmed()[span]:
        jets = spans.tool_jets(i, where)
        pose = poses_of(jets.position[0], jets.rotation)[0]
    else:
        pose = path.task.arm.forward(q)
    share = float(np.clip(spans.sides(i, where)[0][0] / spans.motions.length[motion], 0.0, 1.0))
    if spans.corner[span]:
        text = (
            f"{step.where}: the corner after this step can't be followed: at {place_text(pose)} {reason}; "
            "a smaller blend may help"
        )
    else:
        text = (
            f"{step.where}: no branch can follow this {motion_words(step)}: "
            f"the best gets to {share * 100:.1f} % of it, {place_text(pose)}, where {reason}"
        )
    data = {"step": step.index, "share": share, "pose": pose, "best": q, "corner": bool(spans.corner[span]), **data}
    return UnreachableError(text, data=data)
