"""The inverse of a chain of axes: which method serves it, and all its branches by that method."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from pathplan.arm.elimination import BRANCHES, Version, distinct, eliminate, versions
from pathplan.arm.five import TURNED, with_sixth
from pathplan.arm.geometry import EXACT, Geometry, near
from pathplan.arm.inverse_form import Form, Structure
from pathplan.arm.model import Array, Index, Mask
from pathplan.arm.refine import apart, canonical, pose_errors, reached, refine
from pathplan.arm.search import FORGIVEN, nearest, search
from pathplan.arm.structure import recognise
from pathplan.arm.subproblems import wrapped

__all__ = ["Answers", "Solver", "solver_of"]

CHUNK = 512  # poses solved at a time, so that the working arrays stay in cache
POLISHED = 1e-12  # m and rad: answers within this are left as they are
BASIN = 1e-3  # of the arm's length, and rad: from farther off an exact form's answer is no answer
NEAR_BASIN = 0.02  # the same of a form that fits nearly: some of its tolerance
VALID = 1e-9
DOUBTFUL = 0.05  # smallest distance of branches (rad) below which a form that fits nearly may miss some
FOLLOWED = 0.5  # rad: an answer this near to one of the pose before may be the same branch
SURE = 0.9985  # part of the known branches that a version of the elimination must find to be trusted


@dataclass(frozen=True)
class Answers:
    """Joint values (N, B, m) of N poses and their errors (N, B), infinite where a place holds nothing."""

    q: Array
    position_error: Array
    angle_error: Array


@dataclass(frozen=True)
class Solver:
    """What serves a chain; made by `solver_of`."""

    g: Geometry
    travel: Array  # (m, 2) of prismatic joints, where a search may start
    form: Form | None
    exact: bool  # the form fits to rounding
    six: Geometry | None = None  # five axes: the chain with a sixth that the form is of

    @property
    def structure(self) -> Structure:
        return self.form.structure if self.form else "general"

    @property
    def steady(self) -> bool:
        """The branch index follows a path by itself, in whatever batch of poses."""
        return self.form is not None and self.form.steady

    @property
    def labels(self) -> tuple[Mapping[str, str], ...]:
        return self.form.labels if self.form else ({},) * BRANCHES

    @cached_property
    def elimination(self) -> tuple[Version, ...]:
        """Versions of the elimination that serve the chain, best first; none where none does."""
        if self.g.m != 6 or not self.g.revolute(*range(6)):
            return ()
        order, share = versions(self.g)
        return order if share >= SURE else ()

    @property
    def method(self) -> str:
        """In words."""
        if self.form is not None:
            correction = "" if self.exact else ", nearly: corrected by Newton steps"
            sixth = ", with a sixth axis that stays at zero" if self.six is not None else ""
            return f"closed form ({self.form.words}{sixth}{correction})"
        if self.elimination:
            return "elimination (eigenvalues of size 24), at most 16 branches"
        return "numeric search from many starts"

    def solve(self, poses: Array) -> Answers:
        """All branches for tool poses (N, 4, 4)."""
        size = len(self.labels)
        q = np.zeros((len(poses), size, self.g.m))
        errors = np.full((2, len(poses), size), np.inf)
        step = CHUNK if self.form is not None else CHUNK // 4
        for start in range(0, len(poses), step):
            part = slice(start, start + step)
            if self.form is not None:
                q[part], errors[:, part] = self._by_form(self.form, poses[part])
            else:
                q[part], errors[:, part] = self._in_general(poses[part])
        if self.form is not None and (self.g.m >= 6 or self.six is not None or not self.exact):
            self._polish(self.form, q, errors, poses)
        if self.six is not None:
            self._nearest_instead(q, errors, poses)
        if not self.steady and len(poses) > 1:
            order = _followed(self.g, q, _valid(errors))
            rows = np.arange(len(poses))[:, None]
            q, errors = q[rows, order], errors[:, rows, order]
        return Answers(q, errors[0], errors[1])

    def _by_form(self, form: Form, poses: Array) -> tuple[Array, Array]:
        q = form.solve(*self.g.motion(poses)).transpose(2, 1, 0)
        if self.six is not None:
            own = np.abs(wrapped(q[..., 5])) < TURNED
            q = np.ascontiguousarray(canonical(self.g, q[..., :5]))
            errors = self._errors(q, poses)
            errors[:, ~own] = np.inf
            return q, errors
        if not form.steady or not self.exact:
            q = canonical(self.g, q)
        q = np.ascontiguousarray(q)
        return q, self._errors(q, poses)

    def _polish(self, form: Form, q: Array, errors: Array, poses: Array) -> None:
        """Newton steps where the form's answer is near but not at its pose; of unsteady forms repeated answers go."""
        basin = BASIN if self.exact else NEAR_BASIN
        off = np.maximum(errors[0] / self.g.length, errors[1])
        row, branch = np.nonzero((errors.max(axis=0) > POLISHED) & (off < basin))
        if len(row):
            tried = canonical(self.g, refine(self.g, q[row, branch], poses[row]))
            tried_errors = np.array(pose_errors(reached(self.g, tried), poses[row]))
            kept = _valid(tried_errors) if self.g.m >= 6 else tried_errors.max(axis=0) < np.inf
            row, branch = row[kept], branch[kept]
            q[row, branch], errors[:, row, branch] = tried[kept], tried_errors[:, kept]
        if not form.steady:
            for start in range(0, len(poses), CHUNK):
                self._drop_repeated(q[start : start + CHUNK], errors[:, start : start + CHUNK])
        elif not self.exact and self.elimination:
            self._complete(q, errors, poses)

    def _errors(self, q: Array, poses: Array) -> Array:
        return np.array(pose_errors(reached(self.g, q), poses[:, None]))

    def _drop_repeated(self, q: Array, errors: Array) -> None:
        """Of places that hold the same answer the first keeps it."""
        good = _valid(errors)
        gap = _gaps(self.g, q, q)
        repeated = good & ((gap < 1e-7) & good[:, None] & np.tri(q.shape[1], k=-1, dtype=bool)).any(axis=2)
        errors[:, repeated] = np.inf

    def _complete(self, q: Array, errors: Array, poses: Array) -> None:
        """A form that fits nearly may miss branches where two of them come close: there the elimination looks too."""
        doubtful = [np.zeros(0, dtype=np.intp)]
        for start in range(0, len(poses), CHUNK):
            part = slice(start, start + CHUNK)
            doubtful.append(start + self._doubtful(q[part], errors[:, part]))
        rows = np.concatenate(doubtful)
        for start in range(0, len(rows), CHUNK):
            self._look_again(rows[start : start + CHUNK], q, errors, poses)

    def _doubtful(self, q: Array, errors: Array) -> Index:
        """Poses at which a branch seems to be missing, or to have come close to another."""
        good = _valid(errors)
        gap = np.where(good[:, None] & good[:, :, None], _gaps(self.g, q, q), np.inf)
        gap[:, np.arange(q.shape[1]), np.arange(q.shape[1])] = np.inf
        lost = ~good & (np.maximum(errors[0] / self.g.length, errors[1]) < NEAR_BASIN)
        return np.flatnonzero(lost.any(axis=1) | (gap.min(axis=(1, 2)) < DOUBTFUL) | (good.sum(axis=1) % 2 == 1))

    def _look_again(self, rows: Index, q: Array, errors: Array, poses: Array) -> None:
        """What the elimination finds besides at poses `rows`, in places that hold nothing else."""
        own_q, own_errors = q[rows], errors[:, rows]
        self._drop_repeated(own_q, own_errors)
        errors[:, rows] = own_errors
        found, filled = distinct(self.g, *eliminate(self.g, self.elimination[0], poses[rows]), BRANCHES)
        for k, row in enumerate(rows):
            for answer in found[k][filled[k]]:
                valid = _valid(errors[:, row])
                if valid.any() and apart(self.g, q[row, valid], answer).min() < 1e-6:
                    continue
                free = np.flatnonzero(~valid)
                if len(free):
                    place = free[np.argmin(apart(self.g, q[row, free], answer))]
                    q[row, place] = answer
                    errors[:, row, place] = np.array(pose_errors(reached(self.g, answer), poses[row]))

    def _in_general(self, poses: Array) -> tuple[Array, Array]:
        if self.elimination:
            q, filled = distinct(self.g, *eliminate(self.g, self.elimination[0], poses), BRANCHES)
            # Branches come in pairs away from singularities: an odd number tells that one was missed.
            odd = np.flatnonzero(filled.sum(axis=1) % 2 == 1)
            for version in self.elimination[1:3]:
                if not len(odd):
                    break
                more, good = eliminate(self.g, version, poses[odd])
                candidates, known = np.concatenate([q[odd], more], axis=1), np.concatenate([filled[odd], good], axis=1)
                q[odd], filled[odd] = distinct(self.g, candidates, known, BRANCHES)
                odd = odd[filled[odd].sum(axis=1) % 2 == 1]
        else:
            q, filled = search(self.g, self.travel, poses)
        errors = self._errors(q, poses)
        errors[:, ~filled] = np.inf
        self._nearest_instead(q, errors, poses)
        return q, errors

    def _nearest_instead(self, q: Array, errors: Array, poses: Array) -> None:
        """Where no place holds anything near its pose the first one takes the nearest that a search finds."""
        empty = np.flatnonzero((np.maximum(errors[0] / self.g.length, errors[1]) > FORGIVEN).all(axis=1))
        if len(empty):
            q[empty, 0] = nearest(self.g, self.travel, poses[empty])
            errors[:, empty, 0] = np.array(pose_errors(reached(self.g, q[empty, 0]), poses[empty]))


