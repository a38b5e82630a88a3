"""What of an arm's data looks wrong though it can be planned with: one line each, with what to look at."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm.model import Array, Joint, Link
from pathplan.units import Quantity, format_quantity, joint_dimension

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["plausibility"]

# What industrial drives do, with room on both sides (rad or m, s).
SPEEDS = {"revolute": (0.02, 60.0), "prismatic": (2e-3, 12.0)}
RISE = (1e-3, 20.0)  # s from rest to full speed, and from rest to full acceleration
REVOLUTIONS = 20.0  # turns either way; more is endless, or a slip of units
LONGEST = 20.0  # m of travel
ALIKE = 4  # joints with the same speed and the same torque: copied?


def plausibility(arm: Arm, more: Sequence[str] = ()) -> tuple[str, ...]:
    """Lines about limits, links and the load at home, after those of whoever read the file."""
    lines = list(more)
    for joint in arm.joints:
        lines += [f"{joint.name}: {text}" for text in _joint(joint)]
    lines += _copied(arm.joints)
    if arm.links is not None:
        for joint, link in zip(arm.joints, arm.links, strict=True):
            lines += [f"{joint.name}: {text}" for text in _link(link, arm.length)]
        lines += _too_heavy(arm)
    return tuple(lines)


def _joint(joint: Joint) -> Iterator[str]:
    slowest, fastest = SPEEDS[joint.kind]
    if np.isfinite(joint.velocity) and not slowest <= joint.velocity <= fastest:
        amount = format_quantity(joint.velocity, joint_dimension(joint.kind, "velocity"))
        yield f"velocity {amount} is {'much' if joint.velocity > fastest else 'little'} for a {joint.kind} joint"
    pairs: tuple[tuple[Quantity, Quantity], ...] = (("acceleration", "velocity"), ("jerk", "acceleration"))
    for quantity, below in pairs:
        if not np.isfinite([getattr(joint, quantity), getattr(joint, below)]).all():
            continue
        time = getattr(joint, below) / getattr(joint, quantity)
        if not RISE[0] <= time <= RISE[1]:
            amount = format_quantity(getattr(joint, quantity), joint_dimension(joint.kind, quantity))
            yield f"{quantity} {amount} would take {format_quantity(time, 'time')} to full {below}"
    low, high = joint.position
    if not np.isfinite([low, high]).all():
        if np.isfinite(low) or np.isfinite(high):
            yield "is limited on one side only"
    elif joint.kind == "revolute" and max(-low, high) > 2 * np.pi * REVOLUTIONS:
        yield f"position limits allow {(high - low) / (2 * np.pi):.0f} turns: unlimited?"
    elif joint.kind == "prismatic" and high - low > LONGEST:
        yield f"travels {format_quantity(high - low, 'length')}: a slip of units?"
    dimension = joint_dimension(joint.kind, "position")
    if high - low < (np.deg2rad(0.5) if joint.kind == "revolute" else 1e-3):
        yield f"may move by {format_quantity(high - low, dimension)} only"


def _copied(joints: Sequence[Joint]) -> Iterator[str]:
    """Data sheets name a limit for each joint; the same for all was copied from one, or is a stand-in."""
    revolute = [joint for joint in joints if joint.kind == "revolute"]
    if len(revolute) < ALIKE:
        return
    quantities: tuple[Quantity, ...] = ("velocity", "torque")
    for quantity in quantities:
        values = {getattr(joint, quantity) for joint in revolute}
        value = values.pop()
        if not values and value is not None and np.isfinite(value):
            amount = format_quantity(value, joint_dimension("revolute", quantity))
            yield f"every revolute joint has {quantity} {amount}: copied from one?"


def _link(link: Link, length: float) -> Iterator[str]:
    if link.mass == 0.0:
        yield "moves a link of mass 0"
        return
    if float(np.linalg.norm(link.com)) > 4.0 * length:
        yield f"its link's centre of mass lies {format_quantity(float(np.linalg.norm(link.com)), 'length')} away"
    moments = np.linalg.eigvalsh(link.inertia)
    if moments[0] < -1e-9 or moments[0] + moments[1] < moments[2] * (1 - 1e-6) - 1e-9:
        principal = ", ".join(f"{moment:.3g}" for moment in moments)
        yield f"no body has its link's principal moments, {principal} kg m^2: one is above the sum of the others"
    elif moments[2] > link.mass * (4.0 * length) ** 2:
        yield f"inertia {moments[2]:.3g} kg m^2 is that of a link larger than the arm"


def _too_heavy(arm: Arm) -> Iterator[str]:
    """Joints that can't hold the arm at home, standing still with neither tool nor payload."""
    held = holding_torque(arm, arm.positions["home"])
    for joint, value in zip(arm.joints, held.tolist(), strict=True):
        if joint.torque is not None and abs(value) > joint.torque:
            dimension = joint_dimension(joint.kind, "torque")
            need, has = format_quantity(abs(value), dimension), format_quantity(joint.torque, dimension)
            yield f"{joint.name}: holding the arm at home takes {need}, its torque limit is {has}"


def holding_torque(arm: Arm, q: Array) -> Array:
    """(n,) joint torques that hold the links of an arm still at q (n,), by the moments of their weights."""
    assert arm.links is not None
    frames = [arm.base_from_joint(name, q) for name in arm.joint_names]
    torque = np.zeros(arm.n)
    for k, link in enumerate(arm.links):
        centre = frames[k][:3, :3] @ link.com + frames[k][:3, 3]
        i = k
        while i >= 0:
            axis = frames[i][:3, :3] @ arm.axes[i]
            weight = -link.mass * arm.gravity  # what has to be held against
            if arm.joints[i].kind == "revolute":
                torque[i] += float(axis @ np.cross(centre - frames[i][:3, 3], weight))
            else:
                torque[i] += float(axis @ weight)
            i = arm.parents[i]
    return torque
