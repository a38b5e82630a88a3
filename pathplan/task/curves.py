"""Curves of a task: smooth tool paths through points of a CSV file, and taught joint paths.

    [curves.NAME]       a tool path, followed by a step of motion = "curve" with along = "NAME"
        points          CSV file beside this one: columns x, y, z (mm, or "x_m") and, if it says how the tool stands
                        there, roll, pitch, yaw (deg, about the fixed axes x, y, z) or qw, qx, qy, qz
        frame           the frame the points are in, default "base"
        orientation     "tangent": x of the tool along the path, z against `normal`; for points without orientation
        normal          a direction in the frame, default [0, 0, 1]: out of the surface that the tool works on
        rpy or quat     one orientation all along, for points without their own
        tolerance       how far the smooth curve may pass its points, "0.2 mm"; default 0: through all of them
        angle_tolerance the same for orientations, "0.5 deg"
        offset          { frame, tool, rpy or quat }: moves every pose, as in a step

    [taught.NAME]       a joint path, followed by motion = "taught" with along = "NAME"
        points          CSV file with a column for each joint, by its name (deg or mm, or "elbow_rad")
        tolerance       how far it may pass its points: an angle, or a length (of an arm's length of it a rad);
                        default 0: through all of them (`JointPath.through`)

"NAME.start" and "NAME.end" are poses (of a taught path joint positions) that steps can go to. Points that repeat the
one before are left out, and said.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.quaternions import angles_between, quaternion_product, quaternions, rotations, steady_quaternions
from pathplan.task.csvfile import PointList, read_points
from pathplan.task.joints import check_positions, outside
from pathplan.task.model import Curve, Taught
from pathplan.task.smoothing import interpolated, knots_of, pieces_of, smoothed
from pathplan.tomlfile import Table, read_only, rotation_from_rpy
from pathplan.units import DIMENSIONS, format_quantity, joint_dimension, toml_text

if TYPE_CHECKING:
    from scipy.interpolate import BSpline

__all__ = ["curve_through", "read_curve", "read_offset", "read_taught"]

Array = NDArray[np.float64]
XYZ = ("x", "y", "z")
ANGLE_COLUMNS = ("roll", "pitch", "yaw")
QUATERNION_COLUMNS = ("qw", "qx", "qy", "qz")
_SAME = 1e-9  # arm lengths or rad between poses, and rad or m between joint vectors, that count as one
_UNIT = 1e-3  # off length 1 that a quaternion of a file may be: rounding to a few digits
_BETWEEN = 4  # places between two points at which the curve is compared with the line between them
_WIDEST = np.deg2rad(150.0)  # between the orientations of neighbours: further, which way is anybody's guess
_STEEP = 1e-3  # sine of the angle between path and normal from which on the tangent gives no orientation
_DENSER, _DENSE_POINTS = 4, 2000  # places a point at which an offset along the tool is taken, of curves this short
_TOLERANCES = {"length": (1e-7, 0.1), "angle": (1e-6, 0.5)}  # m, rad


def read_curve(name: str, table: Table, folder: Path, arm: Arm, frame: str) -> tuple[Curve, PointList]:
    """A [curves.NAME] table and the file it names. `frame`: the name under its key "frame", checked."""
    table.has("frame")
    dimensions = {**dict.fromkeys(XYZ, "length"), **dict.fromkeys(ANGLE_COLUMNS, "angle")}
    dimensions |= dict.fromkeys(QUATERNION_COLUMNS, "number")
    points = _points(table, folder, dimensions, XYZ)
    position = points.array(XYZ)
    tolerance = _tolerance(table, "tolerance", "length")
    turning = _tolerance(table, "angle_tolerance", "angle")
    given = _given_orientations(points)
    tangent = table.choice("orientation", ("tangent",), None) is not None
    fixed = table.rotation()
    for key in ("orientation", "rpy", "quat"):
        if given is not None and table.has(key):
            raise table.error(key, f"{points.file} has orientations of its own, expected none here")
    if tangent and fixed is not None:
        raise table.error("orientation", "given together with rpy or quat, expected one of them")
    if given is None and not tangent and fixed is None:
        complaint = f'{points.file} has no orientations, expected orientation = "tangent", rpy or quat'
        raise InputError.at(table.where, complaint)
    normal = _normal(table, tangent=tangent)
    if given is None and table.has("angle_tolerance"):
        raise table.error("angle_tolerance", f"{points.file} has no orientations to smooth")
    offset = read_offset(table, "offset")
    rotation = given
    if rotation is None:
        rotation = np.tile(np.eye(3) if fixed is None else fixed, (len(position), 1, 1))
    keep = _moved(position, rotation, arm.length)
    if keep.sum() < 2:
        raise InputError.at(points.file, "all its points are the same, expected a path")
    _check_neighbours(points, rotation, keep)
    splines = _splines(
        position[keep], rotation[keep], arm.length, tolerance, turning, normal if tangent else None, table.where
    )
    note = _note(name, splines, points, position[keep], keep, tolerance, turning)
    curve = _as_curve(splines if offset is None else _offset(splines, offset))
    return replace(curve, name=name, frame=frame, note=note), points


def read_taught(name: str, table: Table, folder: Path, arm: Arm) -> tuple[Taught, PointList]:
    """A [taught.NAME] table and the file it names; positions inside the limits of the joints."""
    dimensions = {joint.name: joint_dimension(joint.kind, "position") for joint in arm.joints}
    points = _points(table, folder, dimensions, arm.joint_names)
    joints = points.array(arm.joint_names)
    tolerance = _joint_tolerance(table, arm)
    _check_limits(points, joints, arm)
    keep = np.append(True, np.abs(np.diff(joints, axis=0)).max(axis=1) > _SAME)
    if keep.sum() < 2:
        raise InputError.at(points.file, "all its points are the same, expected a path")
    left_out = len(keep) - int(keep.sum())
    note = f'taught path "{name}": {_repeats(left_out)} left out' if left_out else ""
    return Taught(name, read_only(joints[keep]), tolerance, note), points


def read_offset(table: Table, key: str) -> tuple[Array, Array] | None:
    """The transforms (4, 4) that stand before and behind a pose in its frame; None where the key is missing."""
    offset = table.table(key, None)
    if offset is None:
        return None
    in_frame, in_tool = np.eye(4), np.eye(4)
    in_frame[:3, 3] = offset.position("frame", np.zeros(3))
    in_tool[:3, 3] = offset.position("tool", np.zeros(3))
    rotation = offset.rotation()
    if rotation is not None:
        in_tool[:3, :3] = rotation
    if not offset.data:
        raise table.error(key, 'expected "frame", "tool" or "rpy", got an empty table')
    offset.finish()
    return in_frame, in_tool


def curve_through(
    position: Array,
    rotation: Array,
    arm_length: float,
    *,
    tolerance: float = 0.0,
    angle_tolerance: float = 0.0,
    normal: Array | None = None,
    where: str = "curve",
) -> Curve:
    """The smooth curve through poses: positions (m, 3) in m and rotations (m, 3, 3), neighbours apart; m >= 2.

    It passes every position within `tolerance` (m) and every orientation within `angle_tolerance` (rad), as smoothly
    as that allows. With `normal` (3,) the orientations follow from the path: x along it, z against the normal. Raises
    InputError, with `where` in front, if the path runs along the normal.
    """
    return _as_curve(_splines(position, rotation, arm_length, tolerance, angle_tolerance, normal, where))


@dataclass(frozen=True, eq=False)
class _Splines:
    """A curve while it is made: position over the arm's length, and quaternions, by one parameter."""

    u: Array  # (m,) of the points
    along: BSpline
    turning: BSpline
    arm_length: float
    deviation: float = 0.0
    turned: float = 0.0