def _valid(errors: Array) -> Mask:
    """Which answers (...) with errors (2, ...) stand at their pose."""
    return np.asarray((errors < VALID).all(axis=0))


def _followed(g: Geometry, q: Array, good: Mask) -> Index:
    """(N, B) the order of places in which a branch keeps its place from one pose to the next, while it can be told.

    Two answers belong together where each is the nearest one to the other, and near.
    """
    size, places = q.shape[:2]
    order = np.tile(np.arange(places), (size, 1))
    gap = np.empty((size - 1, places, places))
    for start in range(0, size - 1, CHUNK):
        part = slice(start, min(start + CHUNK, size - 1))
        after = slice(part.start + 1, part.stop + 1)
        both = good[part][:, :, None] & good[after][:, None]
        gap[part] = np.where(both, _gaps(g, q[part], q[after]), np.inf)
    to = np.full((size - 1, places), -1, dtype=np.intp)
    some = np.flatnonzero((gap < FOLLOWED).any(axis=(1, 2)))  # poses apart have none
    gap = gap[some]
    nearest, back = gap.argmin(axis=2), gap.argmin(axis=1)
    mutual = (np.take_along_axis(back, nearest, axis=1) == np.arange(places)) & (gap.min(axis=2) < FOLLOWED)
    to[some] = np.where(mutual, nearest, -1)
    straight = (to == np.arange(places)) | (to < 0)
    if straight.all():
        return order
    rows, every = [list(range(places))], range(places)
    for successors in to.tolist():
        row = [successors[answer] for answer in rows[-1]]
        used = set(row)
        left = [answer for answer in every if answer not in used]
        # What has no predecessor stays at its own place where that is free.
        for answer in left:
            if row[answer] < 0:
                row[answer] = answer
                used.add(answer)
        left = [answer for answer in left if answer not in used]
        rows.append([left.pop(0) if answer < 0 else answer for answer in row])
    return np.array(rows, dtype=np.intp)


