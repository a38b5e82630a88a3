"""Singularities by kind: which one a configuration is near, and how far off.

With a spherical wrist behind three turning joints there are three kinds (Paul & Stevenson 1983): axes 4 and 6 in line
(wrist), the arm stretched or folded (elbow), the wrist centre on axis 1 (shoulder). A SCARA arm has an elbow. Of any
other structure only the smallest singular value of the Jacobian tells.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.geometry import meeting_points
from pathplan.arm.kinematics import smallest_singular_value, spatial_axes
from pathplan.path.joint import Array
from pathplan.units import format_quantity

__all__ = ["Nearness", "distance_words", "nearness", "singular_kind", "singular_words", "singularity"]

_RANK = 1e-6
_REACHED = 0.1  # part of the angle that a shift must at most leave


@dataclass(frozen=True)
class Nearness:
    """How near a configuration is to a singularity of its nearest kind.

    `kind` is "wrist", "elbow" or "shoulder", "singular" where the structure has no such names; `value` the smallest
    singular value; `angle` (rad) between axes 4 and 6, or of the elbow from stretched or folded; `distance` (m) that
    the tool centre point would have to shift, the tool not turning, for the singularity to be met. None: not known.
    """

    kind: str
    value: float
    angle: float | None = None
    distance: float | None = None


def singular_kind(arm: Arm, q: Array) -> str:
    """Which singularity is nearest at q (n,): "wrist", "elbow" or "shoulder"; "singular" where the
    structure has no such names.
    """
    return nearness(arm, q).kind


def nearness(arm: Arm, q: Array) -> Nearness:
    """The nearest kind of singularity at q (n,), and how near."""
    value = float(smallest_singular_value(arm, q[None])[0])
    if arm.structure == "scara":
        return _scara(arm, q, value)
    if arm.structure != "spherical wrist" or "elbow" not in arm.solver.labels[0]:
        return Nearness("singular", value)
    columns, _ = spatial_axes(arm, q[None])
    axes = columns[:, 3:, 0]
    points = np.cross(axes, columns[:, :3, 0])  # the point of each axis nearest to the base origin
    centre, apart = meeting_points(points[3:], axes[3:])  # of a measured arm they meet nearly
    if not np.isfinite(apart):  # the wrist axes are in line
        return Nearness("wrist", value, 0.0, 0.0)
    upper, lower = _across(axes[1], points[2] - points[1]), _across(axes[1], centre - points[2])
    bent = _sine(upper, lower)
    radius = abs(float(np.cross(axes[0], centre - points[0]) @ axes[1]))
    sine = {"wrist": _sine(axes[3], axes[5]), "elbow": bent, "shoulder": radius / arm.length}
    kind = min(sine, key=lambda kind: sine[kind])
    if kind == "shoulder":
        return Nearness(kind, value, None, radius)
    if kind == "elbow":
        return Nearness(kind, value, float(np.arcsin(bent)), _reach_left(upper, lower))
    angle = float(np.arcsin(sine[kind]))
    moved = np.cross(axes[:3], centre - points[:3]).T  # (3, 3) of the wrist centre by joints 1 to 3
    return Nearness(kind, value, angle, _shift(axes, moved))


def _shift(axes: Array, moved: Array) -> float | None:
    """The shortest shift (m) of the wrist centre that brings axis 4 in line with axis 6, which keeps its direction;
    linear, so good for small angles. None where no shift does.
    """
    forearm = axes[3]
    missing = np.copysign(1.0, forearm @ axes[5]) * axes[5] - forearm
    missing -= forearm * float(forearm @ missing)
    turned = np.cross(axes[:3], forearm).T @ np.linalg.pinv(moved, rcond=_RANK)  # of the forearm by the shift
    shift = np.linalg.pinv(turned, rcond=_RANK) @ missing
    left = np.linalg.norm(turned @ shift - missing)
    return None if left > _REACHED * np.linalg.norm(missing) else float(np.linalg.norm(shift))


def _scara(arm: Arm, q: Array, value: float) -> Nearness:
    columns, _ = spatial_axes(arm, q[None])
    turning = [i for i in arm.chain.path if arm.joints[i].kind == "revolute"]
    axes = columns[turning, 3:, 0]
    points = np.cross(axes, columns[turning, :3, 0])
    upper, lower = (_across(axes[0], points[k + 1] - points[k]) for k in (0, 1))
    return Nearness("elbow", value, float(np.arcsin(_sine(upper, lower))), _reach_left(upper, lower))


def _across(axis: Array, vector: Array) -> Array:
    """The part of a vector square to a unit axis."""
    return np.asarray(vector - axis * float(axis @ vector))


def _sine(one: Array, other: Array) -> float:
    """Of the angle between two directions."""
    size = float(np.linalg.norm(one) * np.linalg.norm(other))
    return min(float(np.linalg.norm(np.cross(one, other))) / max(size, 1e-12), 1.0)


def _reach_left(upper: Array, lower: Array) -> float:
    """m that an arm of two links has left until it is stretched or folded."""
    reach, links = float(np.linalg.norm(upper + lower)), [float(np.linalg.norm(link)) for link in (upper, lower)]
    return max(0.0, min(links[0] + links[1] - reach, reach - abs(links[0] - links[1])))


def singular_words(kind: str) -> str:
    """A kind with its article: "a wrist singularity"."""
    if kind == "singular":
        return "a singularity"
    return f"{'an' if kind == 'elbow' else 'a'} {kind} singularity"


def distance_words(near: Nearness) -> str:
    """How far off, as people read it: "1 mm (0.1 deg)"; "" where only the singular value tells."""
    parts = [] if near.distance is None else [format_quantity(near.distance, "length", 2)]
    parts += [] if near.angle is None else [format_quantity(near.angle, "angle", 2)]
    return f"{parts[0]} ({parts[1]})" if len(parts) == 2 else "".join(parts)


def singularity(arm: Arm, q: Array, held: tuple[int, ...] = ()) -> tuple[str, dict[str, Any]]:
    """A singularity at or near q (n,) in words, and its kind and smallest singular value; of the joints not `held`."""
    near = nearness(arm, q)
    value = float(smallest_singular_value(arm, q[None], held)[0]) if held else near.value
    text = f"{singular_words(near.kind)} (smallest singular value {value:.2g})"
    return text, {"kind": near.kind, "value": value}
