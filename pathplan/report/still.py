"""The scene as a still picture in SVG: for print, for pages without scripts, and for notebooks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pathplan.report.markup import esc, number, tag
from pathplan.report.scene import Scene, arm_links, arm_points
from pathplan.report.thinning import Array

__all__ = ["AZIMUTH", "ELEVATION", "View", "arm_still"]

AZIMUTH, ELEVATION = -58.0, 24.0  # deg, where the page's own view starts too
WIDTH, HEIGHT = 720.0, 540.0
FILLED = 1.1  # of the picture by the sphere about the scene, whose rim is mostly empty
DISTANCE = 5.0  # of the eye from the centre, in radii
WIDEST = 0.042  # of the picture: the first link
MOST_FRAMES = 12
MOST_NUMBERS = 40


@dataclass(frozen=True)
class View:
    """Perspective onto the plane of the picture, from an azimuth and elevation (deg) about the scene's centre."""

    scene: Scene
    azimuth: float = AZIMUTH
    elevation: float = ELEVATION
    width: float = WIDTH
    height: float = HEIGHT

    def __call__(self, points: Array) -> Array:
        """(K, 3) points in the base frame as (K, 3): x and y on the picture, and how near (larger is nearer)."""
        a, e = np.deg2rad([self.azimuth, self.elevation])
        right = np.array([-np.sin(a), np.cos(a), 0.0])
        toward = np.array([np.cos(a) * np.cos(e), np.sin(a) * np.cos(e), np.sin(e)])
        up = np.cross(toward, right)
        local = (np.atleast_2d(points) - self.scene.centre) @ np.column_stack([right, up, toward])
        local = local / self.scene.radius
        scale = 0.5 * min(self.width, self.height) * FILLED * np.sqrt(DISTANCE**2 - 1) / (DISTANCE - local[:, 2])
        return np.column_stack(
            [self.width / 2 + scale * local[:, 0], self.height / 2 - scale * local[:, 1], local[:, 2]]
        )


def arm_still(scene: Scene, name: str, title: str, *, q: Array | None = None, ghosts: Array | None = None) -> str:
    """The arm at q (n,), default its first, faint at `ghosts` (G, n), with path, blends, frames and steps' ends."""
    view = View(scene)
    body = [_floor(scene, view)]
    body += [tag("path", d=_polyline(view(points)), class_="asked") for points in scene.programmed]
    body += [tag("path", d=_polyline(view(frame)), class_="shadow") for frame in [_on_floor(scene.path)]]
    for ghost in ghosts if ghosts is not None else ():
        points = arm_points(scene.arm, ghost, scene.tools[0])[1]
        body.append(tag("path", d=_polyline(view(points)), class_="ghost"))
    body += _arm(scene, view, scene.shown[0] if q is None else q)
    body.append(tag("path", d=_polyline(view(scene.path)), class_="way"))
    body += [tag("path", d=_polyline(view(blend.points)), class_="blend") for blend in scene.blends]
    body += _frames(scene, view)
    body += _ends(scene, view)
    head = tag("title", esc(title), id=f"{name}-title")
    return tag(
        "svg",
        head + "".join(body),
        class_="still",
        id=name,
        viewbox=f"0 0 {number(WIDTH)} {number(HEIGHT)}",
        role="img",
        aria_labelledby=f"{name}-title",
    )


def _polyline(points: Array) -> str:
    pairs = [f"{number(x)} {number(y)}" for x, y in points[:, :2].tolist()]
    return "M" + "L".join(pairs)


def _on_floor(points: Array) -> Array:
    return points * [1.0, 1.0, 0.0]


def floor_step(radius: float) -> float:
    """m between the lines of the floor: 1, 2 or 5 times a power of ten, about a fifth of the radius."""
    raw = radius / 2.5
    power = 10.0 ** np.floor(np.log10(raw))
    return float(next(power * k for k in (1, 2, 5, 10) if power * k >= raw * 0.75))


def _floor(scene: Scene, view: View) -> str:
    """Lines on the plane z = 0 of the base frame."""
    step, reach = floor_step(scene.radius), scene.radius * 1.05
    x0, y0 = np.floor((scene.centre[:2] - reach) / step) * step
    count = int(np.ceil(2 * reach / step)) + 1
    lines = []
    for k in range(count + 1):
        for ends in (
            [[x0 + k * step, y0, 0], [x0 + k * step, y0 + count * step, 0]],
            [[x0, y0 + k * step, 0], [x0 + count * step, y0 + k * step, 0]],
        ):
            lines.append(_polyline(view(np.array(ends))))
    return tag("path", d="".join(lines), class_="floor")


def _arm(scene: Scene, view: View, q: Array) -> list[str]:
    """Links as thick strokes with an edge, far ones first, and a disc at each joint."""
    arm = scene.arm
    frames, points = arm_points(arm, q, scene.tools[0])
    widest = WIDEST * min(view.width, view.height)
    drawn = []
    for start, end, width in arm_links(arm, frames, points):
        seen = view(np.vstack([start, end]))
        if np.hypot(*(seen[0, :2] - seen[1, :2])) < 0.5:
            continue
        ends = _polyline(seen)
        both = tag("path", d=ends, class_="edge-of-link", stroke_width=width * widest + 2.5)
        drawn.append((float(seen[:, 2].mean()), both + tag("path", d=ends, class_="link", stroke_width=width * widest)))
    for i, (x, y, near) in enumerate(view(points[1 : arm.n + 1]).tolist()):
        size = 0.62 * widest * (1.0 - 0.65 * i / (arm.n + 1)) + 1.5
        drawn.append((near + 0.02, tag("circle", cx=x, cy=y, r=size, class_="joint")))
    return [text for _, text in sorted(drawn, key=lambda item: item[0])]


def _frames(scene: Scene, view: View) -> list[str]:
    parts = []
    for frame in [frame for frame in scene.frames if frame.joint < 0][:MOST_FRAMES]:
        size = 0.09 * scene.radius
        origin = frame.pose[:3, 3]
        tips = origin + size * frame.pose[:3, :3].T
        seen = view(np.vstack([origin, tips]))
        for k, letter in enumerate("xyz"):
            parts.append(tag("path", d=_polyline(seen[[0, k + 1]]), class_="triad"))
            x, y = seen[0, :2] + 1.25 * (seen[k + 1, :2] - seen[0, :2])
            parts.append(tag("text", letter, x=float(x), y=float(y) + 3, class_="letter"))
        parts.append(tag("text", esc(frame.name), x=float(seen[0, 0]) + 5, y=float(seen[0, 1]) + 14, class_="frame"))
    return parts


def _ends(scene: Scene, view: View) -> list[str]:
    parts = []
    for step, point in scene.ends[:MOST_NUMBERS]:
        x, y = view(point[None])[0, :2].tolist()
        parts.append(tag("circle", cx=x, cy=y, r=2.6, class_="end"))
        parts.append(tag("text", str(step + 1), x=x + 5, y=y - 4, class_="number"))
    return parts
