"""Arms with more axes than a pose asks for: the inverse with some joints held at given values.

Held still, a joint becomes part of its link and six axes remain, which their closed form (or elimination) solves for
all branches. Where a joint is held at the base or at the tool end of the chain (a track, a turntable seen from its
workpiece, a last roll) only the poses change and everything is one batch; in between, the six axes that are left look
different for each value: one small set-up a value.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations, pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.elimination import BRANCHES
from pathplan.arm.geometry import EXACT, Geometry, near
from pathplan.arm.model import Array, Index, Mask
from pathplan.arm.solver import Answers, Solver, solver_of
from pathplan.arm.structure import forms, geometry_of, recognise
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm
    from pathplan.arm.inverse import Branches

__all__ = ["FreeSolver", "inverse_free", "some_branches", "suggested"]

GENERIC = (0.37, 0.81, 0.13)  # parts of a joint's range at which nothing special is likely to happen
SAMPLES = 24  # values of the free joints that `some_branches` tries


@dataclass(frozen=True)
class FreeSolver:
    """Solves the joints between base and tool but those held; made once for an arm and a choice of held joints."""

    arm: Arm
    held: tuple[int, ...]  # joints, in the order in which values come

    @cached_property
    def ends(self) -> tuple[tuple[int, ...], tuple[int, ...]]:
        """Held joints at the base end and at the tool end of the chain, in its order."""
        path = self.arm.tool_joints
        first, last = 0, len(path)
        while path[first] in self.held:
            first += 1
        while path[last - 1] in self.held:
            last -= 1
        return path[:first], path[last:]

    @cached_property
    def middle(self) -> tuple[int, ...]:
        """Places in `held` of the joints between others."""
        return tuple(k for k, joint in enumerate(self.held) if not any(joint in end for end in self.ends))

    @cached_property
    def typical(self) -> Solver:
        """The solver at values of the held joints at which nothing special happens."""
        low, high = value_range(self.arm, self.held).T
        solvers = [self._solver(low + part * (high - low), None) for part in GENERIC]
        words = [solver.form.words if solver.form else "" for solver in solvers]
        return max(zip(solvers, words, strict=True), key=lambda pair: words.count(pair[1]))[0]

    def at(self, values: Array) -> Solver:
        """The solver with the held joints at values (k,), by the form that serves typical values."""
        return self._solver(values, self.typical) if self.middle else self.typical

    def _solver(self, values: Array, like: Solver | None) -> Solver:
        q = np.zeros(self.arm.n)
        for k in self.middle:
            q[self.held[k]] = values[k]
        g = geometry_of(self.arm, q, self.held)
        kept = [k for k, joint in enumerate(self.arm.tool_joints) if joint not in self.held]
        travel = self.arm.search_range[list(self.arm.tool_joints)][kept]
        if like is None:
            return solver_of(g, travel)
        if like.form is None:
            solver = Solver(g, travel, None, True)
            solver.__dict__["elimination"] = like.elimination  # the versions that serve its neighbours
            return solver
        for tolerance in (EXACT, near(g.length)):
            for form in forms(g, tolerance):
                if form.words == like.form.words and form.structure == like.form.structure:
                    return Solver(g, travel, form, tolerance is EXACT)
        return solver_of(g, travel)

    def solve(self, poses: Array, values: Array) -> tuple[Array, Answers]:
        """Joint vectors (K, B, n) and answers for poses (K, 4, 4) with held values (K, k)."""
        arm, typical = self.arm, self.typical
        places = len(typical.labels)
        moved = self._without_ends(poses, values)
        q = np.full((len(poses), places, arm.n), np.nan)
        errors = np.full((2, len(poses), places), np.inf)
        free = [joint for joint in arm.tool_joints if joint not in self.held]
        for rows, value in self._groups(values):
            solver = self.at(value)
            answers = solver.solve(moved[rows])
            # A value at which the axes stand in a special way may have branches of another number.
            width = min(places, answers.q.shape[1])
            part = np.full((len(rows), places, len(free)), 0.0)
            part[:, :width] = answers.q[:, :width]
            q[rows[:, None, None], np.arange(places)[:, None], np.array(free)] = part
            errors[0, rows, :width] = answers.position_error[:, :width]
            errors[1, rows, :width] = answers.angle_error[:, :width]
        q[:, :, list(self.held)] = values[:, None]
        return q, Answers(q, errors[0], errors[1])

    def _groups(self, values: Array) -> list[tuple[Index, Array]]:
        """Rows that share the values of the middle joints, in their order, with a row of values."""
        if not self.middle:
            return [(np.arange(len(values)), values[0])] if len(values) else []
        same, inverse = np.unique(values[:, list(self.middle)], axis=0, return_inverse=True)
        inverse = inverse.reshape(-1)
        order = np.argsort(inverse, kind="stable")
        borders = np.searchsorted(inverse[order], np.arange(len(same) + 1))
        return [(order[a:b], values[order[a]]) for a, b in pairwise(borders.tolist())]

    def _without_ends(self, poses: Array, values: Array) -> Array:
        """The poses (K, 4, 4) that the chain between the held ends has to make."""
        front, back = self.ends
        whole = geometry_of(self.arm)
        path = list(self.arm.tool_joints)
        column = {joint: values[:, k] for k, joint in enumerate(self.held)}
        for joint in front:
            poses = _motion(whole, path.index(joint), -column[joint]) @ poses
        if back:
            left = poses @ np.linalg.inv(whole.zero_pose)
            for joint in reversed(back):
                left = left @ _motion(whole, path.index(joint), -column[joint])
            poses = left @ whole.zero_pose
        return poses


def _motion(g: Geometry, k: int, value: Array) -> Array:
    """(K, 4, 4) motions of joint k of a chain, about or along its axis at q = 0."""
    from pathplan.arm.subproblems import rotate

    out = np.tile(np.eye(4), (len(value), 1, 1))
    if g.kinds[k] == "prismatic":
        out[:, :3, 3] = value[:, None] * g.axes[k]
        return out
    turned = rotate(g.axes[k], value[None], np.broadcast_to(np.eye(3)[:, :, None], (3, 3, len(value))))
    out[:, :3, :3] = turned.transpose(2, 0, 1)
    out[:, :3, 3] = g.points[k] - out[:, :3, :3] @ g.points[k]
    return out


def value_range(arm: Arm, joints: Sequence[int]) -> Array:
    """(k, 2) where values of joints may lie: their limits, at most one turn; the arm's length where there are none."""
    ranges = []
    for i in joints:
        low, high = arm.joints[i].position
        if arm.joints[i].kind == "prismatic":
            low, high = arm.search_range[i]
        elif not np.isfinite([low, high]).all():
            low, high = -np.pi, np.pi
        ranges.append((low, high))
    return np.array(ranges).reshape(-1, 2)