def _gaps(g: Geometry, q: Array, other: Array) -> Array:
    """(N, B, B) `apart` of every answer q (N, B, m) from every one of `other`; joint by joint, which is faster."""
    worst = np.zeros((*q.shape[:2], q.shape[1]))
    for k, kind in enumerate(g.kinds):
        gap = np.abs(np.ascontiguousarray(q[:, :, k])[:, :, None] - np.ascontiguousarray(other[:, :, k])[:, None])
        if kind == "revolute":
            np.minimum(gap, 2.0 * np.pi - gap, out=gap)
        else:
            gap /= g.length
        np.maximum(worst, gap, out=worst)
    return worst


def solver_of(g: Geometry, travel: Any = None) -> Solver:
    """The solver of a chain. `travel` (m, 2): between which values prismatic joints are searched; default: the arm's
    length either way.
    """
    travel = np.tile([-g.length, g.length], (g.m, 1)) if travel is None else np.asarray(travel, dtype=float)
    for tolerance in (EXACT, near(g.length)):
        form = recognise(g, tolerance)
        if form is not None:
            return Solver(g, travel, form, tolerance is EXACT)
        if (sixth := with_sixth(g, tolerance)) is not None:
            return Solver(g, travel, sixth[1], tolerance is EXACT, sixth[0])
    return Solver(g, travel, None, True)
