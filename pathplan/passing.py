"""Where the tool path of a plan comes near singularities, and the time that costs: a search along the timed path."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.arm.kinematics import smallest_singular_value
from pathplan.auditing.passes import NEAR, Pass, speed_dip
from pathplan.auditing.shares import limit_rows, rows_of, shares_of
from pathplan.path.newton import joint_weights
from pathplan.path.singular import nearness
from pathplan.path.taskpath import Stretch
from pathplan.timeline import Part, Rows, evaluate

__all__ = ["passes_of"]

Array = NDArray[np.float64]
_TRAVEL = 0.02  # rad, or arm lengths, that all joints together move between rows looked at first
_STEEPEST = 3.0  # times that travel: no singular value changes by more (see `auditing.tool`, for common reaches)
_FEWEST = 500  # instants at which a stretch is looked at
_MOST = 50_000  # instants of a stretch that are looked at: bounds memory where one takes hours
_STILL = 1e-6  # m/s: a tool that never moves faster only turns
_PACING = 0.9  # share of a limit from which on it holds back
_GRID = np.linspace(-1.0, 1.0, 9)
_ROUNDS = 14


@dataclass(frozen=True, eq=False)
class _Motion:
    """A timed stretch at many instants."""

    part: Part
    arm: Arm
    local: Array  # (N,) s
    rows: Rows
    value: Array  # (N,) smallest singular value; infinite where it is not small or no tool path is programmed
    speed: Array  # (N,) m/s
    turning: Array  # (N,) rad/s


def passes_of(parts: tuple[Part, ...], cycle: float) -> tuple[Pass, ...]:
    """Every place at which a programmed tool path comes nearest to a singularity, in order of time.

    A pass is a run of instants within one step whose smallest singular value lies below `NEAR`; ends of a step that
    lie near are passes too. Joint motions, which no singularity holds up, have none.
    """
    found: list[Pass] = []
    for part in parts:
        if part.stretch is None or part.timing is None:
            continue
        motion = _motion(part, cycle)
        if motion is not None:
            found += [_pass(motion, low, high, cycle) for low, high in _runs(motion)]
    return tuple(found)


def _motion(part: Part, cycle: float) -> _Motion | None:
    """The stretch at many instants, None if it comes nowhere near."""
    assert part.stretch is not None and part.timing is not None
    arm, duration = part.stretch.arm, part.timing.duration
    local = np.linspace(0.0, duration, int(np.clip(np.ceil(duration / cycle), _FEWEST, _MOST)) + 1)
    rows = evaluate(part, local, arm.n)
    known = part.stretch.has_tool_path(rows.s)
    if not known.any():
        return None
    steps = np.abs(np.diff(rows.position, axis=0)) @ joint_weights(arm)
    travel = np.concatenate([[0.0], np.cumsum(steps)])
    block = np.floor(travel / _TRAVEL).astype(int)
    first = np.unique(np.concatenate([[0], np.flatnonzero(np.diff(block)) + 1, [len(local) - 1]]))
    sparse = smallest_singular_value(arm, rows.position[first])
    close = sparse < NEAR + _STEEPEST * _TRAVEL
    if not close.any():
        return None
    maybe = known & (close | np.append(close[1:], False))[np.searchsorted(first, np.arange(len(local)), "right") - 1]
    value = np.full(len(local), np.inf)
    value[maybe] = smallest_singular_value(arm, rows.position[maybe])
    if not (value < NEAR).any():
        return None
    jacobian = arm.jacobian(rows.position)
    twist = np.einsum("nij,nj->ni", jacobian, rows.velocity)
    speed, turning = np.linalg.norm(twist[:, :3], axis=1), np.linalg.norm(twist[:, 3:], axis=1)
    return _Motion(part, arm, local, rows, value, speed, turning)


def _runs(motion: _Motion) -> Iterator[tuple[int, int]]:
    """First and last row of every run of near rows within one step."""
    near = motion.value < NEAR
    begins = near & ~np.concatenate([[False], near[:-1] & (motion.rows.step[1:] == motion.rows.step[:-1])])
    for low in np.flatnonzero(begins).tolist():
        over = np.flatnonzero(~near[low:] | (motion.rows.step[low:] != motion.rows.step[low]))
        yield low, low + int(over[0]) - 1 if len(over) else len(near) - 1


def _pass(motion: _Motion, low: int, high: int, cycle: float) -> Pass:
    """One pass, the place of nearest approach refined between the rows."""
    nearest = low + int(np.argmin(motion.value[low : high + 1]))
    at = _refined(motion, nearest)
    rows = evaluate(motion.part, np.array([at]), motion.arm.n)
    q, step = rows.position[0], int(motion.rows.step[low])
    near = nearness(motion.arm, q)
    assert motion.part.stretch is not None
    found = Pass(
        step=step,
        time=motion.part.first * cycle + at,
        share=share_of(motion.part.stretch, float(rows.s[0]), step),
        pose=motion.arm.forward(q),
        kind=near.kind,
        value=near.value,
        angle=near.angle,
        distance=near.distance,
    )
    mine = np.flatnonzero(motion.rows.step == step)
    turning = bool(motion.speed[mine].max() < _STILL)
    speed = (motion.turning if turning else motion.speed)[mine]
    dip = speed_dip(motion.local[mine], speed, low - int(mine[0]), high - int(mine[0]))
    if dip.lost == 0.0:
        return found
    joint = _holding(motion, mine[dip.before : dip.behind + 1])
    return replace(found, joint=joint, speed=float(speed[dip.slowest]), turning=turning, lost=dip.lost)


def _refined(motion: _Motion, row: int) -> float:
    """Local time of the least singular value about a row, by narrowing a grid."""
    last = len(motion.local) - 1
    middle, half = float(motion.local[row]), float(motion.local[1])
    low, high = float(motion.local[max(row - 1, 0)]), float(motion.local[min(row + 1, last)])
    for _ in range(_ROUNDS):
        times = np.clip(middle + half * _GRID, low, high)
        value = smallest_singular_value(motion.arm, evaluate(motion.part, times, motion.arm.n).position)
        middle, half = float(times[np.argmin(value)]), half / 4
    return middle


def share_of(stretch: Stretch, s: float, step: int) -> float:
    """Share (0..1) of a step that is done at s of its stretch."""
    part = next(part for part in stretch.steps if part.step == step and part.s_to > part.s_from)
    return float(np.clip((s - part.s_from) / (part.s_to - part.s_from), 0.0, 1.0))


def _holding(motion: _Motion, rows: NDArray[np.intp]) -> str | None:
    """The limit row that is used most at most of these instants, counting those at which it holds something back."""
    names, matrix = limit_rows(motion.arm)
    limits, used = motion.arm.limits, np.zeros((len(rows), len(names)))
    for quantity in ("velocity", "acceleration", "jerk"):
        values = rows_of(getattr(motion.rows, quantity)[rows], matrix)
        np.maximum(used, np.nan_to_num(shares_of(values, getattr(limits, quantity))), out=used)
    paced = used.max(axis=1) >= _PACING
    if not paced.any():
        return None
    return names[int(np.bincount(used[paced].argmax(axis=1)).argmax())]