def _splines(
    position: Array,
    rotation: Array,
    arm_length: float,
    tolerance: float,
    angle_tolerance: float,
    normal: Array | None,
    where: str,
) -> _Splines:
    unit, scaled = steady_quaternions(rotation), position / arm_length
    steps = np.linalg.norm(np.diff(scaled, axis=0), axis=1)
    u = np.concatenate([[0.0], np.cumsum(np.hypot(steps, angles_between(unit[:-1], unit[1:])))])

    def off(values: Array) -> Array:
        return np.asarray(np.linalg.norm(values - scaled, axis=1) * arm_length / tolerance)

    def turned(values: Array) -> Array:
        return angles_between(values, unit) / angle_tolerance

    along = smoothed(u, scaled, off) if tolerance > 0.0 else interpolated(u, scaled)
    if normal is not None:
        unit = steady_quaternions(_along_tangents(along(u, 1), normal, where))
    turning = smoothed(u, unit, turned) if angle_tolerance > 0.0 else interpolated(u, unit)
    deviation = float(np.linalg.norm(along(u) - scaled, axis=1).max() * arm_length)
    return _Splines(u, along, turning, arm_length, deviation, float(angles_between(turning(u), unit).max()))


def _as_curve(splines: _Splines) -> Curve:
    breaks = np.union1d(knots_of(splines.along), knots_of(splines.turning))
    return Curve(
        name="",
        frame="base",
        breaks=read_only(breaks),
        position=read_only(pieces_of(splines.along, breaks) * splines.arm_length),
        quaternion=read_only(pieces_of(splines.turning, breaks)),
        deviation=splines.deviation,
        turned=splines.turned,
    )


