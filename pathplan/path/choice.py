"""Which branch the arm takes where, over the whole task: the shortest in time by the velocity limits.

Dynamic programming over the targets (Bellman 1957). A line or arc leads from each state to the one it
arrives in by following it; a joint step from any state to any. The cost of a motion is the time its
fastest-asked joint needs at its velocity limit, summed along lines and arcs, so it does not count
accelerating and stopping.
"""

from __future__ import annotations

from collections.abc import Mapping, Set
from dataclasses import dataclass

import numpy as np

from pathplan.arm import Arm
from pathplan.errors import PathplanError
from pathplan.path.cartesian import CartesianPath, Leg
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array
from pathplan.path.refusals import no_branch_follows, no_state_asked, not_with_held, roll_hint
from pathplan.path.states import LIMIT_SLACK, SAME_STATE, States, expand, judged_rows, matching
from pathplan.path.tracking import Tracks, turns_between

__all__ = ["Choice", "Routes", "candidate_states", "choose", "refused_target", "routes", "with_limits"]


@dataclass(frozen=True, eq=False)
class Routes:
    """Where each state gets to along the line or arc that leaves it, and along the same bent; R rows.

    `row` (S,): the row of a state along what is programmed, -1 if a joint step leaves it; `bent`: its other rows. Rows:
    `state` and `segment`; `slot`, the track followed (-1: none starts there); `turns` (n,) to add to the track; `end`
    (n,) where it arrives; `free`: it follows to the end within the limits; `time`.
    """

    row: Index
    bent: Mapping[int, list[int]]
    state: Index
    segment: Index
    slot: Index
    turns: Array
    end: Array
    free: Mask
    time: Array

    def of(self, states: Index) -> Index:
        """All rows of some states."""
        more = [row for state in states.tolist() for row in self.bent.get(state, ())] if self.bent else []
        return np.concatenate([self.row[states], np.array(more, dtype=np.intp)])


@dataclass(frozen=True, eq=False)
class Choice:
    """The joint vectors at the targets and the tracks between them; m legs."""

    q: Array  # (m + 1, n), turns of endless joints resolved
    state: Index  # (m + 1,) rows of the candidate states
    segment: Index  # (m,) that a cartesian leg follows, its own or one bent, else -1
    slot: Index  # (m,) track of a cartesian leg, else -1
    time: float  # s, by the velocity limits


def candidate_states(path: CartesianPath, tool_from_own: Array) -> States:
    """All states at the start and after each leg. `tool_from_own` (m, 4, 4) of each leg's tool.

    Raises UnreachableError, naming the step, for a target out of reach, outside the limits, or not to be
    had in the configuration asked.
    """
    arm, legs, follower = path.task.arm, path.legs, path.follower
    posed = np.array([i for i, leg in enumerate(legs) if _given_joints(path, i) is None], dtype=np.intp)
    poses = np.array([leg.end for leg in legs])[posed] @ tool_from_own[posed]
    target, branch, q = np.zeros(0, dtype=np.intp), np.zeros(0, dtype=np.intp), np.zeros((0, arm.n))
    if len(posed):
        views, held = np.array([leg.view for leg in legs], dtype=np.intp)[posed], path.held[posed + 1]
        answers, wanted = follower.branches(views, poses, held)
        row, branch = np.nonzero(wanted)
        target, branch, q = expand(arm, posed[row] + 1, branch, answers[row, branch])
        if follower.held:  # their turns are given too
            own = (np.abs(q[:, list(follower.held)] - path.held[target]) < SAME_STATE).all(axis=1)
            target, branch, q = target[own], branch[own], q[own]
        without = np.flatnonzero(np.bincount(target, minlength=len(legs) + 1)[posed + 1] == 0)
        if len(without):
            raise refused_target(path, int(posed[without[0]]), poses[without[0]])
        allowed = np.ones((len(legs) + 1, wanted.shape[1]), dtype=bool)
        for i in posed:
            if legs[i].step.configuration:
                labels = follower.labels(legs[i].view)
                allowed[i + 1, : len(labels)] = matching(labels, legs[i].step.configuration)
        keep = allowed[target, branch]
        without = np.flatnonzero(np.bincount(target[keep], minlength=len(legs) + 1)[posed + 1] == 0)
        if len(without):
            i = int(posed[without[0]])
            labels = follower.labels(legs[i].view)
            there = [labels[b] for b in dict.fromkeys(branch[target == i + 1].tolist())]
            raise no_state_asked(legs[i], there)
        target, branch, q = target[keep], branch[keep], q[keep]
    given = [i for i in range(len(legs)) if _given_joints(path, i) is not None]
    vectors = [path.task.start, *(_given_joints(path, i) for i in given)]
    target = np.concatenate([target, [0], np.array(given, dtype=np.intp) + 1])
    branch = np.concatenate([branch, np.full(len(vectors), -1)])
    q = np.concatenate([q, np.array(vectors, dtype=float)])
    order = np.argsort(target, kind="stable")
    target = target[order].astype(np.intp)
    first = np.searchsorted(target, np.arange(len(legs) + 2)).astype(np.intp)
    return States(target, branch[order].astype(np.intp), q[order], first)


