"""Following spans: joint positions as polynomial pieces that keep to the path and to its derivatives.

Exact values and derivatives at the ends of a piece come from Newton's method on the pose and from the
Jacobian's own derivatives (`pathplan.arm.kinematics.joint_derivatives`). Between them the septic piece is
compared with the exact path at three points, among them where each of its errors is largest; pieces that
miss are halved, all of a level in one batch.

Where a span runs through a singularity the Jacobian says nothing, though the joint positions are smooth. No piece ends
there: one has it in its middle, is compared in pose there, and in derivatives on both sides.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial
from typing import Literal

import numpy as np

from pathplan.path.geometry import Index, Mask, poses_of
from pathplan.path.hermite import derivatives_at, hermite_coefficients
from pathplan.path.joint import Array
from pathplan.path.newton import joint_weights, pose_error
from pathplan.path.spans import Spans
from pathplan.path.tracking import SINGULAR

__all__ = ["Pieces", "Trouble", "fit"]

POSITION = 2e-7  # m a piece may lie off the path at the tool centre point
ANGLE = 2e-7  # rad
# Share of the largest q', q'', q''' on a piece by which it may miss the exact one.
DERIVATIVE = (1e-5, 1e-4, 1e-3)
FIRST_WIDTH = 0.5  # path parameter of a piece to start with
_BENDS = 3  # pieces of a curve that one of ours spans to start with
_HALVINGS = 22
_NARROWEST = 1e-3  # half the width of a piece that runs through a singularity
_NEAR = 1e-2  # rad, or arm lengths: nearer than this to its pose a piece is a fair guess of the joints
# Errors of t^4 (1 - t)^4 and its derivatives are largest at 1/2 (value, second), near 0.32 and 0.68 (first, third).
_CHECKED = np.array([0.32, 0.5, 0.68])
_LIMIT_STEP = 0.02  # path parameter between what a limit at a singular end is drawn from
_SHAKY = 3e-3  # smallest singular value below which an answer near a guess may be that of another branch
_ASTRAY = 0.5  # rad, or m, from the tracked branch
# Rounding of a node's q (relative to 1 rad) reaches the k-th derivative of a piece of width h as this over h^k.
_ROUNDING = np.array([1e-13, 1e-12, 1e-11])


class Trouble(Exception):
    """A place where a span can't be followed with the branches chosen: span, position in it, joint vector, and why."""

    def __init__(self, span: int, at: float, q: Array, kind: Literal["singular", "reach"]) -> None:
        super().__init__(f"span {span} at {at:g}: {kind}")
        self.span, self.at, self.q, self.kind = span, at, q, kind


@dataclass(frozen=True, eq=False)
class Pieces:
    """m polynomial pieces in order of span and position: (8, m, n) coefficients, highest power first."""

    span: Index  # (m,)
    start: Array  # (m,) position in the span
    width: Array  # (m,)
    coefficients: Array


def fit(spans: Spans) -> Pieces:
    """Pieces of all spans. Raises Trouble where a span can't be followed to tolerance."""
    exact, bent = spans.exact(), spans.motions.bent[spans.before] >= 0
    done = [_exact(spans, np.flatnonzero(exact & ~bent))]
    done += [_taught(spans, int(i)) for i in np.flatnonzero(exact & bent)]
    todo = np.flatnonzero(~exact)
    count = np.maximum(np.ceil(spans.length[todo] / FIRST_WIDTH - 1e-9), spans.bends(todo) / _BENDS).astype(int)
    count = np.maximum(count, 1)
    span = np.repeat(todo, count + 1)
    number = np.arange(len(span)) - np.repeat(np.cumsum(count + 1) - (count + 1), count + 1)
    at = spans.length[span] * number / np.repeat(count, count + 1)
    span, at, centre = _round_crossings(spans, span, at)
    jets = _nodes(spans, span, at, spans.guess(span, at)) if len(span) else np.zeros((4, 0, spans.motions.arm.n))
    opening = np.flatnonzero(span[1:] == span[:-1])
    width = (at[1:] - at[:-1])[opening] if len(at) else at
    pieces = _Open(span[opening], at[opening], width, jets[:, opening], jets[:, opening + 1], centre[opening])
    return _joined(done + _fitted(spans, pieces))


