"""What a page carries for its own code to draw and read: rows, limits, arm and path, as JSON values in screen units."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from pathplan.auditing.words import dimension_of
from pathplan.report.axis import LEFT, RIGHT, WIDTH, TimeAxis
from pathplan.report.gather import Picture
from pathplan.report.packed import Column, decimals_for, pack
from pathplan.report.scene import Scene
from pathplan.report.still import floor_step
from pathplan.report.text import printable
from pathplan.report.thinning import Array
from pathplan.units import DIMENSIONS, to_screen

__all__ = ["page_data"]

MOST_FRAMES = 40
TOOL = {
    "tool x": (1e3, 3),
    "tool y": (1e3, 3),
    "tool z": (1e3, 3),
    "tool speed": (1e3, 2),
    "tool turning speed": (math.degrees(1.0), 3),
    "deviation": (1e6, 3),
    "turn": (1e6, 3),
}  # factor from SI to mm, mm/s, deg/s, um and urad; decimals


def page_data(picture: Picture, scene: Scene) -> dict[str, Any]:
    """All of it. Numbers are finite or None; names are made printable, and must be put into a page as text only."""
    time_decimals, axis = _time_decimals(picture), TimeAxis.of(picture)
    keys = ["row", "time", "step", "pace"]
    columns = [
        Column(picture.kept_rows),
        Column(picture.kept_time, time_decimals),
        Column(picture.kept_step),
        Column(picture.kept_pace),
    ]
    for (quantity, row), values in picture.kept.items():
        if row < 0:
            factor, decimals = TOOL[quantity]
            keys.append(quantity)
        elif quantity == "torque left":
            factor, decimals = 1.0, 5
            keys.append(f"{quantity} {row}")
        else:
            factor = _factor(picture.kinds[row], quantity)
            decimals = decimals_for(_scale(picture, quantity, row, values) * factor)
            keys.append(f"{quantity} {row}")
        columns.append(Column(values * factor, decimals))
    return {
        "packed": pack(columns),
        "columns": keys,
        "rows": picture.rows,
        "time_decimals": time_decimals,
        "quantities": list(picture.quantities),
        "joints": [_joint(picture, r) for r in range(len(picture.names))],
        "axis": {"start": axis.start, "end": axis.end, "left": LEFT, "right": RIGHT, "width": WIDTH},
        "labels": [list(label) for label in picture.labels],
        "steps": [printable(picture.step_label(step)) for step in range(int(picture.kept_step.max()) + 1)],
        "scene": _scene(scene),
    }


def _time_decimals(picture: Picture) -> int:
    """Decimals that show every time of a steady cycle, at most 6."""
    cycle = picture.cycle
    if cycle is None:
        return 6
    return next((d for d in range(6) if abs(cycle * 10**d - round(cycle * 10**d)) < 1e-9 * cycle * 10**d), 6)


def _factor(kind: str, quantity: str) -> float:
    dimension = dimension_of(kind, quantity)
    return to_screen(1.0, dimension) if dimension else 1.0


def _scale(picture: Picture, quantity: str, row: int, values: Array) -> float:
    """The larger limit, or the largest value where there is none."""
    limits = np.abs(picture.limits(quantity)[row])
    finite = limits[np.isfinite(limits)]
    known = np.abs(values[np.isfinite(values)])
    return float(finite.max()) if len(finite) else float(known.max(initial=0.0))


def _joint(picture: Picture, row: int) -> dict[str, Any]:
    units, limits = {}, {}
    for quantity in picture.quantities:
        dimension = dimension_of(picture.kinds[row], quantity)
        units[quantity] = DIMENSIONS[dimension].screen if dimension else "SI"
        factor = _factor(picture.kinds[row], quantity)
        pair = [float(value) * factor for value in picture.limits(quantity)[row]]
        limits[quantity] = [value if math.isfinite(value) else None for value in pair]
    return {
        "name": printable(picture.names[row]),
        "units": units,
        "limits": limits,
        "one": _factor(picture.kinds[row], "position"),
    }


def _scene(scene: Scene) -> dict[str, Any]:
    arm = scene.arm
    travel = []
    for joint in arm.joints:
        known = joint.kind == "prismatic" and all(map(math.isfinite, joint.position))
        travel.append(list(joint.position) if known else None)
    return {
        "parents": list(arm.parents),
        "fixed": [_matrix(fixed) for fixed in arm.parent_from_joint],
        "axes": arm.axes.tolist(),
        "revolute": arm.revolute.tolist(),
        "travel": travel,
        "tip": arm.tip,
        "flange": _matrix(arm.tip_from_flange),
        "tools": [_matrix(tool) for tool in scene.tools],
        "step_tool": list(scene.step_tool),
        "path": _points(scene.path),
        "programmed": [_points(points) for points in scene.programmed],
        "blends": [_points(blend.points) for blend in scene.blends],
        "ends": [[step, np.round(point, 4).tolist()] for step, point in scene.ends],
        "frames": [
            {"name": printable(frame.name), "pose": _matrix(frame.pose), "joint": frame.joint}
            for frame in scene.frames[:MOST_FRAMES]
        ],
        "centre": np.round(scene.centre, 4).tolist(),
        "radius": scene.radius,
        "floor": floor_step(scene.radius),
    }


def _points(points: Array) -> list[list[float]]:
    """To a tenth of a millimetre: finer than can be seen."""
    found: list[list[float]] = np.round(points, 4).tolist()
    return found


def _matrix(matrix: Array) -> list[float]:
    found: list[float] = np.round(matrix, 9).ravel().tolist()
    return found
