"""What is left free, chosen over the whole task for the shortest time: dynamic programming over sampled values.

At every rung (`pathplan.path.rungs`) the free coordinates take values on a grid, each with every branch of the inverse
and its turn equivalents within the limits: the nodes. What is out of reach, outside the limits or near a singularity
is no node. From rung to rung on a line, arc or curve the arm stays on its branch; the cost is the time by the velocity
limits (a high norm over joints and the speed asked, so that ties are broken softly), more near singularities; a joint
step leads from any node to any and costs the time from rest to rest by velocity, acceleration and jerk. The best way
through (Bellman 1957) is then refined on finer grids about itself (iterative dynamic programming, Luus 1990). Where
axes are free the way before that is handed on too: which of the two is shorter with accelerations, `follow.py` sees.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np

from pathplan.arm import Arm
from pathplan.errors import PathplanError, UnreachableError
from pathplan.path.cartesian import CartesianPath
from pathplan.path.choice import refused_target
from pathplan.path.fastest import limited_rows
from pathplan.path.geometry import Index, Mask
from pathplan.path.joint import Array
from pathplan.path.refusals import motion_words, no_state_asked, place_text
from pathplan.path.rungs import Rungs
from pathplan.path.states import SAME_STATE, expand, matching
from pathplan.path.tracking import SINGULAR

__all__ = ["best_ways"]

LEAST_SINGULAR = 3e-3  # smallest singular value of a node where its rung has one so good
_NEAR_SINGULAR = 0.02  # below about this a node costs more
_MARGIN = 0.01  # share of a held joint's travel that is left at either limit
_GRID = {1: 25, 2: 11, 3: 6}  # values of each coordinate, by how many there are
_FINER = {1: 9, 2: 5, 3: 3}
_BESIDE = {1: np.linspace(-0.6, 0.6, 5), 2: np.zeros(1), 3: np.zeros(1)}  # grid steps from values that are given
_ROUNDS = {1: 2, 2: 3, 3: 3}
_SOUGHT = 4  # rungs at most for which the first grid is widened
_MOST_SOUGHT = 5  # values that are added for one
_STRIDE = 0.7  # rad: a joint that moves further from rung to rung might have gone round another way
_STEPS = 3.0  # grid steps that a coordinate may move from rung to rung
_DOUBLINGS = 6  # of the exponent: the 64th norm is nearly the largest, but not blind for the others
_EASE = 0.05  # part of the cost that counts all joints, not the slowest alone
_TURN = 2.0 * np.pi
_GAIN = 0.99  # a round that leaves more of the cost than this makes the grid finer
_MOST_ROUNDS = 12
_NO_LIMIT = 1e6  # of the velocity, per s and s^2: what counts as acceleration and jerk where nothing limits them


@dataclass(frozen=True, eq=False)
class _Nodes:
    """Nodes in order of their rungs; those of rung t are first[t] to first[t + 1]."""

    first: Index  # (T + 1,)
    q: Array  # (K, n)
    coordinates: Array  # (K, C)
    branch: Index  # (K,)
    burden: Array  # (K,) factor by which a singularity nearby makes a node cost more

    @property
    def empty(self) -> Index:
        """Rungs without a node."""
        return np.flatnonzero(np.diff(self.first) == 0)

    def of(self, rung: int) -> slice:
        return slice(int(self.first[rung]), int(self.first[rung + 1]))


def best_ways(path: CartesianPath, rungs: Rungs) -> list[Array]:
    """(T, C) the coordinates at every rung: on the finest grid and, where axes are free, also on the first.

    The finer way is shorter by the cost, but may ask for more acceleration. Raises UnreachableError where nothing
    that is free lets the arm follow.
    """
    spans = _spans(path.task.arm, rungs)
    loose = np.isnan(rungs.pinned).any(axis=0)
    count = int(np.clip(loose.sum(), 1, 3))
    lines = [_line(rungs, c, span, _GRID[count], _BESIDE[count]) for c, span in enumerate(spans)]
    width = np.array([values[0, 1] - values[0, 0] for values in lines])
    way, cost = _way(path, rungs, _first_nodes(path, rungs, lines), _STEPS * width)
    first = way
    # From here on the grids lie about a way that has been found.
    if count > 1:  # the first grid was coarse: each coordinate once more from end to end, the others kept
        for c in np.flatnonzero(loose).tolist():
            line = _line(rungs, c, spans[c], _GRID[1], _BESIDE[1])
            width[c] = line[0, 1] - line[0, 0]
            axes = [np.hstack([way[:, k, None], line]) if k == c else way[:, k, None] for k in range(len(spans))]
            way, cost = _way(path, rungs, _nodes(path, rungs, axes), None)
    finer = 0
    for _ in range(_MOST_ROUNDS):
        axes = []
        for c, (low, high) in enumerate(spans):
            values = way[:, c, None] + width[c] * np.linspace(-1.0, 1.0, _FINER[count])
            axes.append(values if rungs.rolls and c == len(spans) - 1 else np.clip(values, low, high))
        before = cost
        way, cost = _way(path, rungs, _nodes(path, rungs, axes), None)
        if cost > _GAIN * before:  # nothing much to be had any more with this grid
            finer += 1
            width = 2.0 * width / (_FINER[count] - 1)
        if finer == _ROUNDS[count]:
            break
    return [way, first] if rungs.follower.held else [way]


def _line(rungs: Rungs, c: int, span: tuple[float, float], count: int, beside: Array) -> Array:
    """(T, m) values of a coordinate from end to end of its span: `count` of them, evenly, and for a held joint some
    beside those that are given.
    """
    if rungs.rolls and c == rungs.pinned.shape[1] - 1:
        return np.broadcast_to(np.linspace(*span, count)[:-1], (len(rungs), count - 1))
    values = np.linspace(*span, count)
    near = _beside_pins(rungs.pinned[:, c], (values[1] - values[0]) * beside)
    return np.hstack([np.broadcast_to(values, (len(rungs), count)), np.clip(near, *span)])


def _beside_pins(pinned: Array, offsets: Array) -> Array:
    """(T, m) values at and beside those to which a coordinate (T,) is pinned next before and after each rung."""
    rung = np.arange(len(pinned))
    known = np.flatnonzero(~np.isnan(pinned))
    place = np.searchsorted(known, rung, side="right")
    before, after = known[np.maximum(place - 1, 0)], known[np.minimum(place, len(known) - 1)]
    return np.hstack([pinned[before, None] + offsets, pinned[after, None] + offsets])


def _spans(arm: Arm, rungs: Rungs) -> list[tuple[float, float]]:
    """Where each coordinate may lie: within the limits; of an endless joint a turn beyond what is asked of it."""
    spans = []
    for c, i in enumerate(rungs.follower.held):
        low, high = arm.joints[i].position
        asked = rungs.pinned[:, c]
        if arm.joints[i].kind == "revolute":
            around = _TURN / 2.0
        else:
            around = float(np.ptp(arm.search_range[i])) / 2.0
        low = low if np.isfinite(low) else float(np.nanmin(asked)) - around
        high = high if np.isfinite(high) else float(np.nanmax(asked)) + around
        margin = _MARGIN * (high - low)
        spans.append((low + margin, high - margin))
    return spans + ([(-np.pi, np.pi)] if rungs.rolls else [])


def _first_nodes(path: CartesianPath, rungs: Rungs, lines: list[Array]) -> _Nodes:
    """Nodes with coordinates on the first grid; where it is too wide for a rung, also at values that the arm's inverse
    finds there.
    """
    nodes = _nodes(path, rungs, lines)
    for _ in range(_SOUGHT):
        empty = nodes.empty
        sought = _held_at(path, rungs, int(empty[0])) if len(empty) else []
        if not len(sought):
            break
        beside = (np.tile(values, (len(rungs), 1)) for values in sought)
        lines = [np.hstack([line, more]) for line, more in zip(lines, beside, strict=False)] + lines[len(sought) :]
        nodes = _nodes(path, rungs, lines)
    if len(nodes.empty):
        raise _no_nodes(path, rungs, int(nodes.empty[0]))
    return nodes


def _held_at(path: CartesianPath, rungs: Rungs, t: int) -> list[Array]:
    """For each held joint some values at which the arm's inverse reaches rung t; none where it has no answer."""
    held = list(rungs.follower.held)
    try:
        answers = rungs.follower.views[rungs.view[t]].inverse(rungs.poses[t] @ rungs.tool_from_own[t])
    except PathplanError:
        return []
    values = (np.unique(np.round(answers[:, i], 9)) for i in held)
    return [some[np.linspace(0, len(some) - 1, min(len(some), _MOST_SOUGHT)).astype(int)] for some in values]