@dataclass(frozen=True, eq=False)
class _Open:
    """m pieces that are still to be fitted, or judged."""

    span: Index  # (m,)
    start: Array  # (m,) position in the span
    width: Array  # (m,)
    begin: Array  # (4, m, n) exact q and derivatives where it begins
    end: Array
    centre: Array  # (m,) of a piece that runs through a singularity: where in the span, its middle; else NaN

    def __len__(self) -> int:
        return len(self.span)

    def take(self, rows: Index | Mask) -> _Open:
        begin, end = self.begin[:, rows], self.end[:, rows]
        return _Open(self.span[rows], self.start[rows], self.width[rows], begin, end, self.centre[rows])

    def cuts(self) -> tuple[Index, Array]:
        """Pieces and positions in them where they are to be cut: in the middle, or in the middle of both halves."""
        whole, ringed = np.flatnonzero(np.isnan(self.centre)), np.flatnonzero(~np.isnan(self.centre))
        half = self.width / 2
        part = np.concatenate([whole, ringed, ringed])
        return part, np.concatenate([half[whole], half[ringed] / 2, half[ringed] * 1.5])

    def cut(self, middle: Array) -> _Open:
        """The parts, from what is exact at the `cuts`."""
        whole, ringed = np.flatnonzero(np.isnan(self.centre)), np.flatnonzero(~np.isnan(self.centre))
        at = np.split(middle, [len(whole), len(whole) + len(ringed)], axis=1)
        half, start, nan = self.width / 2, self.start, np.full(2 * len(whole) + len(ringed), np.nan)
        order = np.concatenate([whole, whole, ringed, ringed, ringed])
        first, rest = start[ringed] + half[ringed] / 2, start[ringed] + half[ringed] * 1.5
        return _Open(
            self.span[order],
            np.concatenate([start[whole], start[whole] + half[whole], start[ringed], first, rest]),
            np.concatenate([half[whole], half[whole], half[ringed] / 2, half[ringed], half[ringed] / 2]),
            np.concatenate([self.begin[:, whole], at[0], self.begin[:, ringed], at[1], at[2]], axis=1),
            np.concatenate([at[0], self.end[:, whole], at[1], at[2], self.end[:, ringed]], axis=1),
            np.concatenate([nan, self.centre[ringed], np.full(len(ringed), np.nan)]),
        )


def _fitted(spans: Spans, pieces: _Open) -> list[Pieces]:
    """Pieces that keep to the path, cut as often as that needs."""
    done: list[Pieces] = []
    for _ in range(_HALVINGS):
        if not len(pieces):
            return done
        coefficients = hermite_coefficients(pieces.begin, pieces.end, pieces.width)
        good, off = _keeps(spans, pieces, coefficients)
        done.append(Pieces(pieces.span[good], pieces.start[good], pieces.width[good], coefficients[:, good]))
        bad = ~good
        pieces = pieces.take(bad)
        narrow = np.flatnonzero(~np.isnan(pieces.centre) & (pieces.width < 2 * _NARROWEST))
        if len(narrow):
            _give_up(spans, pieces.take(narrow))
        part, local = pieces.cuts()
        if not len(part):
            return done
        guess = derivatives_at(coefficients[:, bad][:, part], local)[0]
        span, at = pieces.span[part], pieces.start[part] + local
        guess -= spans.joint_jets(span, at)[0]
        wild = (off[bad] > _NEAR)[part]  # a piece far too long for its path: the tracked branch is the better guess
        guess[wild] = spans.guess(span[wild], at[wild])
        pieces = pieces.cut(_nodes(spans, span, at, guess))
    _give_up(spans, pieces)
    return done


def _give_up(spans: Spans, pieces: _Open) -> None:
    """Raise Trouble for the most singular of pieces that don't come to keep to the path."""
    worst = int(np.argmin(spans.motions.course.follower.singular(spans.view(pieces.span), pieces.begin[0])))
    raise Trouble(int(pieces.span[worst]), float(pieces.start[worst]), pieces.begin[0, worst], "singular")


def _round_crossings(spans: Spans, span: Index, at: Array) -> tuple[Index, Array, Array]:
    """Nodes (N,) with none near a singularity that a span runs through but one on each side of it, equally far; and
    for the one before it where in the span it lies (N,), else NaN.
    """
    centre = np.full(len(span), np.nan)
    crossings = spans.crossings()
    places: dict[int, list[float]] = {}
    for i, place in crossings:
        places.setdefault(i, []).append(place)
    for i, place in crossings:
        length = float(spans.length[i])
        others = [other for other in places[i] if other != place]
        room = min(abs(place - other) for other in (0.0, length, *others))
        half = min(0.4 * room, FIRST_WIDTH / 4)
        if half < _NARROWEST:
            raise Trouble(i, place, spans.guess(np.array([i]), np.array([place]))[0], "singular")
        gone = (span == i) & (np.abs(at - place) < 1.5 * half) & (at > 0.0) & (at < length)
        span, at, centre = span[~gone], at[~gone], centre[~gone]
        row = int(np.searchsorted(span, i)) + int(np.searchsorted(at[span == i], place))
        span = np.insert(span, row, [i, i])
        at = np.insert(at, row, [place - half, place + half])
        centre = np.insert(centre, row, [place, np.nan])
    return span, at, centre


