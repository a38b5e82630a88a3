"""Rigid bodies: moved into other frames, and joined to one (parallel-axis theorem)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pathplan.arm.model import Array

__all__ = ["Body", "combined", "moved"]


@dataclass(frozen=True)
class Body:
    """Mass (kg), centre of mass (3,) (m) and inertia (3, 3) about it (kg m^2), in some frame."""

    mass: float
    com: Array
    inertia: Array


def moved(body: Body, pose: Array) -> Body:
    """A body given in a frame, in the frame in which that stands at `pose` (4, 4)."""
    rotation = pose[:3, :3]
    return Body(body.mass, rotation @ body.com + pose[:3, 3], rotation @ body.inertia @ rotation.T)


def combined(bodies: Sequence[Body]) -> Body:
    """One body of several in the same frame. Without any mass its centre is the origin."""
    mass = sum(body.mass for body in bodies)
    if mass == 0.0:
        return Body(0.0, np.zeros(3), sum((body.inertia for body in bodies), np.zeros((3, 3))))
    com = sum((body.mass * body.com for body in bodies), np.zeros(3)) / mass
    inertia = np.zeros((3, 3))
    for body in bodies:
        off = body.com - com
        inertia += body.inertia + body.mass * (float(off @ off) * np.eye(3) - np.outer(off, off))
    return Body(mass, com, inertia)