def _nodes(path: CartesianPath, rungs: Rungs, axes: list[Array]) -> _Nodes:
    """All nodes with coordinates on a grid: axes, (T, m) values of each coordinate."""
    arm, follower = path.task.arm, rungs.follower
    rung, coordinates = _samples(rungs, axes)
    q, reached = rungs.states(rung, coordinates)
    for t in rungs.given:
        reached[rung == t] = False
    row, branch = np.nonzero(reached)
    value = follower.singular(rungs.view[rung[row]], q[row, branch])
    places = reached.shape[1]
    _, flat, found = expand(arm, rung[row], np.arange(len(row)), q[row, branch])
    held = list(follower.held)
    same = (np.abs(found[:, held] - coordinates[row[flat]][:, : len(held)]) < SAME_STATE).all(axis=1)
    good = same & (value[flat] >= LEAST_SINGULAR)
    keep = same & (good | (np.bincount(rung[row[flat[good]]], minlength=len(rungs))[rung[row[flat]]] == 0))
    flat, found = flat[keep], found[keep]
    number = [rung[row[flat]]]
    parts = [found]
    own = [coordinates[row[flat]]]
    branches = [branch[flat] if follower.steady else np.zeros(len(flat), dtype=np.intp)]
    burden = [1.0 + (_NEAR_SINGULAR / np.maximum(value[flat], SINGULAR)) ** 2]
    for t, joints in rungs.given.items():
        number.append(np.array([t]))
        parts.append(joints[None])
        own.append(np.where(np.isnan(rungs.pinned[t]), 0.0, rungs.pinned[t])[None])
        branches.append(np.array([places]))  # of any branch
        burden.append(np.ones(1))
    every = np.concatenate(number)
    order = np.argsort(every, kind="stable")
    keep = order[_as_asked(path, rungs, every[order], np.concatenate(branches)[order], places)]
    first = np.searchsorted(every[keep], np.arange(len(rungs) + 1)).astype(np.intp)
    return _Nodes(
        first,
        np.concatenate(parts)[keep],
        np.concatenate(own)[keep],
        np.concatenate(branches)[keep],
        np.concatenate(burden)[keep],
    )


