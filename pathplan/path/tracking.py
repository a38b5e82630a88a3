"""Following every branch of the inverse along every line and arc of a task at once.

Each segment is sampled, all samples of all segments go through the inverse in one batch, and each branch
is unwrapped from sample to sample by nearest turn. Where a joint moves too far between two samples to
tell, samples are put in between; a joint that still jumps when they lie two millionths apart is at a singularity. If
the path truly meets it, the track goes on in the branch that is nearest there (`pathplan.path.crossing`); at the very
start or end of a segment it takes the limit along it (`pathplan.path.ends`).

A branch follows a segment if at every sample the pose is reached, the smallest singular value of the Jacobian
(dimensionless, see `pathplan.arm.kinematics`) is at least `SINGULAR`, and no jump remains. Position limits
depend on the turns a motion starts with, so they are judged by start state in `pathplan.path.choice`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from pathplan.arm import Arm
from pathplan.path.crossing import CLEAR, JUMP, Crossing, Inverse, mirrored, passes
from pathplan.path.ends import SingularEnd, limits_at_ends
from pathplan.path.follower import Course, Follower
from pathplan.path.geometry import Index, Mask, Segments
from pathplan.path.joint import Array
from pathplan.path.states import LIMIT_SLACK

__all__ = ["SINGULAR", "Tracks", "track", "turns_between"]

SINGULAR = 1e-5  # smallest singular value below which a pose counts as singular
SPACING = 0.1  # path parameter between samples to start with: about 0.1 rad, or a tenth of the arm's length
FEWEST = 6  # intervals of a segment
_MOST_BENDS = 1000  # pieces of a curve up to which each gets an interval of its own
_BETWEEN = 3  # samples put between two
_ROUNDS = 8  # of putting them: 2e-6 apart in the end, where a joint can only move by JUMP below SINGULAR


def turns_between(change: Array, revolute: Mask) -> Array:
    """Whole turns (in rad) in joint changes (..., n): subtract them for the shortest change."""
    return np.where(revolute, 2.0 * np.pi * np.round(change / (2.0 * np.pi)), 0.0)


@dataclass(frozen=True, eq=False)
class Tracks:
    """B branches along K segments, T samples in all, in order of segment and path parameter.

    `q` (T, B, n) is continuous along each segment, counted from the branch's answer in (-pi, pi] at its
    start; meaningless from the first sample on where `ok` (T, B) is False, and `reached` tells why: False
    there means that the pose is not reached, True that it is singular.
    """

    segment: Index  # (T,)
    s: Array  # (T,)
    q: Array
    ok: Mask
    reached: Mask
    first: Index  # (K,) first sample of each segment
    last: Index  # (K,)
    crossings: tuple[Crossing, ...] = ()  # where tracks run through a singularity
    ends: tuple[SingularEnd, ...] = ()  # where they start or end in one

    @cached_property
    def follows(self) -> Mask:
        """(K, B): the branch follows the whole segment."""
        return np.logical_and.reduceat(self.ok, self.first, axis=0) if len(self.first) else self.ok[:0]

    def followed_by(self, more: Tracks) -> Tracks:
        """With the tracks of further segments behind."""
        count, samples = len(self.first), len(self.s)
        shifted = tuple(replace(crossing, segment=crossing.segment + count) for crossing in more.crossings)
        return Tracks(
            np.concatenate([self.segment, more.segment + count]),
            np.concatenate([self.s, more.s]),
            np.concatenate([self.q, more.q]),
            np.concatenate([self.ok, more.ok]),
            np.concatenate([self.reached, more.reached]),
            np.concatenate([self.first, more.first + samples]),
            np.concatenate([self.last, more.last + samples]),
            self.crossings + shifted,
            self.ends + tuple(replace(end, segment=end.segment + count) for end in more.ends),
        )


def track(course: Course, segments: Segments, tool_from_own: Array, *, thorough: bool = False) -> Tracks:
    """Every branch along every segment, the held joints on their course. `tool_from_own` (K, 4, 4): base_from_tool @
    this is the pose of the arm's own tool.
    """
    arm = course.follower.arm
    if not len(segments):
        none = np.zeros(0, dtype=np.intp)
        no = np.zeros((0, 1), dtype=bool)
        return Tracks(none, np.zeros(0), np.zeros((0, 1, arm.n)), no, no, none, none)
    count = np.maximum(np.ceil(segments.length / SPACING).astype(int), FEWEST)
    for curve, k in segments.on_curves(np.arange(len(segments))):
        count[k] = np.maximum(count[k], min(len(curve.breaks) - 1, _MOST_BENDS))
    segment = np.repeat(np.arange(len(segments)), count + 1)
    first = np.concatenate([[0], np.cumsum(count + 1)[:-1]]).astype(np.intp)
    step = np.arange(len(segment)) - first[segment]
    s = segments.length[segment] * (step / count[segment])

    def poses(k: Index, at: Array) -> Array:
        return segments.poses(k, at) @ tool_from_own[k]

    def inverse(k: Index, at: Array) -> tuple[Array, Mask]:
        return course.follower.branches(course.view[k], poses(k, at), course.held(k, at))

    if not course.follower.steady:
        return _continued(course, poses, segment, s, first)
    revolute = arm.revolute
    samples, useful = _sampled(inverse, arm, len(segments), segment, s, revolute, thorough)
    samples, crossings = _crossed(course, inverse, samples, useful, revolute)
    segment, s, q, valid, looked_at = samples
    first, last = _borders(segment, len(segments))
    looked_at[first] = looked_at[last] = True
    regular = _regular(course.follower, course.view[segment], q, valid, looked_at)
    q, ends = np.array(q), list[SingularEnd]()
    crossed = {crossing.segment for crossing in crossings}  # behind them the slots are no more those of the inverse
    plain = np.array([number not in crossed for number in range(len(segments))])
    for rows, at_last in ((first, False), (last, True)):
        singular = valid[rows] & ~regular[rows] & plain[:, None]
        k, b, limit = limits_at_ends(course, inverse, poses, segments.length, singular, at_last, revolute)
        q[rows[k], b], regular[rows[k], b] = limit, True
        ends += [SingularEnd(*end, at_last) for end in zip(k.tolist(), b.tolist(), strict=True)]
    if ends:
        kept = _clear_of(ends, segments, segment, s)
        segment, s, q, valid, regular = segment[kept], s[kept], q[kept], valid[kept], regular[kept]
        first, last = _borders(segment, len(segments))
    jumped = np.zeros_like(valid)
    jumped[1:] = _jumps(q, valid, segment, revolute)
    q = _unwrapped(q, first, segment, revolute)
    return Tracks(segment, s, q, valid & regular & ~jumped, valid, first, last, tuple(crossings), tuple(ends))


class _Samples(NamedTuple):
    """What is known of the branches at T samples, as in `Tracks`."""

    segment: Index
    s: Array
    q: Array
    valid: Mask
    looked_at: Mask


def _borders(segment: Index, count: int) -> tuple[Index, Index]:
    """First and last sample (K,) of every segment."""
    first = np.searchsorted(segment, np.arange(count)).astype(np.intp)
    return first, np.append(first[1:], len(segment)).astype(np.intp) - 1


def _sampled(
    inverse: Inverse, arm: Arm, count: int, segment: Index, s: Array, revolute: Mask, thorough: bool
) -> tuple[_Samples, Mask]:
    """The branches at s (T,) of segments (T,) and between, where a joint of one that might be taken moves too far; and
    (T, B) which might be taken there.
    """
    q, valid = inverse(segment, s)
    looked_at = np.zeros(len(s), dtype=bool)
    useful = valid & _has_turn_inside(arm, q)
    for _ in range(_ROUNDS):
        jumps = _jumps(q, valid, segment, revolute)
        # A branch that fails elsewhere on the segment anyway is not worth more samples.
        lives = np.logical_and.reduceat(useful, _borders(segment, count)[0], axis=0)[segment[:-1]] | thorough
        split = np.flatnonzero((jumps & lives).any(axis=1))
        if not len(split):
            break
        at = np.repeat(split + 1, _BETWEEN)
        part = np.tile(np.arange(1, _BETWEEN + 1) / (_BETWEEN + 1), len(split))
        new_segment, new_s = segment[at], s[at - 1] + part * (s[at] - s[at - 1])
        new_q, new_valid = inverse(new_segment, new_s)
        looked_at[split] = looked_at[split + 1] = True
        segment, s = np.insert(segment, at, new_segment), np.insert(s, at, new_s)
        q, valid = np.insert(q, at, new_q, axis=0), np.insert(valid, at, new_valid, axis=0)
        useful = np.insert(useful, at, new_valid & _has_turn_inside(arm, new_q), axis=0)
        looked_at = np.insert(looked_at, at, True)
    return _Samples(segment, s, q, valid, looked_at), useful


def _crossed(
    course: Course, inverse: Inverse, samples: _Samples, useful: Mask, revolute: Mask
) -> tuple[_Samples, list[Crossing]]:
    """The samples with every track that runs through a singularity going on in the branch behind it."""
    jumps = _jumps(samples.q, samples.valid, samples.segment, revolute)
    places = passes(course, inverse, samples.segment, samples.s, samples.q, useful, jumps)
    crossings: list[Crossing] = []
    for number, place in reversed(places):  # the last first: what a slot is called behind it then holds for all before
        samples, order = _through(inverse, samples, number, place, revolute)
        named = np.argsort(order)
        crossings = [replace(c, slot=int(named[c.slot])) if c.segment == number else c for c in crossings]
        crossings += [Crossing(number, place, b) for b in np.flatnonzero(order != np.arange(len(order))).tolist()]
    return samples, crossings


def _through(inverse: Inverse, samples: _Samples, k: int, at: float, revolute: Mask) -> tuple[_Samples, Index]:
    """The samples with two beside the singularity met at `at` on segment k, none nearer, and the slots behind it
    changed about so that every track goes on smoothly; and the slot (B,) in which each does.
    """
    own = np.flatnonzero(samples.segment == k)
    if not samples.s[own[0]] + CLEAR < at < samples.s[own[-1]] - CLEAR:
        return samples, np.arange(samples.q.shape[1])  # at the very start or end nothing goes on
    between = own[np.abs(samples.s[own] - at) <= CLEAR]
    place = int(own[np.searchsorted(samples.s[own], at)]) if not len(between) else int(between[0])
    beside = at + CLEAR * np.array([-1.0, 1.0])
    q, valid = inverse(np.array([k, k]), beside)
    rows = _Samples(np.array([k, k]), beside, q, valid, np.ones(2, dtype=bool))
    merged: list[Any] = [
        np.insert(np.delete(old, between, axis=0), place, more, axis=0) for old, more in zip(samples, rows, strict=True)
    ]
    samples = _Samples(*merged)
    order = mirrored(q[0], q[1], valid[0] & valid[1], revolute, JUMP)
    behind = np.flatnonzero((samples.segment == k) & (samples.s > at))
    samples.q[behind] = samples.q[behind][:, order]
    samples.valid[behind] = samples.valid[behind][:, order]
    return samples, order


def _clear_of(ends: list[SingularEnd], segments: Segments, segment: Index, s: Array) -> Mask:
    """(T,) samples that are ends themselves, or not near one in a singularity."""
    kept = np.ones(len(s), dtype=bool)
    for k, at_last in {(end.segment, end.last) for end in ends}:
        length = float(segments.length[k])
        away = length - s if at_last else s
        kept &= (segment != k) | (away <= 0.0) | (away > min(CLEAR, length / 100.0))
    return kept


def _jumps(q: Array, valid: Mask, segment: Index, revolute: Mask) -> Mask:
    """(T-1, B): a joint moves too far from one sample to the next to tell which way."""
    change = np.diff(q[:, :, revolute], axis=0)
    change -= 2.0 * np.pi * np.round(change / (2.0 * np.pi))
    far = (np.abs(change) > JUMP).any(axis=2)
    return far & valid[1:] & valid[:-1] & (segment[1:] == segment[:-1])[:, None]


def _has_turn_inside(arm: Arm, q: Array) -> Mask:
    """(T, B): every joint has a turn equivalent within its own position limits."""
    inside = np.ones(q.shape[:2], dtype=bool)
    for j, joint in enumerate(arm.joints):
        low, high = joint.position[0] - LIMIT_SLACK, joint.position[1] + LIMIT_SLACK
        if joint.kind == "prismatic":
            inside &= (q[:, :, j] >= low) & (q[:, :, j] <= high)
        elif np.isfinite([low, high]).all():
            turn = 2.0 * np.pi
            inside &= np.floor((high - q[:, :, j]) / turn) >= np.ceil((low - q[:, :, j]) / turn)
    return inside


def _regular(follower: Follower, view: Index, q: Array, valid: Mask, looked_at: Mask) -> Mask:
    """(T, B): not singular, judged at the samples `looked_at`: the ends and wherever a joint moves fast.

    Between them no singularity is passed unseen: passing one makes a joint jump.
    """
    regular = np.ones_like(valid)
    ask = valid & looked_at[:, None]
    if ask.any():
        regular[ask] = follower.singular(np.broadcast_to(view[:, None], ask.shape)[ask], q[ask]) >= SINGULAR
    return regular


def _unwrapped(q: Array, first: Index, segment: Index, revolute: Mask) -> Array:
    """q made continuous along each segment by nearest turn, starting from the segment's first sample."""
    turns = np.zeros_like(q)
    turns[1:] = turns_between(np.diff(q, axis=0), revolute)
    turns[first] = 0.0
    total = np.cumsum(turns, axis=0)
    return np.asarray(q - (total - total[first][segment]))