def held_joints(arm: Arm, joints: Any) -> tuple[int, ...]:
    """Indices of joints given as a name, an index or a list of them. Raises InputError for what can't be held."""
    given = [joints] if isinstance(joints, str | int | np.integer) else list(joints)
    found = []
    for joint in given:
        if isinstance(joint, str):
            if joint not in arm.joint_names:
                raise InputError(f'{arm.name}: unknown joint "{joint}", there is {", ".join(arm.joint_names)}')
            joint = arm.joint_names.index(joint)
        found.append(int(joint))
    path = arm.tool_joints
    outside = [joint for joint in found if joint not in path]
    if outside:
        name = arm.joint_names[outside[0]] if 0 <= outside[0] < arm.n else str(outside[0])
        raise InputError(
            f'{arm.name}: joint "{name}" does not move the tool: to plan in its frame use arm.seen_from("{name}")'
        )
    left = len(path) - len(set(found))
    if len(set(found)) != len(found) or not 1 <= left <= 6:
        raise InputError(f"{arm.name}: expected {max(len(path) - 6, 0)} or more joints to hold, each once, got {found}")
    return tuple(found)


def inverse_free(arm: Arm, poses: Any, joints: Any, values: Any) -> Branches:
    """See `Arm.inverse_free`."""
    from pathplan.arm.inverse import branches_of

    poses = np.asarray(poses, dtype=float)
    if poses.ndim != 3 or poses.shape[1:] != (4, 4):
        raise InputError(f"expected poses of shape (N, 4, 4), got {poses.shape}")
    if not np.isfinite(poses).all():
        raise InputError("poses: expected finite numbers, got NaN or infinity")
    held = held_joints(arm, joints)
    values = np.asarray(values, dtype=float)
    if len(held) == 1 and values.ndim == 1:
        values = values[:, None]
    if values.ndim == 2:
        values = np.broadcast_to(values, (len(poses), *values.shape))
    if values.ndim != 3 or values.shape[0] != len(poses) or values.shape[2] != len(held):
        raise InputError(f"expected values of shape (M,), (M, {len(held)}) or (N, M, {len(held)}), got {values.shape}")
    count = values.shape[1]
    solver = arm.free_solver(held)
    # Value by value, so that branches can be followed along the poses.
    each = np.broadcast_to(poses, (count, *poses.shape)).reshape(-1, 4, 4)
    q, answers = solver.solve(each, values.transpose(1, 0, 2).reshape(-1, len(held)))
    places = q.shape[1]

    def shaped(array: Array) -> Array:
        rest = array.shape[2:]
        return np.ascontiguousarray(array.reshape(count, len(poses), places, *rest).swapaxes(0, 1))

    ordered = Answers(shaped(q), shaped(answers.position_error), shaped(answers.angle_error))
    return branches_of(arm, ordered.q, ordered, solver.typical.labels)


