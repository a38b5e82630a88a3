"""Lines, arcs and reorientations with exact derivatives: the pieces a Cartesian path is programmed of.

Every such motion is uniform in its own path parameter s (dimensionless, from 0 to `length`): a point
moving straight at a constant rate, or round a circle at a constant rate, while the tool turns about a
fixed axis at a constant rate:

    p(s) = base + velocity s + cos(rate s) x + sin(rate s) y          R(s) = exp(turn s) R(0)

with `length` = sqrt((path length / arm length)^2 + (rotation angle)^2), so a pure reorientation counts by
its angle. A step is therefore a row of numbers, and all steps of a task are evaluated in one go. A curve through points
is a row too: where its own frame stands, and which curve it is (`pathplan.path.curve`).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from pathplan.path.bends import Bend
from pathplan.path.curve import CurveSize, curve_derivatives
from pathplan.path.joint import Array, JointPath
from pathplan.path.rotations import cross, exponential, rotate, rotation_vector, turn_about
from pathplan.task.model import Curve

__all__ = [
    "AMBIGUOUS",
    "NO_MOTION",
    "DegenerateArc",
    "HalfTurn",
    "Jets",
    "Segments",
    "along_curve",
    "arc_about",
    "arc_through",
    "line",
    "pointing",
    "poses_of",
    "spatial_twists",
    "superpose",
]

Index = NDArray[np.intp]
Mask = NDArray[np.bool_]

AMBIGUOUS = 1e-6  # rad: nearer to a half turn than this, no rotation is the shortest
NO_MOTION = 1e-9  # path parameter: shorter motions are none (a nanometre on a metre)
_ON_CHORD = 1e-6  # sine of the angle at the via point below which three points make no circle
# m that a start may lie off the plane of its circle, and is then carried along: rounding of a file.
_IN_PLANE = 1e-5


class DegenerateArc(ValueError):
    """Three points, or a centre and an axis, that make no circle; the message says why and what was
    expected.
    """


class HalfTurn(ValueError):
    """Start and target orientation lie half a turn apart: no shortest rotation; the message says what
    helps.
    """


@dataclass(frozen=True, eq=False)
class Jets:
    """Tool motions by path parameter: value and derivatives to third order, N at a time.

    position (4, N, 3): p, p', p'', p''' in m; rotation (N, 3, 3) base_from_tool; turning (3, N, 3): w, w',
    w'' in rad, the turning rate in the base frame, R' = [w] R.
    """

    position: Array
    rotation: Array
    turning: Array

    def take(self, rows: Index) -> Jets:
        """Some of them."""
        return Jets(self.position[:, rows], self.rotation[rows], self.turning[:, rows])


@dataclass(frozen=True, eq=False)
class Segments:
    """K motions as arrays; see the module's formula. All in the base frame, SI, over s in [0, length].

    Of a curve, `base` and `rotation` are where its own frame stands, and `curve` is its place in `curves`; of a uniform
    motion `curve` is -1. Where `rolls` has one, the tool is turned about its own z axis by that much on the way; where
    `bends` has one, it leaves the orientation that is programmed.
    """

    base: Array  # (K, 3)
    velocity: Array  # (K, 3)
    x: Array  # (K, 3) centre to start of an arc; zero for a line
    y: Array  # (K, 3)
    rate: Array  # (K,)
    turn: Array  # (K, 3)
    rotation: Array  # (K, 3, 3) at s = 0
    length: Array  # (K,) of the path parameter
    path_length: Array  # (K,) m
    angle: Array  # (K,) rad the tool turns
    speed: Array  # (K,) m, the most that the tool centre point moves per path parameter
    turning: Array  # (K,) rad, the most that it turns
    curve: Index  # (K,)
    curves: tuple[Curve, ...] = ()
    rolls: tuple[JointPath | None, ...] = ()  # (K,) rad over [0, length], or () for none at all
    bends: tuple[Bend | None, ...] = ()  # (K,), or () for none at all

    def __len__(self) -> int:
        return len(self.length)

    def take(self, k: Index) -> Segments:
        """The rows k as a batch of their own."""
        arrays: dict[str, Any] = {name: getattr(self, name)[k] for name in _ARRAYS}
        rolls = tuple(self.rolls[i] for i in k) if self.rolls else ()
        bends = tuple(self.bends[i] for i in k) if self.bends else ()
        return Segments(**arrays, curves=self.curves, rolls=rolls, bends=bends)

    def bent(self, k: Index, bends: Sequence[Bend]) -> Segments:
        """The same with segments k (V,) once more behind the last, bent."""
        every = self.take(np.concatenate([np.arange(len(self)), k]))
        return replace(every, bends=(None,) * len(self) + tuple(bends))

    def unbent(self) -> Segments:
        """The same as programmed."""
        return replace(self, bends=()) if self.bends else self

    @classmethod
    def join(cls, parts: Sequence[Segments]) -> Segments:
        """One batch of all rows; an empty batch of none."""
        if not parts:
            shapes = {"x": (3,), "y": (3,), "base": (3,), "velocity": (3,), "turn": (3,), "rotation": (3, 3)}
            none: dict[str, Any] = {name: np.zeros((0, *shapes.get(name, ()))) for name in _ARRAYS}
            return cls(**{**none, "curve": np.zeros(0, dtype=np.intp)})
        place = {id(curve): curve for part in parts for curve in part.curves}
        number = {key: i for i, key in enumerate(place)}
        renamed = []
        for part in parts:
            own = np.array([number[id(curve)] for curve in part.curves] + [-1], dtype=np.intp)
            renamed.append(own[part.curve])  # -1 takes the last
        arrays: dict[str, Any] = {name: np.concatenate([getattr(part, name) for part in parts]) for name in _ARRAYS}
        return cls(**{**arrays, "curve": np.concatenate(renamed)}, curves=tuple(place.values()))

    def over(self, length: float) -> Segments:
        """The same single motion, or none at all, over another length of the path parameter; no curve."""
        own = float(self.length[0])
        share = own / length if own > NO_MOTION else 0.0
        return replace(
            self,
            velocity=self.velocity * share,
            rate=self.rate * share,
            turn=self.turn * share,
            length=np.array([length]),
            speed=self.speed * share,
            turning=self.turning * share,
        )

    def poses(self, k: Index, s: Array) -> Array:
        """(N, 4, 4) base_from_tool at s (N,) of segments k (N,)."""
        angle = self.rate[k] * s
        position = self.base[k] + self.velocity[k] * s[:, None]
        position += np.cos(angle)[:, None] * self.x[k] + np.sin(angle)[:, None] * self.y[k]
        rotation = exponential(self.turn[k] * s[:, None]) @ self.rotation[k]
        for curve, rows in self.on_curves(k):
            points, turned, _ = curve_derivatives(curve, s[rows], 0)
            base = self.rotation[k[rows]]
            position[rows] = self.base[k[rows]] + rotate(base, points[0])
            rotation[rows] = base @ turned
        for law, rows in _laws(self.rolls, k):
            rotation[rows] = rotation[rows] @ turn_about(_Z[None], law(s[rows])[:, 0])
        for bend, rows in _laws(self.bends, k):
            rotation[rows] = rotation[rows] @ bend.rotation(s[rows])
        return poses_of(position, rotation)

    def jets(self, k: Index, s: Array, rates: Array | None = None) -> Jets:
        """Exact derivatives at s (N,) of segments k (N,).

        `rates` (3, N): s', s'', s''' where s itself is a function of another parameter; derivatives are
        then by that one (chain rule). Without: s' = 1.
        """
        rate = self.rate[k][:, None]
        angle = rate[:, 0] * s
        cos, sin = np.cos(angle)[:, None], np.sin(angle)[:, None]
        x, y, velocity, turn = self.x[k], self.y[k], self.velocity[k], self.turn[k]
        along, across = cos * x + sin * y, cos * y - sin * x
        position = np.empty((4, len(s), 3))
        position[0] = self.base[k] + velocity * s[:, None] + along
        position[1:] = velocity + rate * across, -(rate**2) * along, -(rate**3) * across
        turning = np.zeros((3, len(s), 3))
        turning[0] = turn
        rotation = exponential(turn * s[:, None]) @ self.rotation[k]
        for curve, rows in self.on_curves(k):
            points, turned, turns = curve_derivatives(curve, s[rows], 3)
            base = self.rotation[k[rows]]
            position[:, rows] = [rotate(base, point) for point in points]
            position[0, rows] += self.base[k[rows]]
            turning[:, rows] = [rotate(base, w) for w in turns]
            rotation[rows] = base @ turned
        for law, rows in _laws(self.rolls, k):
            axis = rotation[rows, :, 2]
            turning[:, rows] = _rolling(turning[:, rows], axis, law.derivatives(s[rows]))
            rotation[rows] = rotation[rows] @ turn_about(_Z[None], law(s[rows])[:, 0])
        for bend, rows in _laws(self.bends, k):
            aside = bend.derivatives(s[rows])
            turning[:, rows] = _turned_along(turning[:, rows], rotation[rows], aside[1:])
            rotation[rows] = rotation[rows] @ exponential(aside[0])
        if rates is not None:
            position[1:], turning = _chained(position[1:], rates), _chained(turning, rates)
        return Jets(position, rotation, turning)

    def on_curves(self, k: Index) -> Iterator[tuple[Curve, Index]]:
        """Each curve among segments k (N,), -1 for none, and the rows that are on it."""
        if not self.curves:
            return
        number = np.where(k >= 0, self.curve[k], -1)
        for i in np.unique(number[number >= 0]):
            yield self.curves[i], np.flatnonzero(number == i)


_Law = TypeVar("_Law", Bend, JointPath)


def _laws(laws: Sequence[_Law | None], k: Index) -> Iterator[tuple[_Law, Index]]:
    """Each of the laws (K,) among segments k (N,), -1 for none, and the rows it is for."""
    if not laws:
        return
    for i in np.unique(k[k >= 0]):
        law = laws[i]
        if law is not None:
            yield law, np.flatnonzero(k == i)


_ARRAYS = tuple(f.name for f in fields(Segments))[:-3]
_Z = np.array([0.0, 0.0, 1.0])


def _rolling(turning: Array, axis: Array, roll: Sequence[Array]) -> Array:
    """Turning rate and its derivatives (3, N, 3) of a tool that also turns about its axis (N, 3) by roll (4 of (N, 1)):
    w + r' z, differentiated with z' = w x z.
    """
    w, w1, w2 = turning
    _, r1, r2, r3 = roll
    z1 = cross(w, axis)
    z2 = cross(w1, axis) + cross(w, z1)
    return np.stack([w + r1 * axis, w1 + r2 * axis + r1 * z1, w2 + r3 * axis + 2.0 * r2 * z1 + r1 * z2])


def _chained(values: Array, rates: Array) -> Array:
    """First, second and third derivative (3, N, d) by s as those by another parameter, s' s'' s''' (3, N).

    Also a rate and its two derivatives: what is differentiated is the same.
    """
    s1, s2, s3 = rates[:, :, None]
    first, second, third = values
    return np.stack([first * s1, second * s1**2 + first * s2, third * s1**3 + 3.0 * second * s1 * s2 + first * s3])


def poses_of(position: Array, rotation: Array) -> Array:
    """(N, 4, 4) transforms of positions (N, 3) and rotations (N, 3, 3)."""
    poses = np.zeros((len(position), 4, 4))
    poses[:, :3, :3] = rotation
    poses[:, :3, 3] = position
    poses[:, 3, 3] = 1.0
    return poses


def spatial_twists(jets: Jets) -> Array:
    """(N, 3, 6) spatial twist (v_o, w) and its two derivatives: v_o = p' - w x p, differentiated twice
    more.
    """
    p, p1, p2, p3 = jets.position
    w, w1, w2 = jets.turning
    twists = np.empty((len(p), 3, 6))
    twists[:, 0, :3] = p1 - cross(w, p)
    twists[:, 1, :3] = p2 - cross(w1, p) - cross(w, p1)
    twists[:, 2, :3] = p3 - cross(w2, p) - 2.0 * cross(w1, p1) - cross(w, p2)
    twists[:, 0, 3:], twists[:, 1, 3:], twists[:, 2, 3:] = w, w1, w2
    return twists


def superpose(first: Jets, second: Jets, corner: Array) -> Jets:
    """Both motions at once about a common pose, corner (N, 4, 4): p = p1 + p2 - p_c, R = R1 R_c^T R2."""
    position = first.position + second.position
    position[0] -= corner[:, :3, 3]
    lead = first.rotation @ corner[:, :3, :3].transpose(0, 2, 1)
    return Jets(position, lead @ second.rotation, _turned_along(first.turning, lead, second.turning))


def _turned_along(first: Array, lead: Array, second: Array) -> Array:
    """Turning rate and its derivatives (3, N, 3) of what turns by `second` within what turns by `first`, whose rotation
    is `lead` (N, 3, 3).
    """
    a, a1, a2 = first
    b, b1, b2 = (rotate(lead, w) for w in second)  # as seen from the base, turned along with the first
    carried = cross(a, b)
    return np.stack(
        [
            a + b,
            a1 + b1 + carried,
            a2 + b2 + cross(a1, b) + cross(a, carried) + 2.0 * cross(a, b1),
        ]
    )


def line(start: Array, end: Array, arm_length: float) -> Segments:
    """Straight from pose `start` to pose `end` (4, 4), the tool on the shortest rotation; K = 1.

    Also a pure reorientation. Raises HalfTurn where the orientations lie half a turn apart.
    """
    turn = _shortest(start, end)
    chord = end[:3, 3] - start[:3, 3]
    distance = float(np.linalg.norm(chord))
    return _segment(start, start[:3, 3], chord, np.zeros(3), np.zeros(3), 0.0, turn, distance, arm_length)


def pointing(start: Array, end: Array) -> tuple[Array, float]:
    """Pose `end` turned about its own z axis so that the tool axis goes the shortest way from `start` (4, 4), and the
    angle (rad) by which it has to be turned on about it to be `end`.

    Raises HalfTurn where the axes are opposite.
    """
    one, two = start[:3, 2], end[:3, 2]
    axis = np.cross(one, two)
    sine, cosine = float(np.linalg.norm(axis)), float(one @ two)
    if np.arctan2(sine, cosine) > np.pi - AMBIGUOUS:
        raise HalfTurn("the tool axis would turn by 180 deg, which has no shortest way: give a pose between")
    vector = axis * (np.arctan2(sine, cosine) / sine if sine > 1e-12 else 1.0)
    turned = end.copy()
    turned[:3, :3] = exponential(vector[None])[0] @ start[:3, :3]
    between = turned[:3, :3].T @ end[:3, :3]
    return turned, float(np.arctan2(between[1, 0] - between[0, 1], between[0, 0] + between[1, 1]))


def arc_through(start: Array, via: Array, end: Array, arm_length: float) -> Segments:
    """Circular arc from pose `start` through point `via` (3,) to pose `end`, the tool on the shortest
    rotation; K = 1.

    Raises DegenerateArc for points that coincide or lie on one line, HalfTurn as `line` does.
    """
    a, b = start[:3, 3] - via, end[:3, 3] - via
    chord = end[:3, 3] - start[:3, 3]
    sizes = [float(np.linalg.norm(v)) for v in (a, b, chord)]
    names = ("via and start", "via and target", "start and target")
    for size, names_ in zip(sizes, names, strict=True):
        if size < NO_MOTION * arm_length:
            extra = "; a full circle is given by centre, axis and angle" if names_ == "start and target" else ""
            raise DegenerateArc(f"{names_} of the arc coincide{extra}")
    normal = np.cross(a, b)
    if np.linalg.norm(normal) < _ON_CHORD * sizes[0] * sizes[1]:
        raise DegenerateArc("start, via and target of the arc lie on one line, expected three points of a circle")
    turn = _shortest(start, end)
    # Circumcentre seen from via: (|a|^2 b - |b|^2 a) x (a x b) / (2 |a x b|^2).
    centre = via + np.cross(sizes[0] ** 2 * b - sizes[1] ** 2 * a, normal) / (2.0 * float(normal @ normal))
    axis = -normal / np.linalg.norm(normal)  # start -> via -> target turns positively about it
    x = start[:3, 3] - centre
    y = np.cross(axis, x)
    to_end = end[:3, 3] - centre
    angle = float(np.arctan2(to_end @ y, to_end @ x)) % (2.0 * np.pi)
    distance = float(np.linalg.norm(x)) * angle
    return _segment(start, centre, np.zeros(3), x, y, angle, turn, distance, arm_length)


def arc_about(start: Array, centre: Array, axis: Array, angle: float, arm_length: float, *, along: bool) -> Segments:
    """Arc from pose `start` about `axis` (3,) through `centre` (3,) by a signed angle, full circles and
    more; K = 1.

    `along`: the tool turns with the arc; else it keeps its orientation. Raises DegenerateArc.
    """
    size = float(np.linalg.norm(axis))
    if not size > 1e-12:
        raise DegenerateArc("axis of the arc is zero, expected a direction")
    axis = axis / size
    x = start[:3, 3] - centre
    off = float(axis @ x)
    if abs(off) > _IN_PLANE:
        raise DegenerateArc(
            f"start lies {abs(off) * 1e3:.4g} mm off the plane of the circle (through centre, square to axis)"
        )
    centre = centre + off * axis
    x = x - off * axis
    radius = float(np.linalg.norm(x))
    if radius < NO_MOTION * arm_length:
        raise DegenerateArc("centre of the arc is where it starts, expected a radius")
    turn = angle * axis if along else np.zeros(3)
    return _segment(start, centre, np.zeros(3), x, np.cross(axis, x), angle, turn, radius * abs(angle), arm_length)


def _shortest(start: Array, end: Array) -> Array:
    """Rotation vector in the base frame that turns the orientation of `start` into that of `end`."""
    turn = rotation_vector((end[:3, :3] @ start[:3, :3].T)[None])[0]
    if np.linalg.norm(turn) > np.pi - AMBIGUOUS:
        raise HalfTurn("the tool would turn by 180 deg, which has no shortest way: give a pose between")
    return np.asarray(turn)


def _segment(
    start: Array,
    base: Array,
    chord: Array,
    x: Array,
    y: Array,
    sweep: float,
    turn: Array,
    distance: float,
    arm_length: float,
) -> Segments:
    angle = float(np.linalg.norm(turn))
    length = float(np.hypot(distance / arm_length, angle))
    per = 1.0 / length if length > 0 else 0.0
    return Segments(
        base=base[None],
        velocity=chord[None] * per,
        x=x[None],
        y=y[None],
        rate=np.array([sweep * per]),
        turn=turn[None] * per,
        rotation=start[None, :3, :3],
        length=np.array([length]),
        # What rounding left of a motion is none, so that nobody measures a corner along it.
        path_length=np.array([distance if distance > NO_MOTION * arm_length else 0.0]),
        angle=np.array([angle if angle > NO_MOTION else 0.0]),
        speed=np.array([distance * per]),
        turning=np.array([angle * per]),
        curve=np.array([-1], dtype=np.intp),
    )


def along_curve(curve: Curve, base_from_curve: Array, size: CurveSize) -> Segments:
    """The curve whose frame stands at `base_from_curve` (4, 4); K = 1. `size` as `curve_size` gives it."""
    zero = np.zeros((1, 3))
    return Segments(
        base=base_from_curve[None, :3, 3],
        velocity=zero,
        x=zero,
        y=zero,
        rate=np.zeros(1),
        turn=zero,
        rotation=base_from_curve[None, :3, :3],
        length=curve.breaks[-1:].copy(),
        path_length=np.array([size.path_length]),
        angle=np.array([size.angle]),
        speed=np.array([size.speed]),
        turning=np.array([size.turning]),
        curve=np.zeros(1, dtype=np.intp),
        curves=(curve,),
    )