def _samples(rungs: Rungs, axes: list[Array]) -> tuple[Index, Array]:
    """Rungs (R,) and coordinates (R, C): every combination of values at each, pinned ones as they are."""
    rung, coordinates = [], []
    for t in range(len(rungs)):
        values = [axes[c][t] if np.isnan(pin) else np.array([pin]) for c, pin in enumerate(rungs.pinned[t])]
        mesh = np.array(list(product(*values))).reshape(-1, len(values))
        rung.append(np.full(len(mesh), t, dtype=np.intp))
        coordinates.append(mesh)
    return np.concatenate(rung), np.concatenate(coordinates)


def _as_asked(path: CartesianPath, rungs: Rungs, rung: Index, branch: Index, places: int) -> Mask:
    """(K,) nodes in the configuration that is asked at their target."""
    keep = np.ones(len(rung), dtype=bool)
    for t in np.flatnonzero(rungs.target > 0):
        entry = path.legs[rungs.leg[t]]
        if not entry.step.configuration or int(t) in rungs.given:
            continue
        labels = rungs.follower.labels(entry.view)
        allowed = np.zeros(places + 1, dtype=bool)
        allowed[: len(labels)] = matching(labels, entry.step.configuration)
        mine = np.flatnonzero(rung == t)
        good = allowed[branch[mine]]
        if len(mine) and not good.any():
            raise no_state_asked(entry, [labels[b] for b in dict.fromkeys(branch[mine].tolist())])
        keep[mine] = good
    return keep