def _continued(
    course: Course, poses: Callable[[Index, Array], Array], segment: Index, s: Array, first: Index
) -> Tracks:
    """As `track` for an arm without closed form: all answers at the start of a segment, continued by
    Newton steps.
    """
    count = np.diff(np.append(first, len(s)))
    last = first + count - 1
    arm, follower = course.follower.arm, course.follower
    k0 = segment[first]
    start_q, start_valid = follower.branches(course.view[k0], poses(k0, s[first]), course.held(k0, s[first]))
    slots = start_q.shape[1]
    q = np.zeros((len(s), slots, arm.n))
    valid = np.zeros((len(s), slots), dtype=bool)
    jumped = np.zeros_like(valid)
    q[first], valid[first] = start_q, start_valid
    revolute = arm.revolute
    for step in range(1, int(count.max(initial=0))):
        rows = first[count > step] + step
        q[rows] = q[rows - 1]
        k, b = np.nonzero(valid[rows - 1])
        if not len(k):
            continue
        target = poses(segment[rows], s[rows])[k]
        guess = q[rows - 1][k, b]
        two_back = rows[k] - 2 >= first[segment[rows[k]]]
        guess[two_back] += guess[two_back] - q[rows[k] - 2, b][two_back]
        there = segment[rows[k]]
        guess[:, list(follower.held)] = course.held(there, s[rows[k]])
        answer, met = follower.near(course.view[there], target, guess)
        jump = (np.abs(answer - q[rows[k] - 1, b])[:, revolute] > 2 * JUMP).any(axis=1)
        q[rows[k], b], valid[rows[k], b], jumped[rows[k], b] = answer, met, jump
    looked_at = np.ones(len(s), dtype=bool)
    regular = _regular(follower, course.view[segment], q, valid, looked_at)
    return Tracks(segment, s, q, valid & regular & ~jumped, valid, first, last)