def _joined(parts: list[Pieces]) -> Pieces:
    span = np.concatenate([part.span for part in parts])
    start = np.concatenate([part.start for part in parts])
    order = np.lexsort((start, span))
    return Pieces(
        span[order],
        start[order],
        np.concatenate([part.width for part in parts])[order],
        np.concatenate([part.coefficients for part in parts], axis=1)[:, order],
    )


def _exact(spans: Spans, i: Index) -> Pieces:
    """Spans straight in joint space, and corners between two of them, as the polynomials they are: degree
    one and four.

    With x = at / delta the ramps of a corner are x^3/4 - x^4/16 coming in and x - 1 minus that going out.
    """
    motions, n = spans.motions, spans.motions.arm.n
    coefficients = np.zeros((8, len(i), n))
    before = spans.before[i]
    corner = spans.corner[i]
    d1 = motions.direction[before]
    change = np.where(corner[:, None], motions.direction[spans.after[i]] - d1, 0.0)
    delta = np.where(corner, spans.delta[i], 1.0)[:, None]
    begin = np.where(corner, motions.length[before] - spans.delta[i], spans.offset[i])
    # Counted from the nearer end: an arm that stops at a target stops on it exactly.
    coefficients[7] = np.where(
        corner[:, None],
        motions.end[before] - d1 * spans.delta[i][:, None],
        motions.start[before] + d1 * begin[:, None],
    )
    coefficients[6] = d1
    coefficients[4] = change / (4.0 * delta**2)
    coefficients[3] = -change / (16.0 * delta**3)
    return Pieces(i, np.zeros(len(i)), spans.length[i], coefficients)


def _taught(spans: Spans, i: int) -> Pieces:
    """A plain span of a taught path: its own polynomials, cut where the span begins and ends."""
    motions, before = spans.motions, int(spans.before[i])
    path = motions.paths[motions.bent[before]]
    begin = float(spans.offset[i])
    end = begin + float(spans.length[i])
    if end > path.length * (1 - 1e-12):
        end = path.length
    inner = path.breaks[(path.breaks > begin) & (path.breaks < end)]
    starts = np.concatenate([[begin], inner])
    powers = [path(starts, order) / factorial(order) for order in range(len(path.coefficients))]
    coefficients = np.zeros((8, len(starts), motions.arm.n))
    coefficients[8 - len(powers) :] = powers[::-1]
    coefficients[7] += motions.start[before] - path([0.0])
    width = np.diff(np.append(starts, end))
    return Pieces(np.full(len(starts), i, dtype=np.intp), starts - begin, width, coefficients)


def _nodes(spans: Spans, i: Index, at: Array, guess: Array) -> Array:
    """(4, N, n) exact q and derivatives at positions in spans. Raises Trouble at singularities and out
    of reach.
    """
    out = spans.joint_jets(i, at)
    rows = np.flatnonzero(spans.inverted()[i])
    if not len(rows):
        return out
    i, at = i[rows], at[rows]
    jets = spans.tool_jets(i, at)
    q, met = spans.near(i, at, jets, guess[rows])
    view, follower = spans.view(i), spans.motions.course.follower
    value = follower.singular(view, q)
    lost = ~met | (value < _SHAKY)
    if lost.any():  # near a singularity a poor guess leads astray: the tracked branch tells where to look
        tracked = spans.guess(i[lost], at[lost])
        off = np.abs(q[lost] - tracked).max(axis=1) > _ASTRAY
        lost = np.flatnonzero(lost)[off | ~met[lost]]
        q[lost], met[lost] = spans.near(i[lost], at[lost], jets.take(lost), spans.guess(i[lost], at[lost]))
        value[lost] = follower.singular(view[lost], q[lost])
    poor = ~met | (value < SINGULAR)
    jets_there = spans.derivatives(i, at, jets, q)
    ending = np.flatnonzero(poor & ((at <= 0.0) | (at >= spans.length[i])) & ~spans.corner[i])
    for row in ending.tolist():
        limit = _limit(spans, int(i[row]), float(at[row]))
        if limit is not None:
            q[row], jets_there[:, row], poor[row] = limit[0], limit[1:], False
    if poor.any():
        row = int(np.flatnonzero(poor)[np.argmin(value[poor])])
        raise Trouble(int(i[row]), float(at[row]), q[row], "singular" if value[row] < _SHAKY else "reach")
    out[:, rows] += np.concatenate([q[None], jets_there])
    return out


