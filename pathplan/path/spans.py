"""A path as spans, each one formula: a stretch of one step, or a corner between two, with exact derivatives.

Every span is the same sum, of which parts may be missing: the joint positions that put the tool at a
Cartesian motion (of one segment, or of two superposed), plus a straight joint motion or two. What eases in
or out, and over which length, is as in `pathplan.path.corners`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from pathplan.path.corners import incoming, outgoing
from pathplan.path.geometry import Index, Jets, Mask, poses_of, spatial_twists, superpose
from pathplan.path.joint import Array, JointPath
from pathplan.path.motions import Motions

__all__ = ["Spans"]


@dataclass(frozen=True, eq=False)
class Spans:
    """S spans. Positions inside a span run from 0 to its `length` (path parameter)."""

    motions: Motions
    before: Index  # (S,) the motion a span belongs to, or the incoming one of a corner
    after: Index  # (S,) the outgoing motion of a corner, else -1
    offset: Array  # (S,) where on its motion a plain span begins
    delta: Array  # (S,) corner size, 0 for a plain span
    length: Array  # (S,)

    def __len__(self) -> int:
        return len(self.length)

    @property
    def corner(self) -> Mask:
        """(S,) bool."""
        return self.after >= 0

    def inverted(self) -> Mask:
        """(S,) bool: the span has a Cartesian part, so joint positions come from poses."""
        segment = self.motions.segment
        return (segment[self.before] >= 0) | (self.corner & (segment[self.after] >= 0))

    def exact(self) -> Mask:
        """(S,) bool: a polynomial of low degree, known without a fit: straight in joint space, or a corner between two
        that are, or a part of a taught path.
        """
        bent = self.motions.bent
        return ~self.inverted() & ~(self.corner & ((bent[self.before] >= 0) | (bent[self.after] >= 0)))

    def bends(self, i: Index) -> Array:
        """(N,) how many pieces the curves and taught paths of spans i have, about, on the part that the span covers."""
        motions = self.motions
        pieces = np.zeros(len(motions))
        for curve, m in motions.segments.on_curves(np.where(motions.segment >= 0, motions.segment, -1)):
            pieces[m] = len(curve.breaks) - 1
        for path, m in motions.on_paths(np.arange(len(motions))):
            pieces[m] = len(path.breaks) - 1
        density = pieces / motions.length
        after = np.where(self.corner[i], density[self.after[i]], 0.0)
        return np.asarray((density[self.before[i]] + after) * self.length[i])

    def crossings(self) -> list[tuple[int, float]]:
        """Span and position in it of every singularity that a plain span runs through."""
        found = []
        for motion, s in self.motions.crossings:
            for i in np.flatnonzero((self.before == motion) & ~self.corner).tolist():
                at = s - float(self.offset[i])
                if 0.0 < at < self.length[i]:
                    found.append((i, at))
        return found

    def programmed(self) -> Mask:
        """(S,) bool: the tool path is known from the geometry alone."""
        segment = self.motions.segment
        return (segment[self.before] >= 0) & (~self.corner | (segment[self.after] >= 0))

    def rolling(self) -> Mask:
        """(S,) bool: the tool path is known, but not the roll of the tool."""
        rolls = self.motions.segments.rolls
        free = np.array([law is not None for law in rolls] or [False] * len(self.motions.segments), dtype=bool)
        free = np.append(free, False)  # of what has no segment
        segment = self.motions.segment
        return free[segment[self.before]] | (self.corner & free[segment[self.after]])

    @cached_property
    def unbent(self) -> Spans:
        """The same spans as programmed, the tool in its own orientation."""
        segments = self.motions.segments
        return self if not segments.bends else replace(self, motions=replace(self.motions, segments=segments.unbent()))

    def sides(self, i: Index, at: Array) -> tuple[Array, Array, Array, Array]:
        """Where span i stands at `at` (N,): s on the motion before, its rates (3, N), s on the one
        after, its rates.
        """
        corner = self.corner[i]
        first, first_rates = self.offset[i] + at, np.zeros((3, len(at)))
        first_rates[0] = 1.0
        second, second_rates = np.zeros(len(at)), np.zeros((3, len(at)))
        if corner.any():
            delta = self.delta[i[corner]]
            u = at[corner] / delta - 1.0
            back, first_rates[:, corner] = incoming(u, delta)
            first[corner] = self.motions.length[self.before[i[corner]]] + back
            second[corner], second_rates[:, corner] = outgoing(u, delta)
        return first, first_rates, second, second_rates

    def tool_jets(self, i: Index, at: Array) -> Jets:
        """Exact Cartesian part at `at` (N,) of spans i, which must have one, with the tool of the step."""
        first, first_rates, second, second_rates = self.sides(i, at)
        segment = self.motions.segment
        one = segment[self.before[i]]
        two = np.where(self.corner[i], segment[self.after[i]], -1)
        segments = self.motions.segments
        if (two < 0).all():
            return segments.jets(one, first, first_rates)
        jets = Jets(np.empty((4, len(at), 3)), np.empty((len(at), 3, 3)), np.empty((3, len(at), 3)))
        for rows in ((one >= 0) & (two < 0), (one < 0), (one >= 0) & (two >= 0)):
            if not rows.any():
                continue
            if (one[rows] < 0).all():
                part = segments.jets(two[rows], second[rows], second_rates[:, rows])
            else:
                part = segments.jets(one[rows], first[rows], first_rates[:, rows])
                if (two[rows] >= 0).all():
                    joined = segments.jets(two[rows], second[rows], second_rates[:, rows])
                    part = superpose(part, joined, segments.poses(two[rows], np.zeros(int(rows.sum()))))
            jets.position[:, rows], jets.rotation[rows], jets.turning[:, rows] = (
                part.position,
                part.rotation,
                part.turning,
            )
        return jets

    def view(self, i: Index) -> Index:
        """(N,) the view that the Cartesian parts of spans i are programmed in."""
        segment = self.motions.segment
        one = segment[self.before[i]]
        return self.motions.course.view[np.where(one >= 0, one, segment[self.after[i]])]

    def held_jets(self, i: Index, at: Array) -> Array:
        """(4, N, H) the held joints and their derivatives at `at` (N,) of the Cartesian parts of spans i: where two
        motions run into one another, both at once, as their tool motions do.
        """
        course, segment = self.motions.course, self.motions.segment
        jets = np.zeros((4, len(at), len(course.follower.held)))
        if not course.follower.held:
            return jets
        first, first_rates, second, second_rates = self.sides(i, at)
        one = segment[self.before[i]]
        two = np.where(self.corner[i], segment[self.after[i]], -1)
        for k, s, rates in ((one, first, first_rates), (two, second, second_rates)):
            rows = np.flatnonzero(k >= 0)
            jets[:, rows] += _by_rates(course.derivatives(k[rows], s[rows]), rates[:, rows])
        both = np.flatnonzero((one >= 0) & (two >= 0))
        jets[0, both] -= course.held(two[both], np.zeros(len(both)))
        return jets

    def near(self, i: Index, at: Array, jets: Jets, guess: Array) -> tuple[Array, Mask]:
        """Joint vectors (N, n) near guesses that put the tool at the Cartesian part `jets` at `at` (N,) of spans i, and
        which of them do.
        """
        follower = self.motions.course.follower
        poses = poses_of(jets.position[0], jets.rotation) @ self.tool_from_own(i)
        if follower.held:
            guess = guess.copy()
            guess[:, list(follower.held)] = self.held_jets(i, at)[0]
        return follower.near(self.view(i), poses, guess)

    def derivatives(self, i: Index, at: Array, jets: Jets, q: Array) -> Array:
        """(3, N, n) derivatives of joint vectors q (N, n) on the Cartesian part `jets` at `at` (N,) of spans i."""
        follower = self.motions.course.follower
        rates = self.held_jets(i, at)[1:].transpose(1, 0, 2)
        return follower.derivatives(self.view(i), q, spatial_twists(jets), rates).transpose(1, 0, 2)

    def joint_jets(self, i: Index, at: Array) -> Array:
        """(4, N, n) the joint motions' part of q and its derivatives, counted from the corner or the motion's
        start.

        For a span without Cartesian part this is q itself.
        """
        first, first_rates, second, second_rates = self.sides(i, at)
        motions, corner = self.motions, self.corner[i]
        d1 = motions.direction[self.before[i]]
        d2 = np.where(corner[:, None], motions.direction[self.after[i]], 0.0)
        jets = np.empty((4, len(at), motions.arm.n))
        back = np.where(corner, first - motions.length[self.before[i]], first)
        jets[0] = d1 * back[:, None] + d2 * second[:, None]
        jets[1:] = d1 * first_rates[:, :, None] + d2 * second_rates[:, :, None]
        for motion, at_s, rates, from_end in (
            (self.before[i], first, first_rates, corner),
            (np.where(corner, self.after[i], -1), second, second_rates, np.zeros_like(corner)),
        ):
            for path, rows in motions.on_paths(motion):
                jets[:, rows] += _path_jets(path, at_s[rows], rates[:, rows], from_end[rows])
        alone = ~self.inverted()[i]
        base = np.where(corner[:, None], motions.end[self.before[i]], motions.start[self.before[i]])
        jets[0, alone] += base[alone]
        return jets

    def guess(self, i: Index, at: Array) -> Array:
        """(N, n) near guesses of the joint positions of the Cartesian part."""
        first, _, second, _ = self.sides(i, at)
        motions, segment = self.motions, self.motions.segment
        one = segment[self.before[i]]
        two = np.where(self.corner[i], segment[self.after[i]], -1)
        corner = motions.end[self.before[i]]
        q = np.where((one < 0)[:, None], corner, 0.0)
        rows = one >= 0
        q[rows] = motions.reference(one[rows], first[rows])
        rows = two >= 0
        q[rows] += motions.reference(two[rows], second[rows]) - corner[rows]
        return q

    def tool_from_own(self, i: Index) -> Array:
        return self.motions.tool_from_own[self.before[i]]


def _path_jets(path: JointPath, s: Array, rates: Array, from_end: Mask) -> Array:
    """(4, N, n) a joint path at s (N,) and its derivatives by the chain rule, counted from its end or its start."""
    jets = _by_rates(path.derivatives(s), rates)
    jets[0] -= np.where(from_end[:, None], path([path.length], side="left"), path([0.0]))
    return jets


def _by_rates(jets: Sequence[Array] | Array, rates: Array) -> Array:
    """A value and its derivatives (4, N, d) by s as those by another parameter with rates (3, N)."""
    q, q1, q2, q3 = jets
    s1, s2, s3 = rates[:, :, None]
    return np.stack([q, q1 * s1, q2 * s1**2 + q1 * s2, q3 * s1**3 + 3.0 * q2 * s1 * s2 + q1 * s3])