def suggested(arm: Arm) -> tuple[str, ...]:
    """See `Arm.free_joints`."""
    path = arm.tool_joints
    spare = len(path) - 6
    if spare <= 0:
        return ()
    # A carriage that takes a whole arm along first, then the third axis of a shoulder, then whatever is left.
    lead = 0
    while lead < spare and (path[lead] in arm.free_first or arm.joints[path[lead]].kind == "prismatic"):
        lead += 1
    order = [k for k in range(len(path)) if path[k] in arm.free_first or k < lead]
    order += [k for k in (lead + i for i in (2, 1, 3, 0)) if k < len(path) and k not in order]
    order += [k for k in range(len(path)) if k not in order]
    best: tuple[tuple[int, int], tuple[int, ...]] | None = None
    for choice in combinations(range(len(path)), spare):
        held = tuple(path[k] for k in choice)
        form = _typical_form(arm, held)
        quality = 2 if form is None else int(not form.steady)
        rank = (quality, sum(order.index(k) for k in choice))
        if best is None or rank < best[0]:
            best = (rank, held)
    assert best is not None
    return tuple(arm.joint_names[i] for i in best[1])


def _typical_form(arm: Arm, held: tuple[int, ...]) -> Any:
    low, high = value_range(arm, held).T
    q = np.zeros(arm.n)
    q[list(held)] = low + GENERIC[0] * (high - low)
    return recognise(geometry_of(arm, q, held))


def some_branches(arm: Arm, poses: Array) -> Answers:
    """16 answers (N, 16, m) for poses (N, 4, 4) of an arm with more than six axes, from all over its free joints'
    ranges; those within the position limits first. Their order means nothing.
    """
    held = held_joints(arm, arm.free_joints)
    low, high = value_range(arm, held).T
    # Low-discrepancy parts of the range (Weyl 1916), its middle first.
    steps = np.array([0.6180339887498949, 0.7548776662466927, 0.8191725133961645, 0.8566748838545029])
    parts = (0.5 + np.arange(SAMPLES)[:, None] * np.resize(steps, len(held))) % 1.0
    found = inverse_free(arm, poses, held, low + parts * (high - low))
    path = list(arm.tool_joints)
    q = found.q.reshape(len(poses), -1, arm.n)
    valid = np.asarray(found.valid).reshape(len(poses), -1)
    position, angle = (e.reshape(len(poses), -1) for e in (found.position_error, found.angle_error))
    size = np.where(valid, 0.0, 1.0 + np.minimum(np.maximum(position / arm.length, angle), 1e6))
    order = np.argsort(size - 0.5 * (valid & inside(arm, q)), axis=1, kind="stable")[:, :BRANCHES]
    rows = np.arange(len(poses))[:, None]
    return Answers(
        np.ascontiguousarray(q[rows, order][:, :, path]), position[rows, order].copy(), angle[rows, order].copy()
    )


def inside(arm: Arm, q: Array) -> Mask:
    """(...) whether every joint between base and tool has a turn equivalent within its position limits."""
    good = np.ones(q.shape[:-1], dtype=bool)
    for i in arm.tool_joints:
        low, high = arm.joints[i].position
        value = q[..., i]
        if arm.joints[i].kind == "revolute" and np.isfinite([low, high]).all():
            turn = 2.0 * np.pi
            good &= np.floor((high - value) / turn) >= np.ceil((low - value) / turn)
        else:
            good &= (value >= low) & (value <= high)
    return good