def _limit(spans: Spans, i: int, at: float) -> Array | None:
    """(4, n) q and derivatives at an end of a span that lies in a singularity: of the polynomial through the tracked
    limit there and exact values and derivatives at two places on the way. None where these are singular too.
    """
    inward = 1.0 if at <= 0.0 else -1.0
    step = inward * min(_LIMIT_STEP, float(spans.length[i]) / 8.0)
    places, number = at + step * np.array([1.0, 2.0]), np.array([i, i])
    jets = spans.tool_jets(number, places)
    q, met = spans.near(number, places, jets, spans.guess(number, places))
    if not met.all() or spans.motions.course.follower.singular(spans.view(number), q).min() < SINGULAR:
        return None
    known = np.concatenate([q[None], spans.derivatives(number, places, jets, q)])  # (4, 2, n)
    known *= step ** np.arange(4.0)[:, None, None]
    end = spans.guess(number[:1], np.array([at]))
    powers = np.arange(9)
    falling = [np.ones(9)]
    for order in range(3):
        falling.append(falling[-1] * np.maximum(powers - order, 0))
    rows = [powers == 0]
    for x in (1.0, 2.0):
        rows += [falling[order] * x ** np.maximum(powers - order, 0.0) for order in range(4)]
    values = np.concatenate([end, known[:, 0], known[:, 1]])
    coefficients = np.linalg.solve(np.array(rows, dtype=float), values)
    factors = np.array([1.0, 1.0, 2.0, 6.0])[:, None] / step ** np.arange(4.0)[:, None]
    return np.asarray(coefficients[:4] * factors)


def _keeps(spans: Spans, pieces: _Open, coefficients: Array) -> tuple[Mask, Array]:
    """(m,) which pieces keep to the path and its derivatives, and how far each is off the pose in its middle
    (rad, or arm lengths).
    """
    arm, m, width = spans.motions.arm, len(pieces), pieces.width
    points = len(_CHECKED)
    i = np.repeat(pieces.span, points)
    local = (width[:, None] * _CHECKED).ravel()
    at = np.repeat(pieces.start, points) + local
    fitted = derivatives_at(np.repeat(coefficients, points, axis=1), local)
    exact = spans.joint_jets(i, at)
    weights = joint_weights(arm)
    q = fitted[0] - exact[0]  # of the Cartesian part, or what is missing where there is none
    missing = np.zeros((len(i), 6))
    rows = np.flatnonzero(spans.inverted()[i])
    if len(rows):
        jets = spans.tool_jets(i[rows], at[rows])
        own_from_tool = np.linalg.inv(spans.tool_from_own(i[rows]))
        reached = spans.motions.course.follower.forward(spans.view(i[rows]), q[rows]) @ own_from_tool
        missing[rows] = pose_error(reached, poses_of(jets.position[0], jets.rotation))
        exact[1:, rows] += spans.derivatives(i[rows], at[rows], jets, q[rows])
        held = list(spans.motions.course.follower.held)
        off_course = q[rows][:, held] - spans.held_jets(i[rows], at[rows])[0]
        q[rows] = 0.0
        q[rows[:, None], held] = off_course
    near = (np.linalg.norm(missing[:, :3], axis=1) <= POSITION) & (np.linalg.norm(missing[:, 3:], axis=1) <= ANGLE)
    near &= (np.abs(q) * weights).max(axis=1) <= ANGLE
    good = near.reshape(m, points).all(axis=1)
    middle = points * np.flatnonzero(~np.isnan(pieces.centre)) + points // 2
    exact[:, middle] = fitted[:, middle]  # at a singularity no derivative is known
    exact = exact[1:]

    def largest(values: Array) -> Array:
        return np.abs(values * weights).max(axis=2).reshape(len(values), m, -1).max(axis=2)

    error = largest(fitted[1:] - exact)
    ends = np.maximum(np.abs(pieces.begin[1:] * weights).max(axis=2), np.abs(pieces.end[1:] * weights).max(axis=2))
    scale = np.maximum(largest(exact), ends)
    # The path parameter counts radians or arm lengths: a bend is measured at least against one that turns
    # once a radian.
    scale[1:] = np.maximum(scale[1:], scale[0])
    powers = width ** np.arange(1, 4)[:, None]
    allowed = np.array(DERIVATIVE)[:, None] * scale + _ROUNDING[:, None] / powers
    off = np.linalg.norm(missing.reshape(m, points, 6)[:, 1] / ([arm.length] * 3 + [1.0] * 3), axis=1)
    return good & (error <= allowed).all(axis=0), off