def _way(path: CartesianPath, rungs: Rungs, nodes: _Nodes, furthest: Array | None) -> tuple[Array, float]:
    """(T, C) coordinates of the cheapest way through the nodes, and its cost. `furthest` (C,): the most they may move
    between rungs.
    """
    costs = _Costs(path, rungs, nodes, furthest)
    cost = np.zeros(nodes.first[1])
    parents: list[Index] = []
    for t in range(1, len(rungs)):
        alive = np.flatnonzero(np.isfinite(cost))
        step = costs.between(t, alive + nodes.first[t - 1])
        step += cost[alive, None]
        parent = step.argmin(axis=0)
        cost = step[parent, np.arange(step.shape[1])]
        if not np.isfinite(cost).any():
            raise _no_way(path, rungs, t)
        parents.append(alive[parent])
    at = int(np.argmin(cost))
    chosen = [at]
    for parent in reversed(parents):
        at = int(parent[at])
        chosen.append(at)
    return nodes.coordinates[nodes.first[:-1] + np.array(chosen[::-1])], float(cost.min())


class _Costs:
    """What it costs to get from node to node."""

    def __init__(self, path: CartesianPath, rungs: Rungs, nodes: _Nodes, furthest: Array | None) -> None:
        arm = path.task.arm
        self.path, self.rungs, self.nodes = path, rungs, nodes
        self.furthest = np.full(rungs.pinned.shape[1], np.inf) if furthest is None else furthest
        self.matrix, self.velocity, self.acceleration, self.jerk = limited_rows(arm)
        self.revolute = arm.revolute

    def between(self, t: int, before: Index) -> Array:
        """(A, B) from nodes `before` (A,) of rung t - 1 to all of rung t; inf where there is no way."""
        leg = self.path.legs[self.rungs.leg[t]]
        after = np.arange(self.nodes.first[t], self.nodes.first[t + 1])
        if leg.kind == "joint":
            return self._joint_step(t, before, after)
        if leg.kind == "taught":
            assert leg.step.taught is not None
            start = (np.abs(self.nodes.q[before] - leg.step.taught.points[0]) < SAME_STATE).all(axis=1)
            return np.where(start[:, None], 0.0, np.inf) + np.zeros(len(after))
        floor = self._floor(t)
        cost = np.full((len(before), len(after)), np.inf)
        one, two = self.nodes.branch[before], self.nodes.branch[after]
        anything = max(one.max(initial=0), two.max(initial=0)) if self.rungs.given else -1
        for b in np.unique(one):
            i = np.flatnonzero(one == b)
            whole = b == anything and t - 1 in self.rungs.given
            j = np.arange(len(after)) if whole or t in self.rungs.given else np.flatnonzero(two == b)
            if len(i) and len(j):
                cost[np.ix_(i, j)] = self._along(t, before[i], after[j], floor)
        return cost

    def _floor(self, t: int) -> float:
        """s that the speed asked of the tool makes of the way to rung t."""
        leg = self.path.legs[self.rungs.leg[t]]
        speed = leg.step.speed
        if leg.segment < 0 or speed is None:
            return 0.0
        segments = self.path.segments
        way = self.rungs.s[t] - (self.rungs.s[t - 1] if self.rungs.leg[t - 1] == self.rungs.leg[t] else 0.0)
        return float(segments.path_length[leg.segment] / segments.length[leg.segment] * way / speed)

    def _along(self, t: int, before: Index, after: Index, floor: float) -> Array:
        """(A, B) on a line, arc or curve."""
        nodes, rungs = self.nodes, self.rungs
        cost = np.full((len(before), len(after)), np.inf)
        moved = nodes.coordinates[after] - nodes.coordinates[before][:, None]
        if rungs.rolls:
            moved[..., -1] -= _TURN * np.round(moved[..., -1] / _TURN)
        free = np.isnan(rungs.pinned[t]) & np.isnan(rungs.pinned[t - 1])
        furthest = np.where(free, self.furthest, np.inf)
        furthest[rungs.kept[t]] = 1e-9
        i, j = np.nonzero((np.abs(moved) <= furthest).all(axis=2))
        change = nodes.q[after[j]] - nodes.q[before[i]]
        endless = rungs.follower.endless
        change[:, endless] -= _TURN * np.round(change[:, endless] / _TURN)
        stride = np.where(self.revolute, _STRIDE, np.inf)
        stride[list(rungs.follower.held)] = np.inf  # judged by the grid
        good = (np.abs(change) <= stride).all(axis=1)
        i, j = i[good], j[good]
        share = np.abs(change[good] @ (self.matrix / self.velocity[:, None]).T)
        most = np.maximum(share.max(axis=1, initial=0.0), max(floor, 1e-12))
        ratio = share / most[:, None]
        for _ in range(_DOUBLINGS):
            ratio *= ratio
        norm = 2**_DOUBLINGS
        total = ratio.sum(axis=1) + (floor / most) ** norm
        time = most * total ** (1.0 / norm) + _EASE * np.sqrt((share * share).sum(axis=1))
        cost[i, j] = time * (nodes.burden[before[i]] + nodes.burden[after[j]]) / 2.0
        return cost

    def _joint_step(self, t: int, before: Index, after: Index) -> Array:
        """(A, B) from rest to rest, straight in joint space."""
        nodes, rungs = self.nodes, self.rungs
        slowest, every = np.zeros((len(before), len(after))), np.zeros((len(before), len(after)))
        ends = nodes.q[after] @ self.matrix.T
        starts = nodes.q[before] @ self.matrix.T
        turning = (self.matrix != 0)[:, rungs.follower.endless].any(axis=1)
        for r in range(len(self.matrix)):
            way = ends[:, r] - starts[:, r, None]
            if turning[r] and t not in rungs.given:
                way -= _TURN * np.round(way / _TURN)
            time = _rest_to_rest(np.abs(way), self.velocity[r], self.acceleration[r], self.jerk[r])
            np.maximum(slowest, time, out=slowest)
            every += time
        cost = slowest + _EASE * every / len(self.matrix)
        kept = rungs.kept[t]
        if kept.any():
            moved = nodes.coordinates[after] - nodes.coordinates[before][:, None]
            cost[(np.abs(moved[..., kept]) > 1e-9).any(axis=2)] = np.inf
        return np.asarray(cost)


