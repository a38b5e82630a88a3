"""Joint torque along a path, split by how it depends on the speed along the path."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from pathplan.arm.arm import Arm
from pathplan.arm.model import Array
from pathplan.errors import InputError

__all__ = ["PathTorque", "path_torque"]


class PathTorque(NamedTuple):
    """torque = inertia s'' + speed s'^2 + viscous s' + coulomb + gravity, each (N, n), for s' > 0."""

    inertia: Array  # M(q) q', rotors included
    speed: Array  # M(q) q'' + what centrifugal and Coriolis forces make of q'
    viscous: Array
    coulomb: Array  # by the sign of q'; zero where q' is zero
    gravity: Array


def path_torque(arm: Arm, q: Array, q1: Array, q2: Array) -> PathTorque:
    """The parts of the joint torque along a path q(s) with q' and q'' (N, n), with tool and payload.

    Newton-Euler is linear in accelerations, so its parts come from three calls (Bobrow, Dubowsky & Gibson 1985; Shin &
    McKay 1985 for the form along a path). Raises InputError for an arm without link masses.
    """
    if arm.links is None:
        raise InputError(f"{arm.name}: no dynamics: the arm file gives no link masses")
    still = np.zeros_like(q)
    gravity = arm.torque(q, still, still)
    inertia = arm.torque(q, still, q1) - gravity
    viscous = q1 * np.array([link.viscous for link in arm.links])
    forward, backward = np.array([link.coulomb for link in arm.links]).T
    coulomb = np.where(q1 > 0, forward, np.where(q1 < 0, -backward, 0.0))
    speed = arm.torque(q, q1, q2) - gravity - viscous - coulomb
    return PathTorque(inertia, speed, viscous, coulomb, gravity)