def _offset(splines: _Splines, offset: tuple[Array, Array]) -> _Splines:
    """Every pose moved: in_frame @ pose @ in_tool."""
    from scipy.interpolate import BSpline

    in_frame, in_tool = offset
    turning = splines.turning
    turned = BSpline(turning.t, quaternion_product(turning.c, quaternions(in_tool[None, :3, :3])), turning.k)
    along = splines.along
    moved = BSpline(along.t, along.c + in_frame[:3, 3] / splines.arm_length, along.k)
    if np.any(in_tool[:3, 3] != 0.0):
        # What the orientation adds is no spline of the same knots: it is interpolated between points this dense.
        dense = 1 if len(splines.u) > _DENSE_POINTS else _DENSER
        share = np.arange(dense) / dense
        u = np.append((splines.u[:-1, None] + np.diff(splines.u)[:, None] * share).ravel(), splines.u[-1])
        arm = rotations(turning(u)) @ in_tool[:3, 3]
        moved = interpolated(u, moved(u) + arm / splines.arm_length)
    return replace(splines, along=moved, turning=turned)


def _along_tangents(tangent: Array, normal: Array, where: str) -> Array:
    """(m, 3, 3) rotations with x along tangents (m, 3) as far as that is square to the normal, z against the normal."""
    size = np.linalg.norm(tangent, axis=1, keepdims=True)
    still = np.flatnonzero(size[:, 0] <= 1e-6 * size.max())
    if len(still):
        raise InputError(f"{where}: the path turns back on itself at point {still[0] + 1}")
    x = tangent - (tangent @ normal)[:, None] * normal
    across = np.linalg.norm(x, axis=1, keepdims=True)
    steep = np.flatnonzero(across[:, 0] <= _STEEP * size[:, 0])
    if len(steep):
        complaint = f"normal: the path runs along it at point {steep[0] + 1}, so the tangent gives no orientation"
        raise InputError(f"{where}.{complaint}")
    x /= across
    y = np.cross(-normal, x)
    turns = np.flatnonzero(np.einsum("ij,ij->i", x[1:], x[:-1]) < np.cos(_WIDEST))
    if len(turns):
        raise InputError(f"{where}: the path turns back on itself at point {turns[0] + 2}")
    return np.stack([x, y, np.broadcast_to(-normal, x.shape)], axis=2)


def _points(table: Table, folder: Path, dimensions: Mapping[str, str], required: Sequence[str]) -> PointList:
    name = table.text("points")
    path = folder / name
    if not path.exists():
        raise table.error("points", f"no such file {toml_text(name)}")
    return read_points(path, dimensions, required, fewest=2)


def _given_orientations(points: PointList) -> Array | None:
    """(m, 3, 3) of the orientation columns; None without any."""
    found = [names for names in (ANGLE_COLUMNS, QUATERNION_COLUMNS) if any(name in points.columns for name in names)]
    if not found:
        return None
    if len(found) > 1:
        raise InputError.at(points.file, "has roll, pitch, yaw and a quaternion, expected one of the two")
    names = found[0]
    for name in names:
        if name not in points.columns:
            raise InputError.at(points.file, f"column {toml_text(name)}: missing, there is {', '.join(points.columns)}")
    values = points.array(names)
    if names == ANGLE_COLUMNS:
        return np.array([rotation_from_rpy(row) for row in values])
    length = np.linalg.norm(values, axis=1)
    off = np.flatnonzero(~(np.abs(length - 1.0) <= _UNIT))
    if len(off):
        complaint = f"expected a quaternion qw, qx, qy, qz of length 1, got length {length[off[0]]:.6g}"
        raise InputError.at(points.file, points.row(int(off[0])), complaint)
    return rotations(values)


def _normal(table: Table, *, tangent: bool) -> Array:
    if table.has("normal") and not tangent:
        raise table.error("normal", 'goes with orientation = "tangent", which is missing')
    normal = table.vector("normal", 3, "number", np.array([0.0, 0.0, 1.0]))
    largest = float(np.abs(normal).max())
    if largest == 0.0:
        raise table.error("normal", "expected a direction, got [0, 0, 0]")
    normal = normal / largest  # scaled first: its square can't overflow
    return np.asarray(normal / np.linalg.norm(normal))


