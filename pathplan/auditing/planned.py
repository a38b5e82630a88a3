"""What only the plan can tell: how near the tool kept to the path, what became of speeds and corners."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.auditing.drives import LoadChange, torque_limits
from pathplan.auditing.model import QUANTITIES, JointAudit
from pathplan.auditing.passes import Pass
from pathplan.auditing.shares import Array, Rows, larger, limit_rows, peaks_of, row_kinds, rows_of
from pathplan.auditing.tolerances import TurnedAside

__all__ = [
    "CornerUse",
    "Deviation",
    "Evidence",
    "Planned",
    "StepSpeed",
    "corners_of",
    "deviations",
    "joint_peaks",
    "path_deviation",
    "step_speeds",
    "tool_speed_by_step",
    "worse_deviation",
    "worse_peaks",
]

AT_ASKED = 0.999  # of the asked speed: from here on it counts as reached


@dataclass(frozen=True)
class Deviation:
    """Largest distance of the tool from the programmed path: position (m) and angle (rad), and where."""

    position: float
    position_time: float
    position_step: int
    angle: float
    angle_time: float
    angle_step: int
    count: int  # poses compared


@dataclass(frozen=True)
class StepSpeed:
    """Tool speed of one step: asked and reached (m/s), and the part of its time (0..1) at the asked speed.

    `asked` is None where nothing caps the tool; `part` is then 0.
    """

    step: int
    name: str
    asked: float | None
    reached: float
    part: float


@dataclass(frozen=True)
class CornerUse:
    """What became of the corner after a step: its size as asked and as used, in the unit of `region`.

    `region` is "length" (m), "angle" (rad) or "share" (of the neighbouring steps); "" where none was asked.
    """

    after_step: int
    kind: str  # "fly-by" or "stop"
    reason: str  # of a stop
    asked: str  # as written in the task
    asked_value: float
    used: float
    region: str


@dataclass(frozen=True)
class Evidence:
    """What a plan hands to the audit about the trajectory behind its table.

    `deviation_rows` and `deviation_midway` from `path_deviation` at the rows and halfway between them;
    `continuous` from `joint_peaks` over an evaluation of the trajectory 20 times denser than the rows, or ();
    `turns` are of the steps that tolerate that the tool leaves its orientation;
    `loads` are the stops at which the arm takes up or leaves a load.
    """

    deviation_rows: Deviation | None = None
    deviation_midway: Deviation | None = None
    continuous: tuple[JointAudit, ...] = ()
    loads: tuple[LoadChange, ...] = ()
    turns: tuple[TurnedAside, ...] = ()


class Planned(Protocol):
    """What `audit` needs of a plan: its `Task`, its `TaskPath`, its bound and evidence of the rest."""

    @property
    def task(self) -> Any: ...

    @property
    def path(self) -> Any: ...

    @property
    def bound(self) -> float | None: ...

    @property
    def passes(self) -> tuple[Pass, ...]: ...

    @property
    def evidence(self) -> Evidence: ...


def path_deviation(
    actual: Array, programmed: Array, known: NDArray[np.bool_], time: Array, step: NDArray[np.int64]
) -> Deviation | None:
    """How far tool poses (N, 4, 4) lie from the programmed ones (N, 4, 4), where those are known (N,) bool.

    time (N,) s, step (N,) 0-based. None where none is known.
    """
    at = np.flatnonzero(known)
    if not len(at):
        return None
    distance, angle = deviations(actual[at], programmed[at])
    p, a = int(np.argmax(distance)), int(np.argmax(angle))
    return Deviation(
        position=float(distance[p]),
        position_time=float(time[at[p]]),
        position_step=int(step[at[p]]),
        angle=float(angle[a]),
        angle_time=float(time[at[a]]),
        angle_step=int(step[at[a]]),
        count=len(at),
    )


def deviations(actual: Array, programmed: Array) -> tuple[Array, Array]:
    """Distances (N,) m and angles (N,) rad between tool poses (N, 4, 4) and programmed ones (N, 4, 4)."""
    distance = np.linalg.norm(actual[:, :3, 3] - programmed[:, :3, 3], axis=1)
    return distance, _angle_between(actual[:, :3, :3], programmed[:, :3, :3])


def _angle_between(one: Array, other: Array) -> Array:
    """Angles (N,) between rotations (N, 3, 3), good near 0 and near half a turn.

    From the sine and cosine in the turn from one to the other; the arc cosine alone loses half the digits.
    """
    turn = np.swapaxes(one, 1, 2) @ other
    sine = np.stack(
        [turn[:, 2, 1] - turn[:, 1, 2], turn[:, 0, 2] - turn[:, 2, 0], turn[:, 1, 0] - turn[:, 0, 1]], axis=1
    )
    return np.arctan2(np.linalg.norm(sine, axis=1), np.trace(turn, axis1=1, axis2=2) - 1)


def worse_deviation(one: Deviation | None, other: Deviation | None) -> Deviation | None:
    """The deviations of two pieces of one path, taken together."""
    if one is None or other is None:
        return one or other
    p = other if other.position > one.position else one
    a = other if other.angle > one.angle else one
    return Deviation(
        *(p.position, p.position_time, p.position_step),
        *(a.angle, a.angle_time, a.angle_step),
        count=one.count + other.count,
    )


def joint_peaks(
    arm: Arm, time: Array, step: NDArray[np.int64], first: int = 0, **columns: Array | None
) -> tuple[JointAudit, ...]:
    """Peaks of each limit row of the arm, joints first, over samples.

    time (N,) s; step (N,) 0-based; columns: position, velocity, acceleration, jerk (N, n) and torque
    (N, n), any of them. Used for the table's rows and for denser evaluations alike. `first` is the row
    number of the first.
    """
    names, matrix = limit_rows(arm)
    kinds = row_kinds(arm)
    rows = Rows(time, step, first)
    found: dict[str, Any] = {}
    for quantity in QUANTITIES:
        values = columns.get(quantity)
        limits = getattr(arm.limits, quantity)
        if values is None:
            found[quantity] = [None] * len(names)
        elif quantity == "torque":  # of the joints alone: a torque is not summed as positions are
            peaks, _ = peaks_of(values, torque_limits(arm, columns.get("velocity")), rows)
            found[quantity] = peaks + [None] * (len(names) - arm.n)
        else:
            own = rows_of(values, matrix)
            found[quantity], _ = peaks_of(own, limits, rows, position=quantity == "position")
    return tuple(
        JointAudit(name, kind, **{quantity: found[quantity][r] for quantity in QUANTITIES})
        for r, (name, kind) in enumerate(zip(names, kinds, strict=True))
    )


def worse_peaks(one: tuple[JointAudit, ...], other: tuple[JointAudit, ...]) -> tuple[JointAudit, ...]:
    """The peaks of two pieces of one trajectory, taken together; () counts as nothing."""
    if not one or not other:
        return one or other
    joined = []
    for a, b in zip(one, other, strict=True):
        pairs: dict[str, Any] = {q: larger([getattr(a, q)], [getattr(b, q)])[0] for q in QUANTITIES}
        joined.append(JointAudit(a.name, a.kind, **pairs))
    return tuple(joined)


def tool_speed_by_step(
    speed: Array, asked: Array, step: NDArray[np.int64], times: Array
) -> dict[int, tuple[float, float, float]]:
    """Step -> (largest speed m/s, time at the asked speed, time), times in the unit of `times`.

    speed (N,) m/s of rows of `step` (N,) that stand for `times` (N,); asked (S,) by step, inf where nothing
    is. At the asked speed means 99.9 % of it or more.
    """
    found = {}
    for number in np.unique(step).tolist():
        mine = step == number
        cap = asked[min(number, len(asked) - 1)]
        at = speed[mine] >= AT_ASKED * cap
        found[number] = (float(speed[mine].max()), float(times[mine][at].sum()), float(times[mine].sum()))
    return found


def step_speeds(
    found: Mapping[int, tuple[float, float, float]], asked: Array, names: Mapping[int, str]
) -> tuple[StepSpeed, ...]:
    """What `tool_speed_by_step` found, in order of the steps."""
    speeds = []
    for step, (reached, at, total) in sorted(found.items()):
        cap = float(asked[min(step, len(asked) - 1)])
        known = cap if np.isfinite(cap) else None
        part = at / total if known is not None and total > 0 else 0.0
        speeds.append(StepSpeed(step, names.get(step, ""), known, reached, part))
    return tuple(speeds)


def corners_of(path: Any) -> tuple[CornerUse, ...]:
    """The corners of a task path, as the audit keeps them."""
    return tuple(
        CornerUse(c.after_step, c.kind, c.reason, c.asked, float(c.asked_value), float(c.used), c.region)
        for c in path.corners
    )