def _rest_to_rest(way: Array, velocity: float, acceleration: float, jerk: float) -> Array:
    """Least time for distances, from rest to rest: phases of constant jerk, as in any textbook on motion profiles."""
    acceleration, jerk = min(acceleration, _NO_LIMIT * velocity), min(jerk, _NO_LIMIT * velocity)
    peak = np.concatenate([[0.0], velocity * np.geomspace(1e-6, 1.0, 300)])
    ramp = np.where(
        peak >= acceleration**2 / jerk, peak / acceleration + acceleration / jerk, 2.0 * np.sqrt(peak / jerk)
    )  # s to reach a peak velocity
    longest = float(peak[-1] * ramp[-1])
    times = np.interp(way, peak * ramp, 2.0 * ramp)
    return np.asarray(times + np.maximum(way - longest, 0.0) / velocity)


def _no_nodes(path: CartesianPath, rungs: Rungs, t: int) -> PathplanError:
    """The refusal of a rung at which nothing can stand."""
    if rungs.target[t] > 0:
        leg = int(rungs.leg[t])
        pose = rungs.poses[t] @ rungs.tool_from_own[t]
        return refused_target(path, leg, pose)
    return _no_way(path, rungs, t)


def _no_way(path: CartesianPath, rungs: Rungs, t: int) -> UnreachableError:
    """The refusal of a leg on which every way ends before rung t."""
    leg = path.legs[rungs.leg[t]]
    length = float(path.segments.length[leg.segment]) if leg.segment >= 0 else 1.0
    share = float(rungs.s[t - 1] / length) if rungs.leg[t - 1] == rungs.leg[t] else 0.0
    at = t - 1 if rungs.target[t - 1] != 0 else t
    pose, step = rungs.poses[at], leg.step
    arm = path.task.arm
    free = [
        arm.joint_names[i] for c, i in enumerate(rungs.follower.held) if np.isnan(rungs.pinned[t - 1 : t + 1, c]).any()
    ]
    if rungs.rolls and np.isnan(rungs.pinned[t - 1 : t + 1, -1]).any():
        free.append("the roll of the tool")
    with_ = f", whatever {' and '.join(free)} {'is' if len(free) == 1 else 'are'}" if free else ""
    text = f"{step.where}: no branch can follow this {motion_words(step)}{with_}: "
    text += f"the best gets to {share * 100:.1f} % of it"
    reason = "beyond lie only poses out of reach, outside the limits or near a singularity"
    data = {"step": step.index, "share": share, "pose": pose}
    return UnreachableError(f"{text}, {place_text(pose)}, {reason}", data=data)