def _tolerance(table: Table, key: str, dimension: str) -> float:
    value: float = table.quantity(key, dimension, 0.0)
    low, high = _TOLERANCES[dimension]
    if table.has(key) and not low <= value <= high:
        limits = [format_quantity(limit, dimension) for limit in (low, high)]
        got = toml_text(table.data[key])
        raise table.error(key, f"expected a tolerance from {limits[0]} to {limits[1]}, got {got}")
    return value


def _joint_tolerance(table: Table, arm: Arm) -> float:
    """In rad, or arm lengths."""
    value = table.data.get("tolerance")
    units = tuple(DIMENSIONS["length"].units)
    if isinstance(value, str) and value.strip().lower().endswith(units) and not value.strip().endswith("deg"):
        return _tolerance(table, "tolerance", "length") / arm.length
    return _tolerance(table, "tolerance", "angle")


def _check_limits(points: PointList, joints: Array, arm: Arm) -> None:
    bad = np.flatnonzero(outside(joints, arm).any(axis=1))
    if len(bad):
        check_positions(joints[bad[0]], arm, f"{points.file}: {points.row(int(bad[0]))}")


def _moved(position: Array, rotation: Array, arm_length: float) -> NDArray[np.bool_]:
    """(m,) which points are not where the one before is."""
    step = np.linalg.norm(np.diff(position, axis=0), axis=1) / arm_length
    turn = angles_between(*(quaternions(part) for part in (rotation[:-1], rotation[1:])))
    return np.append(True, np.hypot(step, turn) > _SAME)


def _check_neighbours(points: PointList, rotation: Array, keep: NDArray[np.bool_]) -> None:
    rows = np.flatnonzero(keep)
    unit = steady_quaternions(rotation[keep])
    angle = angles_between(unit[:-1], unit[1:])
    wide = np.flatnonzero(angle > _WIDEST)
    if len(wide):
        k = int(wide[0])
        most = format_quantity(_WIDEST, "angle")
        complaint = f"the tool turns by {format_quantity(float(angle[k]), 'angle')}, expected at most {most}"
        raise InputError.at(points.file, f"{points.row(int(rows[k]))} to {points.row(int(rows[k + 1]))}", complaint)


def _note(
    name: str,
    splines: _Splines,
    points: PointList,
    position: Array,
    keep: NDArray[np.bool_],
    tolerance: float,
    angle_tolerance: float,
) -> str:
    """How the curve passes its points, in one sentence."""
    rows, u = np.flatnonzero(keep), splines.u
    share = np.arange(1, _BETWEEN + 1) / (_BETWEEN + 1)
    between = splines.along((u[:-1, None] + np.diff(u)[:, None] * share).ravel()) * splines.arm_length
    off_line = _off_lines(between.reshape(len(u) - 1, _BETWEEN, 3), position)
    worst = int(np.argmax(off_line))
    line = f"{format_quantity(float(off_line[worst]), 'length', 3)} off the straight line behind "
    line += f"row {rows[worst] + 1}"
    if tolerance > 0.0:
        off = np.linalg.norm(splines.along(u) * splines.arm_length - position, axis=1)
        k = int(np.argmax(off))
        text = f"is at most {format_quantity(float(off[k]), 'length', 3)} off its {len(rows)} points (row {rows[k] + 1}"
        text += f", tolerance {format_quantity(tolerance, 'length', 3)}), and between them {line}"
    else:
        text = f"passes through its {len(rows)} points, and between them {line} at most"
    if angle_tolerance > 0.0:
        text += f"; its orientations are at most {format_quantity(splines.turned, 'angle', 3)} off"
    if len(rows) < len(keep):
        text += f"; {_repeats(len(keep) - len(rows))} left out"
    return f'curve "{name}" {text}'


def _repeats(count: int) -> str:
    return f"{count} point{'s' * (count != 1)} that repeat{'s' * (count == 1)} the one before"


def _off_lines(between: Array, position: Array) -> Array:
    """(m - 1,) largest distance of places (m - 1, k, 3) from the straight lines between neighbouring points."""
    start, chord = position[:-1, None], np.diff(position, axis=0)[:, None]
    size = np.maximum((chord * chord).sum(axis=2), 1e-300)
    share = np.clip(((between - start) * chord).sum(axis=2) / size, 0.0, 1.0)
    return np.asarray(np.linalg.norm(between - start - share[:, :, None] * chord, axis=2).max(axis=1))