def with_limits(path: CartesianPath, states: States, tracks: Tracks) -> States:
    """The states, and those at singular targets that lines which start or end there run into."""
    if not tracks.ends:
        return states
    leg_of = {leg.segment: i for i, leg in enumerate(path.legs) if leg.segment >= 0}
    target, branch, q = [], [], []
    for end in tracks.ends:
        own = leg_of[end.segment]
        number = own + int(end.last)
        if number == 0 or _given_joints(path, number - 1) is not None:
            continue
        asked = path.legs[number - 1].step.configuration
        if asked and not matching((path.follower.labels(path.legs[own].view)[end.slot],), asked)[0]:
            continue
        row = tracks.last[end.segment] if end.last else tracks.first[end.segment]
        target.append(number)
        branch.append(end.slot)
        q.append(tracks.q[row, end.slot])
    if not target:
        return states
    limits = np.array(q)
    limits -= turns_between(limits, path.task.arm.revolute)
    more = expand(path.task.arm, np.array(target, dtype=np.intp), np.array(branch, dtype=np.intp), limits)
    targets, branches, vectors = (
        np.concatenate(parts) for parts in zip((states.target, states.branch, states.q), more, strict=True)
    )
    order = np.argsort(targets, kind="stable")
    first = np.searchsorted(targets[order], np.arange(len(path.legs) + 2)).astype(np.intp)
    return States(targets[order], branches[order], vectors[order], first)


def _given_joints(path: CartesianPath, leg: int) -> Array | None:
    target = path.legs[leg].step.target
    return None if target is None else target.joints


def refused_target(path: CartesianPath, leg: int, pose: Array) -> PathplanError:
    """What the arm says of a pose it can't take, with the step in front."""
    step, follower = path.legs[leg].step, path.follower
    try:
        follower.views[path.legs[leg].view].inverse(pose)
    except PathplanError as refusal:
        hint = roll_hint(path.task.arm, step, pose)
        return type(refusal)(f"{step.where}: {refusal}{hint}", data={**refusal.data, "step": step.index})
    if follower.held:
        return not_with_held(path, leg, pose)
    raise AssertionError(f"{step.where}: no state at the target, yet the arm's inverse has answers")


def travel_time(arm: Arm, change: Array) -> Array:
    """Time (...) that joint changes (..., n) take at the velocity limits, every row of the limits kept."""
    rows = change @ arm.limits.matrix.T
    low, high = arm.limits.velocity.T
    return np.asarray(np.maximum(rows / high, rows / low).max(axis=-1))


