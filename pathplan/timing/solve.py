"""Near time-optimal timing of many stretches: coarse timing, clock, fine problem, refinement, exact limits.

What makes a timing optimal is that some limit is in use at every instant. So after every solve the share of time
without a limit in use tells where the cells are too wide, and they are halved there until what could be gained is
below `_LOSS` of the duration. Between the collocation points limits may be overstepped by a little: cells where that
happens get tighter limits, and what is left at the end slows the whole stretch by a hair.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import PathplanError
from pathplan.timing.barrier import follow_central_path
from pathplan.timing.clock import make_clock
from pathplan.timing.coarse import CoarseTiming, coarse_timing
from pathplan.timing.fine import FineProblem, Shares, limit_shares
from pathplan.timing.mesh import GAUSS_LOBATTO, LOOKED, Mesh, Rows, hermite, joined, make_mesh, rows_at
from pathplan.timing.motion import Motion
from pathplan.timing.refinement import LOSS, divided, parts, unused
from pathplan.timing.stretch import StretchTiming

Array = NDArray[np.float64]

_ROUNDS = 8
# How far from the optimum of its cells a round may end, of the duration: the first, any later one at least, the last.
_FIRST_GAP, _COARSE_GAP, _FINAL_GAP = 2e-2, 5e-4, 2e-4
_AGAIN_GAP = 5e-2  # of a timing made for other limits
_GAP_OF_LOSS = 0.3  # a round is solved to this share of what the cells of the last one left unused
_OFF_PATH = 10.0  # its first barrier weight over the last one before: divided cells bring limits not seen there
_TIGHTENINGS = 5
_TIGHT = 2e-4  # overstepping left to slowing the whole stretch
_CHECK_POINTS = 33  # per cell, ends included; peaks between them by parabolas
TORQUE_MARGIN = 5e-5  # and torque with this, for peaks between the points it is checked at
_MARGIN = 5e-6  # limits are kept with this share to spare, for the rounding of tables
_FEWEST_CELLS = 12
_CELLS_PER_WINDOW = 3.0
_SHORTEST_WINDOW = 1 / 30  # of the coarse duration: a finer clock only copies the noise of the coarse timing
BATCH = 4  # stretches solved together: more save little time, and leave less to other processes


def time_motions(motions: Sequence[Motion], coarse: Sequence[CoarseTiming] | None = None) -> list[StretchTiming]:
    """Near time-optimal timings, one for each motion, in order, solved together: hand over at most about `BATCH`.

    `coarse` spares computing the coarse timings anew. Raises PathplanError when a problem does not converge: no
    unfinished timing is returned.
    """
    if not motions:
        return []
    meshes = []
    for motion, first in zip(motions, coarse_timing(motions) if coarse is None else coarse, strict=True):
        window = _jerk_window(motion, first)
        clock = make_clock(first, window)
        cells = max(_FEWEST_CELLS, int(np.ceil(_CELLS_PER_WINDOW * clock.duration / window)))
        meshes.append(make_mesh(motion, clock, cells, 1))
    looked = [rows_at(mesh, LOOKED) for mesh in meshes]
    rows = joined(looked)
    problem = FineProblem(meshes, rows.collocated())
    x = problem.feasible_start(0.7)
    finished: dict[int, tuple[Mesh, Rows, Array]] = {}
    active = list(range(len(motions)))
    start = 0.05 * problem.durations(x)
    gap = np.full(len(motions), _FIRST_GAP)
    for round_ in range(_ROUNDS):
        weight = gap * problem.durations(x) / problem.gap
        x, _ = follow_central_path(problem, x, start=start, final=weight)
        lost, over = unused(problem, rows, x)
        left = problem.per_stretch(lost)
        good = (left <= LOSS) & (problem.per_stretch(over.astype(float)) == 0)
        values = problem.by_stretch(x)
        last = round_ == _ROUNDS - 1
        for k in np.flatnonzero(good | last):
            finished[active[k]] = (problem.meshes[k], looked[k], values[k])
        go_on = np.flatnonzero(~good & ~last)
        if not len(go_on):
            break
        active = [active[k] for k in go_on]
        borders = np.cumsum(problem.cells)[:-1]
        into = [parts(*of) for of in zip(np.split(lost, borders), np.split(over, borders), strict=True)]
        finer = [divided(problem.meshes[k], looked[k], values[k], into[k]) for k in go_on]
        looked = [at for _, at, _ in finer]
        rows = joined(looked)
        problem = FineProblem([mesh for mesh, _, _ in finer], rows.collocated())
        x = problem.slowed(np.concatenate([nodes for _, _, nodes in finer]), 0.99, only_down=True)
        start = _OFF_PATH * weight[go_on]
        gap = np.clip(_GAP_OF_LOSS * left[go_on], _COARSE_GAP, gap[go_on])
    ordered = [finished[k] for k in range(len(motions))]
    problem = FineProblem([mesh for mesh, _, _ in ordered], joined([at for _, at, _ in ordered]).collocated())
    return _within_limits(problem, np.concatenate([nodes for _, _, nodes in ordered]))


def time_again(timed: Sequence[tuple[Motion, StretchTiming]]) -> list[StretchTiming]:
    """Timings of motions that have one already, under limits none of which is lower than those it was made for.

    On the same clocks and cells, so they cost less than new ones and differ from them by what the cells are not refined
    for. Raises PathplanError like `time_motions`.
    """
    if not timed:
        return []
    meshes = [Mesh(motion, old.clock, old.tau, old.clock.duration / (len(old.tau) - 1)) for motion, old in timed]
    nodes = [np.stack([old.b, old.slope * mesh.unit], axis=1) for mesh, (_, old) in zip(meshes, timed, strict=True)]
    x = np.concatenate(nodes).ravel()
    problem = FineProblem(meshes, joined([rows_at(mesh, GAUSS_LOBATTO) for mesh in meshes]))
    return _within_limits(problem, problem.slowed(x, 0.97, only_down=True), _AGAIN_GAP)


def _jerk_window(motion: Motion, coarse: CoarseTiming) -> float:
    """How long the rows that set the pace take to build up their acceleration, s, at most the whole motion."""
    acceleration = 0.5 * (motion.acceleration[:, 1] - motion.acceleration[:, 0])
    jerk = 0.5 * (motion.jerk[:, 1] - motion.jerk[:, 0])
    middle = 0.5 * (coarse.s[1:] + coarse.s[:-1])
    speed = 0.5 * (coarse.speed[1:] + coarse.speed[:-1])
    q1, q2 = motion.along(coarse.piece, middle, 2).rows
    used = np.abs(q1 * coarse.acceleration[:, None] + q2 * speed[:, None] ** 2) / acceleration
    active = used.max(axis=0) >= 0.5 * used.max()
    window = np.max(acceleration[active] / jerk[active])
    return float(np.clip(window, _SHORTEST_WINDOW * coarse.time[-1], coarse.time[-1]))


def _within_limits(problem: FineProblem, x: Array, gap: float = 3.0 * _COARSE_GAP) -> list[StretchTiming]:
    """Solve to the final accuracy with limits kept everywhere, not only at the collocation points.

    `gap` says how far from it x is about.
    """
    meshes, u = problem.meshes, np.linspace(0.0, 1.0, _CHECK_POINTS)
    checked, basis = joined([rows_at(mesh, u) for mesh in meshes]), hermite(u)
    for round_ in range(_TIGHTENINGS):
        scale = problem.durations(x) / problem.gap
        x, _ = follow_central_path(problem, x, start=gap * scale, final=_FINAL_GAP * scale)
        peaks = _peaks(checked, problem.evaluate(x, basis))
        worst = np.zeros(problem.count)
        np.maximum.at(worst, problem.cell_owner, peaks.needed_slowing())
        over = peaks.torque.max(initial=0.0)
        if max(worst.max(), over) <= 1.0 + _TIGHT or round_ == _TIGHTENINGS - 1:
            break
        factors = [1.0 + 1.7 * np.maximum(peak - 1.0, 0.0) for peak in peaks]
        problem = FineProblem(meshes, problem.rows.tightened(*factors))
        x = problem.slowed(x, 0.999, only_down=True)
        gap = 3.0 * _FINAL_GAP
    if not (np.all(np.isfinite(worst)) and problem.evaluate(x, basis)[0].min() > 0):
        raise PathplanError("timing: the speeds along the path differ too much to be resolved")
    factor = (1.0 - _MARGIN) / worst
    if checked.torque is not None:  # torque may be at its limit where the others are not: no speeding up
        factor = np.minimum(factor, 1.0)
    x = _slowed_for_torque(problem, x * factor[problem.owner], checked, basis)
    out = []
    for mesh, values in zip(meshes, problem.by_stretch(x), strict=True):
        b, slope = values[::2].copy(), values[1::2] / mesh.unit
        out.append(StretchTiming(mesh.motion, mesh.clock, mesh.tau, b, slope))
    return out


def _slowed_for_torque(problem: FineProblem, x: Array, checked: Rows, basis: Array) -> Array:
    """x with those stretches slowed that overstep a torque limit anywhere, by no more than it takes.

    Slowing by k turns a row into k on_b + sqrt(k) on_root + constant: the largest k that keeps it solves a quadratic.
    """
    if checked.torque is None:
        return x
    b = problem.evaluate(x, basis)
    linear = checked.torque[0] * b[0] + checked.torque[1] * b[1]
    root, constant = checked.torque[2] * np.sqrt(b[0]), checked.torque[3]
    room = (1.0 - TORQUE_MARGIN) - constant
    over = linear + root > room
    if not over.any():
        return x
    if np.any(room[over] <= 0):
        raise PathplanError("timing: no speed is slow enough for the torque limits")
    linear, root, room = linear[over], root[over], room[over]
    factor = (2.0 * room / (root + np.sqrt(root**2 + 4.0 * linear * room))) ** 2
    least = np.ones(problem.count)
    np.minimum.at(least, problem.cell_owner[np.nonzero(over)[2]], factor)
    return x * least[problem.owner]


def _peaks(rows: Rows, b: Array) -> Shares:
    """The largest shares in every cell: the arrays of `Shares` without their axis of points."""
    shares = limit_shares(rows, b)
    # torque jumps where a joint turns round, and a parabola over a jump would see a peak that is none
    torque = shares.torque.max(axis=1)
    return Shares(_top(shares.speed), _top(shares.acceleration), _top(shares.jerk), _top(shares.tool), torque)


def _top(values: Array) -> Array:
    """Maximum over the points (second axis from the end), peaks between points by the parabola through three."""
    before, here, after = values[..., :-2, :], values[..., 1:-1, :], values[..., 2:, :]
    bend = 2 * here - before - after
    with np.errstate(divide="ignore", invalid="ignore"):
        rise = (after - before) ** 2 / (8 * bend)
    inside = np.abs(after - before) <= 2 * bend  # the top lies between the three: at an end it has no point beyond it
    peak = np.where(inside, here + np.where(inside & (bend > 0), rise, 0.0), -np.inf).max(axis=-2)
    return np.maximum(values.max(axis=-2), peak)
