"""The scene as a matplotlib picture in space."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.errors import InputError
from pathplan.report.gather import Picture
from pathplan.report.scene import Scene, arm_points, scene_of
from pathplan.report.still import AZIMUTH, ELEVATION
from pathplan.report.text import printable
from pathplan.report.thinning import Array

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["draw_space"]

INK, MUTED, ARM, WAY, BLEND = "#16191d", "#565c64", "#8b949c", "#0072B2", "#E69F00"
MOST_GHOSTS = 4


def draw_space(figure: Figure, picture: Picture, time: float | None) -> None:
    """Put the arm at a time (s; None: the start), its path, blends and frames onto a figure, in mm.

    Raises InputError for a time that is not one of the motion.
    """
    scene = scene_of(picture)
    start, end = float(picture.kept_time[0]), float(picture.kept_time[-1])
    if time is not None and not start <= time <= end:
        raise InputError(f"time: expected {start:g} to {end:g} s, got {time:g}")
    at = int(np.abs(picture.kept_time - (start if time is None else time)).argmin())
    axes: Any = figure.add_subplot(projection="3d", proj_type="persp", computed_zorder=False)
    axes.view_init(elev=ELEVATION, azim=AZIMUTH)
    for points in scene.programmed:
        _line(axes, points, color=MUTED, ls=(0, (4, 3)), lw=0.8)
    for mark in picture.marks[:MOST_GHOSTS]:
        row = int(np.searchsorted(picture.kept_rows, mark.row))
        _line(axes, _standing(picture, scene, row), color=ARM, lw=1, alpha=0.5)
    _line(axes, scene.path, color=WAY, lw=1.6, label="tool path", gid="path")
    for k, blend in enumerate(scene.blends):
        _line(axes, blend.points, color=BLEND, lw=3.5, label="corners" if k == 0 else None)
    body = _standing(picture, scene, at)
    _line(axes, body, color=INK, lw=6, solid_capstyle="round", solid_joinstyle="round")
    _line(axes, body, color="#d5d9dc", lw=4, solid_capstyle="round", solid_joinstyle="round")
    axes.plot(*(1e3 * body[1:-2].T), "o", ms=7, color=ARM, mec=INK, label="joints", gid="joints")
    for step, point in scene.ends[:40]:
        axes.plot(*(1e3 * point[:, None]), "o", ms=3, color=INK)
        axes.text(*(1e3 * point), f" {step + 1}", fontsize=8, fontweight="bold")
    for frame in [frame for frame in scene.frames if frame.joint < 0][:12]:
        _frame(axes, frame.pose, 0.09 * scene.radius, frame.name)
    low, high = 1e3 * (scene.centre - 0.72 * scene.radius), 1e3 * (scene.centre + 0.72 * scene.radius)
    axes.set(xlim=(low[0], high[0]), ylim=(low[1], high[1]), zlim=(low[2], high[2]))
    axes.set(xlabel="x, mm", ylabel="y, mm", zlabel="z, mm")
    axes.set_box_aspect((1, 1, 1))
    axes.tick_params(labelsize=7)
    axes.legend(loc="upper left", fontsize=8, frameon=False)


def _standing(picture: Picture, scene: Scene, index: int) -> Array:
    """Points of the arm at one of the kept rows, from the base to the tool."""
    index = min(index, len(picture.kept_rows) - 1)
    q = np.array([picture.kept["position", i][index] for i in range(picture.arm.n)])
    step = int(picture.kept_step[index])
    tool = scene.step_tool[step] if step < len(scene.step_tool) else 0
    return arm_points(picture.arm, q, scene.tools[tool])[1]


def _line(axes: Any, points: Array, **how: Any) -> None:
    axes.plot(*(1e3 * points.T), **how)


def _frame(axes: Any, pose: Array, size: float, name: str) -> None:
    origin = pose[:3, 3]
    for k, letter in enumerate("xyz"):
        tip = origin + size * pose[:3, k]
        _line(axes, np.vstack([origin, tip]), color=MUTED, lw=1.2)
        axes.text(*(1e3 * (origin + 1.25 * (tip - origin))), letter, fontsize=7, style="italic", color=MUTED)
    axes.text(*(1e3 * origin), f"  {printable(name)}", fontsize=8, color=MUTED, va="top", parse_math=False)