def routes(path: CartesianPath, states: States, tracks: Tracks) -> Routes:
    """Where every state gets to along the line or arc that leaves its target."""
    arm = path.task.arm
    revolute = arm.revolute
    segment_of_leg = np.array([leg.segment for leg in path.legs] + [-1], dtype=np.intp)
    segment = segment_of_leg[states.target]
    leaving = np.flatnonzero(segment >= 0)
    row = np.full(len(segment), -1, dtype=np.intp)
    row[leaving] = np.arange(len(leaving))
    k = segment[leaving]
    bent: dict[int, list[int]] = {}
    if path.origin is not None:
        for variant in range(len(segment_of_leg[segment_of_leg >= 0]), len(path.origin)):
            more = np.flatnonzero(segment == path.origin[variant])
            for number, state in enumerate(more.tolist()):
                bent.setdefault(state, []).append(len(leaving) + number)
            leaving = np.concatenate([leaving, more])
            k = np.concatenate([k, np.full(len(more), variant, dtype=np.intp)])
    begin = tracks.q[tracks.first[k]] if len(k) else np.zeros((0, 1, arm.n))
    change = states.q[leaving][:, None] - begin
    turns = turns_between(change, revolute)
    starts = (np.abs(change - turns) < SAME_STATE).all(axis=2) & tracks.reached[tracks.first[k]]
    follows = starts & tracks.follows[k]
    slot = np.where(follows.any(axis=1), follows.argmax(axis=1), starts.argmax(axis=1))
    slot = np.where(starts.any(axis=1), slot, -1).astype(np.intp)
    every = np.arange(len(leaving))
    turns = turns[every, slot]
    judged = judged_rows(arm)
    matrix, (low, high) = arm.limits.matrix[judged], arm.limits.position[judged].T
    lowest, highest, time = _extremes(arm, tracks, matrix)
    shift = turns @ matrix.T
    inside = ((lowest[k, slot] + shift >= low - LIMIT_SLACK) & (highest[k, slot] + shift <= high + LIMIT_SLACK)).all(
        axis=1
    )
    return Routes(
        row=row,
        bent=bent,
        state=leaving,
        segment=k,
        slot=slot,
        turns=turns,
        end=tracks.q[tracks.last[k], slot] + turns,
        free=(slot >= 0) & follows[every, slot] & inside,
        time=time[k, slot],
    )


def _extremes(arm: Arm, tracks: Tracks, matrix: Array) -> tuple[Array, Array, Array]:
    """Lowest and highest value of each row (K, B, R) along each track, and its time (K, B)."""
    if not len(tracks.first):
        empty = np.zeros((0, tracks.q.shape[1], len(matrix)))
        return empty, empty, empty[:, :, 0] if len(matrix) else np.zeros((0, tracks.q.shape[1]))
    rows = tracks.q @ matrix.T
    time = np.zeros(tracks.q.shape[:2])
    time[1:] = travel_time(arm, np.diff(tracks.q, axis=0))
    time[tracks.first] = 0.0
    return (
        np.minimum.reduceat(rows, tracks.first, axis=0),
        np.maximum.reduceat(rows, tracks.first, axis=0),
        np.add.reduceat(time, tracks.first, axis=0),
    )


def choose(
    path: CartesianPath,
    states: States,
    tracks: Tracks,
    ways: Routes,
    *,
    barred_legs: Set[tuple[int, int, int]] = frozenset(),
    barred_states: Set[int] = frozenset(),
) -> Choice:
    """The states that make the task shortest in time by the velocity limits.

    `barred_legs`: (leg, state it starts from, segment or -1) and `barred_states`: found unusable on the finished path.
    Raises UnreachableError, naming step, share, pose and reason, where no state is left that can follow a
    step.
    """
    arm = path.task.arm
    endless = path.follower.endless
    cost = np.zeros(states.first[1])
    parents: list[Index] = []
    taken: list[Index] = []
    for i, leg in enumerate(path.legs):
        here, there = states.of(i), states.of(i + 1)
        alive = np.flatnonzero(np.isfinite(cost)) + here.start
        rows = np.full(len(alive), -1, dtype=np.intp)
        if leg.kind == "cartesian":
            rows = ways.of(alive)
            rows = rows[ways.free[rows]]
            leaving = ways.state[rows]
            same = _same(ways.end[rows], states.q[there], endless)
            step = np.where(same, ways.time[rows][:, None], np.inf)
        else:
            leaving = alive
            if leg.kind == "taught":
                starts = _same(states.q[leaving], _taught_ends(leg)[:1], endless)
                step = np.where(starts, 0.0, np.inf) + np.zeros(there.stop - there.start)
            elif leg.kind == "joint":
                step = _joint_step_times(arm, states.q[leaving], states.q[there], endless)
            else:
                step = np.where(_same(states.q[leaving], states.q[there], endless), 0.0, np.inf)
        for barred_leg, state, segment in barred_legs:
            if barred_leg == i:
                barred = leaving == state
                step[barred & (ways.segment[rows] == segment) if segment >= 0 else barred] = np.inf
        for state in barred_states:
            if there.start <= state < there.stop:
                step[:, state - there.start] = np.inf
        step += cost[leaving - here.start, None]
        if not np.isfinite(step).any():
            raise no_branch_follows(path, i, states, alive)
        parent = step.argmin(axis=0)
        cost = step[parent, np.arange(len(parent))]
        parents.append((leaving[parent] - here.start).astype(np.intp))
        taken.append(rows[parent])
    return _trace(path, states, ways, parents, taken, cost)


