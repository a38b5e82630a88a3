"""A single straight line, judged without a task file: how it is planned, and what it uses of every limit on its way."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.kinematics import smallest_singular_value
from pathplan.auditing.shares import Array, position_shares, row_kinds, rows_of, shares_of
from pathplan.errors import InputError, PathplanError, UnreachableError
from pathplan.task.model import Step, Target, Task
from pathplan.task.places import check_positions
from pathplan.tomlfile import FARTHEST, listed, nearest, rotation_from_rpy
from pathplan.units import joint_dimension, parse_quantity, toml_text

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["LinePart", "Worst", "line_parts", "place_from", "plan_line"]

PARTS = 10
INSTANTS = 200  # of every part
MOST_STARTS = 64  # answers of the inverse that are tried
_FORMS = 'expected a pose "x y z rx ry rz", joint values "joints 0 90 ..." or the name of a position'


@dataclass(frozen=True)
class Worst:
    """The joint, or row that limits a sum of joints, that uses most of a limit, and the share (1 at the limit)."""

    name: str
    kind: str
    share: float
    margin: float | None = None  # of a position: rad or m to the nearer limit


@dataclass(frozen=True)
class LinePart:
    """What a part of a line, from share to share of its length, uses at most. `torque` None without link data."""

    share_from: float
    share_to: float
    time_from: float  # s
    time_to: float
    position: Worst | None
    velocity: Worst | None
    acceleration: Worst | None
    jerk: Worst | None
    torque: Worst | None
    tool_speed: float  # m/s
    singular_value: float  # smallest of the scaled Jacobian, 0 where singular


def place_from(text: str, arm: Arm, option: str) -> Target:
    """A pose in the base frame (x y z mm, rx ry rz deg about the fixed axes x, then y, then z), or joints, or a name.

    Raises InputError naming the option.
    """
    words = text.replace(",", " ").split()
    if words and words[0].rstrip(":") == "joints":
        if len(words) != arm.n + 1:
            expected = f"expected {arm.n} joint values after joints"
            raise InputError.at(option, f"{expected}, got {len(words) - 1}")
        kinds = (joint_dimension(joint.kind, "position") for joint in arm.joints)
        values = [_number(word, kind, option) for word, kind in zip(words[1:], kinds, strict=True)]
        joints = np.array(values)
        check_positions(joints, arm, option)
        return Target(joints=joints, frame_from_tool=arm.forward(joints))
    if text.strip() in arm.positions:
        joints = arm.positions[text.strip()]
        return Target(joints=joints, frame_from_tool=arm.forward(joints))
    if not words or not re.match(r"[+-]?[\d.]", words[0]):
        hint = nearest(text.strip(), arm.positions) or f", positions are {listed(list(arm.positions))}"
        raise InputError.at(option, f"{_FORMS}, got {toml_text(text)}{hint}")
    if len(words) != 6:
        raise InputError.at(option, f"{_FORMS}, got {len(words)} numbers")
    pose = np.eye(4)
    pose[:3, 3] = [_number(word, "length", option) for word in words[:3]]
    if np.abs(pose[:3, 3]).max() > FARTHEST:
        raise InputError.at(option, f"expected coordinates within {FARTHEST:g} m, got {toml_text(text)}")
    pose[:3, :3] = rotation_from_rpy(np.array([_number(word, "angle", option) for word in words[3:]]))
    return Target(frame_from_tool=pose)


def _number(word: str, dimension: str, option: str) -> float:
    try:
        value: float | str = float(word)
    except ValueError:
        value = word
    return parse_quantity(value, dimension, option)


def plan_line(
    arm: Arm,
    start: Target,
    goal: Target,
    *,
    speed: float | None = None,
    turning_speed: float | None = None,
    cycle: float = 0.004,
    pace: float = 1.0,
) -> tuple[Plan, int, int]:
    """The plan of a straight line of the tool, how many starts there are, and how many of them can follow it.

    `speed` (m/s) and `turning_speed` (rad/s) cap the tool. A start given as a pose leaves the branch open: of all that
    can follow the line the fastest is taken. Raises
    UnreachableError with the reason of the branch that gets furthest, and what `pathplan.plan` raises.
    """
    import pathplan

    starts = [start.joints] if start.joints is not None else list(arm.inverse(start.frame_from_tool))[:MOST_STARTS]
    best: Plan | None = None
    refusal: PathplanError | None = None
    able, best_key = 0, (0.0, 0.0)
    for joints in starts:
        try:
            task = _line_task(arm, joints, goal, cycle)
            plan = pathplan.plan(replace(task, speed=speed, turning_speed=turning_speed, pace=pace))
        except UnreachableError as error:
            if refusal is None or error.data.get("share", 0.0) > refusal.data.get("share", 0.0):
                refusal = error
            continue
        able += 1
        # turn equivalents of one branch take the same time: of these the one that keeps clear of the position limits
        key = (round(plan.motion_time, 6), -_least_margin(plan))
        if best is None or key < best_key:
            best, best_key = plan, key
    if best is None:
        assert refusal is not None  # `inverse` gives at least one start or raises
        raise refusal
    return best, len(starts), able


def _least_margin(plan: Plan) -> float:
    """The least distance from a position limit, as a part of half its range: 1 in the middle, 0 at a limit."""
    arm = plan.arm
    return 1.0 - float(position_shares(rows_of(plan.table.position, arm.limits.matrix), arm.limits.position)[0].max())


def _line_task(arm: Arm, start: Array, goal: Target, cycle: float) -> Task:
    payload = arm.payload.name if arm.payload is not None else None
    step = Step(index=0, motion="line", where="line", target=goal, tool=arm.tool.name, payload=payload)
    return Task("line", None, arm, np.array(start), (step,), cycle, sources=dict(arm.sources))


def line_parts(plan: Plan, parts: int = PARTS) -> tuple[LinePart, ...]:
    """The line of a plan in equal parts of its length, each with the most it uses of every limit."""
    from pathplan.timeline import evaluate, passing_times

    (stretch,), (timing,) = plan.path.stretches, plan.timings
    arm, length = stretch.arm, stretch.path.length
    shares = np.linspace(0.0, 1.0, parts * INSTANTS + 1)
    times = passing_times(timing, shares * length)
    part = next(part for part in plan.parts if part.stretch is not None)
    rows = evaluate(part, times, arm.n)
    columns = {"velocity": rows.velocity, "acceleration": rows.acceleration, "jerk": rows.jerk}
    torque = arm.torque(rows.position, rows.velocity, rows.acceleration) if arm.links is not None else None
    speed = np.linalg.norm(np.einsum("nij,nj->ni", arm.jacobian(rows.position)[:, :3], rows.velocity), axis=1)
    singular = smallest_singular_value(arm, rows.position)
    found = []
    for k in range(parts):
        at = slice(k * INSTANTS, (k + 1) * INSTANTS + 1)
        worst = {name: _worst(arm, name, values[at]) for name, values in columns.items()}
        found.append(
            LinePart(
                float(shares[at][0]),
                float(shares[at][-1]),
                float(times[at][0]),
                float(times[at][-1]),
                _worst_position(arm, rows.position[at]),
                torque=None if torque is None else _worst_torque(arm, torque[at]),
                tool_speed=float(speed[at].max()),
                singular_value=float(singular[at].min()),
                **worst,
            )
        )
    return tuple(found)


def _worst(arm: Arm, quantity: str, values: Array) -> Worst | None:
    return _largest(arm, shares_of(rows_of(values, arm.limits.matrix), getattr(arm.limits, quantity)))


def _worst_torque(arm: Arm, values: Array) -> Worst | None:
    return _largest(arm, shares_of(values, arm.limits.torque[: arm.n]))


def _worst_position(arm: Arm, values: Array) -> Worst | None:
    shares, margins = position_shares(rows_of(values, arm.limits.matrix), arm.limits.position)
    worst = _largest(arm, shares)
    if worst is None:
        return None
    return replace(worst, margin=float(margins[:, arm.limits.names.index(worst.name)].min()))


def _largest(arm: Arm, shares: Array) -> Worst | None:
    row = int(np.argmax(shares.max(axis=0)))
    share = float(shares[:, row].max())
    return Worst(arm.limits.names[row], row_kinds(arm)[row], share) if np.isfinite(share) else None