def _same(reached: Array, q: Array, endless: Mask) -> Mask:
    """(A, B): joint vectors reached (A, n) are the states q (B, n), whole turns of endless joints aside."""
    same = np.zeros((len(reached), len(q)), dtype=bool)
    a, b = np.nonzero(np.ones_like(same))
    for j in range(q.shape[1]):  # each joint leaves fewer pairs to look at
        change = q[b, j] - reached[a, j]
        if endless[j]:
            change -= 2.0 * np.pi * np.round(change / (2.0 * np.pi))
        near = np.abs(change) < SAME_STATE
        a, b = a[near], b[near]
    same[a, b] = True
    return same


def _taught_ends(leg: Leg) -> Array:
    """(2, n) first and last point of a taught path."""
    assert leg.step.taught is not None
    return leg.step.taught.points[[0, -1]]


def _joint_step_times(arm: Arm, start: Array, end: Array, endless: Mask) -> Array:
    """(A, B) times of joint steps from each of start (A, n) to each of end (B, n); endless joints by nearest turn.

    The same as `travel_time`, row by row: with hundreds of turn equivalents the whole array would be large.
    """
    if endless.any():
        change = end - start[:, None]
        return travel_time(arm, change - turns_between(change, endless))
    time = np.zeros((len(start), len(end)))
    for row, (low, high) in zip(arm.limits.matrix, arm.limits.velocity, strict=True):
        if np.isinf(low) and np.isinf(high):
            continue
        change = (end @ row) - (start @ row)[:, None]
        np.maximum(time, change * (1.0 / high), out=time)
        np.maximum(time, change * (1.0 / low), out=time)
    return time


def _trace(
    path: CartesianPath, states: States, ways: Routes, parents: list[Index], taken: list[Index], cost: Array
) -> Choice:
    """Back from the cheapest last state, then forward again to resolve turns of endless joints."""
    m = len(path.legs)
    local = int(np.argmin(cost))
    state = np.empty(m + 1, dtype=np.intp)
    state[m] = states.first[m] + local
    route = np.full(m, -1, dtype=np.intp)
    for i in range(m - 1, -1, -1):
        route[i] = taken[i][local]
        local = int(parents[i][local])
        state[i] = states.first[i] + local
    q = states.q[state].copy()
    slot, segment = np.full(m, -1, dtype=np.intp), np.full(m, -1, dtype=np.intp)
    endless = path.follower.endless
    for i, leg in enumerate(path.legs):
        given = _given_joints(path, i) is not None
        if leg.kind == "cartesian":
            row = route[i]
            slot[i], segment[i] = ways.slot[row], ways.segment[row]
            near = q[i] + ways.end[row] - states.q[state[i]]
        elif leg.kind == "taught":
            begin, end = _taught_ends(leg)
            near = q[i] + end - begin
        elif given:
            continue  # a joint step to a joint vector goes to that very vector, however many turns
        else:
            near = q[i]
        q[i + 1] -= turns_between(q[i + 1] - near, endless)
    return Choice(q, state, segment, slot, float(cost.min()))
