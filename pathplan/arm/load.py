"""Arm files: TOML in mm, deg and seconds, checked key by key. All that can be in one:

    name = "lifter"
    title = "Swing arm with a lift"
    dh = "modified"                 # or "standard"; left out where the joints give origin and axis
    gravity = [0, 0, -9.80665]      # m/s^2 in the base frame; this is the default

    [base]                          # where the arm stands in the cell's base frame; default: in it
    xyz = [0, 0, 300]

    [mechanical_interface]          # from the last DH frame; with axes: in the arm's own base, all joints at zero
    xyz = [0, 0, -20]
    rpy = [180, 0, 0]               # fixed axes x, y, z; or quat = [w, x, y, z]

    [[joint]]
    name = "swing"
    kind = "revolute"               # or "prismatic"
    dh = { a = 0, alpha = 0, d = 400, theta = 0 }    # or: origin = [0, 0, 400] and axis = [0, 0, 1]
    position = [-130, 130]          # or "unlimited"
    velocity = 200                  # deg/s or mm/s, the same both ways; then per s^2 and per s^3
    acceleration = 900
    jerk = 9000
    # From here on where known. Link data: for every joint or for none.
    torque = 150                    # peak, N m or N
    continuous_torque = 60
    torque_corner_speed = 120       # deg/s or mm/s: above it the peak torque falls on a straight line
    torque_at_velocity = 90         # to this at the velocity limit
    gear_ratio = 80                 # of a prismatic joint: rad of the motor per m
    encoder_counts = 131072         # per turn of the motor
    mass = "8 kg"                   # of the link that the joint moves
    com = [150, 0, 0]
    inertia = [0.02, 0.09, 0.1, 0, 0, 0]             # xx yy zz xy xz yz about the com, kg m^2; or xx yy zz
    viscous_friction = 5            # joint side, N m s/rad or N s/m
    coulomb_friction = [6, 7]       # joint side, moving positive and negative; or one value for both
    rotor_inertia = 0.0001          # motor side, kg m^2

    [[joint]]
    name = "lift"
    kind = "prismatic"
    dh = { a = 500 }                # what is left out is 0
    position = [-200, 0]
    velocity = 500
    acceleration = 3000
    jerk = 40000
    mass = "2 kg"

    [tools.cup]                     # tool centre point in the mechanical interface
    xyz = [0, 0, 60]
    mass = "0.4 kg"                 # com and inertia in the tool frame
    com = [0, 0, -30]
    speed = 800                     # caps on the tool's motion while it is carried
    acceleration = 5000

    [payloads.tile]                 # com and inertia in the tool frame
    mass = "1.2 kg"
    com = [0, 0, 4]

    [positions]                     # named joint vectors in deg or mm; home is required
    home = [0, -100]

    [[limit]]                       # a coupled drive: limits on a sum of joint positions
    name = "screw nut"
    kind = "revolute"               # the row counts in deg (or "prismatic": mm); needed where its joints differ
    row = [1, 18]                   # deg of the row per deg or mm of each joint
    velocity = [-9000, 10000]       # any of position, velocity, acceleration, jerk; one value or low, high

Link data are stated in the DH frame of the row or, with axes, in a frame at the joint's origin that is parallel to
the arm's own base while all joints stand at zero.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from pathplan.arm.arm import GRAVITY, NOTHING, Arm, joint_rows, read_only
from pathplan.arm.chain import DHRow, chain_from_axes, chain_from_dh, moved_link
from pathplan.arm.model import Array, Joint, Kind, Limits, Link, Payload, Tool
from pathplan.errors import InputError
from pathplan.tomlfile import FARTHEST, Problems, Table, read_toml
from pathplan.units import DIMENSIONS, format_quantity, joint_dimension, parse_quantity, toml_text

__all__ = ["load_arm"]

MOST_JOINTS = 32
MOST_TURNS = 20_000  # every answer of the inverse comes in all its turn equivalents
SMALLEST, LARGEST = (
    1e-6,
    1e9,
)  # SI: limits above zero beyond these are slips, and would spoil what comes after
HEAVIEST = 1e6  # kg, and kg m^2
LINK_KEYS = ("mass", "com", "inertia", "viscous_friction", "coulomb_friction", "rotor_inertia")


def load_arm(file: str | Path) -> Arm:
    """Read an arm file (TOML, see the head of this module); the arm carries no tool and no payload.

    Raises:
        InputError: missing file, directory, not TOML, an unknown or missing key, a wrong unit, limits with
        low
            above high or not above zero, a quaternion not of length 1, a negative mass, an inertia that no
            body has. Several problems are gathered: the first is the message, all are in `problems`.
    """
    path = Path(file)
    data, digest = read_toml(path)
    problems = Problems()
    top = Table(data, path.name, problems=problems)
    head: dict[str, Any] = {"file": path, "sources": {path.name: digest}}
    with problems.gather():
        head |= {"name": top.text("name"), "title": top.text("title", "")}
    with problems.gather():
        head["gravity"] = _gravity(top)
    with problems.gather():
        base, interface = _pose(top, "base"), _pose(top, "mechanical_interface")
    with problems.gather():
        convention = top.choice("dh", ("standard", "modified"), None)
    rows: list[_JointRow] = []
    with problems.gather():
        for table in _joint_tables(top):
            with problems.gather():
                rows.append(_joint_row(table, has_dh=top.has("dh")))
    head["tools"] = _named(top, "tools", _tool, problems)
    head["payloads"] = _named(top, "payloads", _payload, problems)
    problems.check()

    joints = tuple(row.joint for row in rows)
    with problems.gather():
        _check_joints(top, joints)
    with problems.gather():
        links = _links(top, rows)
    with problems.gather():
        head["positions"] = _positions(top, joints, problems)
    with problems.gather():
        head["limits"] = _limits(top, joints, problems)
    top.finish()
    problems.check()
    return _assembled(joints, rows, links, convention, base, interface, head)


def _assembled(
    joints: tuple[Joint, ...],
    rows: Sequence[_JointRow],
    links: list[Link] | None,
    convention: Literal["standard", "modified"] | None,
    base: Array,
    interface: Array,
    head: dict[str, Any],
) -> Arm:
    """The arm of what was read; `head` are the fields of `Arm` that are finished."""
    if convention is None:
        origins, axes = [row.origin for row in rows], [row.axis for row in rows]
        fixed, unit_axes, tip_from_flange = chain_from_axes(origins, axes, interface)
    else:
        dh_rows = [row.dh for row in rows if row.dh is not None]
        fixed, unit_axes, tip_from_last, joint_from_link = chain_from_dh(dh_rows, convention)
        tip_from_flange = tip_from_last @ interface
        if links is not None:
            links = [moved_link(link, frame) for link, frame in zip(links, joint_from_link, strict=True)]
    fixed[0] = base @ fixed[0]
    return Arm(
        joints=joints,
        parent_from_joint=fixed,
        axes=unit_axes,
        tip_from_flange=tip_from_flange,
        links=None if links is None else tuple(links),
        **head,
    )


def _named(top: Table, key: str, read: Callable[[str, Table], Any], problems: Problems) -> dict[str, Any]:
    """[tools.NAME] or [payloads.NAME] tables by name."""
    found: dict[str, Any] = {}
    with problems.gather():
        for name, table in top.named_tables(key).items():
            with problems.gather():
                if name == NOTHING:
                    raise InputError.at(table.where, f'"{NOTHING}" means that nothing is carried, expected another name')
                found[name] = read(name, table)
    return found


def _gravity(top: Table) -> Array:
    gravity: Array = top.vector("gravity", 3, "linear_acceleration", np.array(GRAVITY))
    if np.abs(gravity).max() > 1e3:
        raise top.error("gravity", f"expected at most 1000 m/s^2, got {toml_text(top.data['gravity'])}")
    return gravity


@dataclass(frozen=True)
class _JointRow:
    """One [[joint]] table as read."""

    table: Table
    joint: Joint
    dh: DHRow | None
    origin: Array
    axis: Array
    link: Link | None  # as stated: in the DH frame of the row
    link_keys: tuple[str, ...]  # those of LINK_KEYS that are there


def _joint_tables(top: Table) -> list[Table]:
    if not top.has("joint"):
        top.take("joint")  # raises, with the key that may be meant
    tables = top.tables("joint")
    if not 1 <= len(tables) <= MOST_JOINTS:
        raise top.error("joint", f"expected 1 to {MOST_JOINTS} tables [[joint]], got {len(tables)}")
    return tables


def _pose(top: Table, key: str) -> Array:
    table = top.table(key, None)
    if table is None:
        return np.eye(4)
    pose: Array = table.pose(position=False)
    table.finish()
    return pose


def _joint_row(table: Table, *, has_dh: bool) -> _JointRow:
    """One [[joint]] table, its unknown keys reported."""
    name = table.text("name")
    kind = table.choice("kind", ("revolute", "prismatic"))
    dh, origin, axis = None, np.zeros(3), np.array([0.0, 0.0, 1.0])
    if has_dh:
        if table.has("axis") or table.has("origin"):
            raise table.error("axis", 'given in a file of DH rows, expected "dh" instead')
        dh = _dh_row(table.table("dh"))
    else:
        if table.has("dh"):
            raise table.error("dh", 'given without dh = "standard" or "modified" at the top of the file')
        origin, axis = table.position("origin"), table.vector("axis", 3, "number")
        if not 1e-6 < float(np.abs(axis).max()) < 1e6:
            raise table.error("axis", f"expected a direction [x, y, z], got {toml_text(table.data['axis'])}")
    values: dict[str, Any] = {
        quantity: _limit(table, quantity, joint_dimension(kind, quantity))
        for quantity in ("velocity", "acceleration", "jerk")
    }
    values |= _torques(table, kind, values["velocity"])
    values["gear_ratio"] = _gear_ratio(table)
    values["encoder_counts"] = table.integer("encoder_counts", None, low=1, high=2**40)
    joint = Joint(name, kind, _position(table, joint_dimension(kind, "position")), **values)
    present = tuple(key for key in LINK_KEYS if table.has(key))
    link = _link(table, kind) if "mass" in present else None
    table.finish()
    return _JointRow(table, joint, dh, origin, axis, link, present)


def _dh_row(table: Table) -> DHRow:
    row = DHRow(
        a=table.quantity("a", "length", 0.0),
        alpha=table.quantity("alpha", "angle", 0.0),
        d=table.quantity("d", "length", 0.0),
        theta=table.quantity("theta", "angle", 0.0),
    )
    for key, value in (("a", row.a), ("d", row.d), ("alpha", row.alpha), ("theta", row.theta)):
        if abs(value) > FARTHEST:
            raise table.error(key, f"expected at most {FARTHEST:g} m or rad, got {toml_text(table.data[key])}")
    table.finish()
    return row


def _limit(table: Table, key: str, dimension: str, *default: None) -> float | None:
    """A limit above zero, of a size that a machine can have."""
    value: float | None = table.quantity(key, dimension, *default, positive=True)
    if value is not None and not SMALLEST <= value <= LARGEST:
        raise table.error(
            key,
            f"expected {DIMENSIONS[dimension].expected}, got {toml_text(table.data[key])}: no machine has it",
        )
    return value


def _torques(table: Table, kind: str, velocity: float | None) -> dict[str, float | None]:
    """What the drive can give: peak, continuous, and how the peak falls off with speed."""
    force, speed = joint_dimension(kind, "torque"), joint_dimension(kind, "velocity")
    peak = _limit(table, "torque", force, None)
    lasting = _limit(table, "continuous_torque", force, None)
    corner = _limit(table, "torque_corner_speed", speed, None)
    at_velocity = _limit(table, "torque_at_velocity", force, None)
    for key, value in (("continuous_torque", lasting), ("torque_at_velocity", at_velocity)):
        if peak is not None and value is not None and value > peak:
            raise table.error(
                key, f"{format_quantity(value, force)} is above torque (its peak) {format_quantity(peak, force)}"
            )
    for key, other in (
        ("torque_corner_speed", "torque_at_velocity"),
        ("torque_at_velocity", "torque_corner_speed"),
        ("torque_corner_speed", "torque"),
    ):
        if table.has(key) and not table.has(other):
            raise InputError.at(table.where, f'missing key "{other}": "{key}" needs it')
    if corner is not None and velocity is not None and corner >= velocity:
        raise table.error(
            "torque_corner_speed",
            f"{format_quantity(corner, speed)} is not below velocity {format_quantity(velocity, speed)}",
        )
    return {
        "torque": peak,
        "continuous_torque": lasting,
        "torque_corner": corner,
        "torque_at_velocity": at_velocity,
    }


def _gear_ratio(table: Table) -> float:
    ratio: float = table.quantity("gear_ratio", "number", 1.0)
    if not 1e-3 <= abs(ratio) <= 1e6:
        raise table.error("gear_ratio", f"expected a ratio such as 100, got {toml_text(table.data['gear_ratio'])}")
    return ratio


def _position(table: Table, dimension: str) -> tuple[float, float]:
    if table.take("position") == "unlimited":
        return (-np.inf, np.inf)
    if not isinstance(table.data["position"], list):
        raise table.error("position", f'expected [low, high] or "unlimited", got {toml_text(table.data["position"])}')
    return _ordered(table, "position", dimension)


def _ordered(table: Table, key: str, dimension: str) -> tuple[float, float]:
    """[low, high] with low below high."""
    low, high = table.vector(key, 2, dimension)
    if not low < high:
        raise table.error(
            key,
            f"low {format_quantity(low, dimension)} is not below high {format_quantity(high, dimension)}",
        )
    if max(abs(low), abs(high)) > FARTHEST:
        raise table.error(key, f"expected at most {FARTHEST:g} m or rad, got {toml_text(table.data[key])}")
    return float(low), float(high)


def _link(table: Table, kind: str) -> Link:
    mass, com, inertia = _body(table)
    viscous = table.quantity(
        "viscous_friction",
        "angular_friction" if kind == "revolute" else "linear_friction",
        0.0,
        not_negative=True,
    )
    rotor = table.quantity("rotor_inertia", "inertia", 0.0, not_negative=True)
    for key, value in (("viscous_friction", viscous), ("rotor_inertia", rotor)):
        if value > HEAVIEST:
            raise table.error(key, f"expected less, got {toml_text(table.data[key])}")
    return Link(mass, com, inertia, viscous, _coulomb(table, joint_dimension(kind, "torque")), rotor)


def _coulomb(table: Table, dimension: str) -> tuple[float, float]:
    """One value, or [moving positive, moving negative]."""
    value = table.take("coulomb_friction", 0.0)
    pair = value if isinstance(value, list) else [value, value]
    if len(pair) != 2:
        raise table.error("coulomb_friction", f"expected one value or [positive, negative], got {toml_text(value)}")
    result = tuple(parse_quantity(item, dimension, table.at("coulomb_friction")) for item in pair)
    if not 0.0 <= min(result) <= max(result) <= LARGEST:
        raise table.error("coulomb_friction", f"expected values of zero or more, got {toml_text(value)}")
    return result[0], result[1]


def _body(table: Table, *, mass_required: bool = True) -> tuple[float, Array, Array]:
    """mass, com (3,) and inertia (3, 3) about the com, checked to be a body's."""
    mass: float = table.quantity("mass", "mass", *(() if mass_required else (0.0,)), not_negative=True)
    if mass > HEAVIEST:
        raise table.error("mass", f"expected at most {HEAVIEST:g} kg, got {toml_text(table.data['mass'])}")
    com: Array = table.position("com", read_only(np.zeros(3)))
    return mass, com, _inertia(table)


def _inertia(table: Table) -> Array:
    """[xx, yy, zz] or [xx, yy, zz, xy, xz, yz] about the centre of mass, as a read-only (3, 3)."""
    raw = table.take("inertia", [0.0, 0.0, 0.0])
    if not isinstance(raw, list) or len(raw) not in (3, 6):
        raise table.error(
            "inertia", f"expected [xx, yy, zz] or [xx, yy, zz, xy, xz, yz] in kg m^2, got {toml_text(raw)}"
        )
    values = [parse_quantity(value, "inertia", table.at("inertia")) for value in raw]
    xx, yy, zz, xy, xz, yz = (values + [0.0] * 3)[:6]
    matrix = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    if np.abs(matrix).max() > HEAVIEST:
        raise table.error("inertia", f"expected at most {HEAVIEST:g} kg m^2, got {toml_text(raw)}")
    moments = np.linalg.eigvalsh(matrix)
    slack = 1e-9 + 1e-6 * moments[2]
    if moments[0] < -slack or moments[0] + moments[1] < moments[2] - slack:
        principal = ", ".join(f"{moment:.4g}" for moment in moments)
        raise table.error(
            "inertia",
            f"no body has principal moments {principal} kg m^2, one is above the sum of the other two",
        )
    return read_only(matrix)


def _tool(name: str, table: Table) -> Tool:
    pose = read_only(table.pose(position=False))
    mass, com, inertia = _body(table, mass_required=False)
    speed = _limit(table, "speed", "speed", None)
    acceleration = _limit(table, "acceleration", "acceleration", None)
    table.finish()
    return Tool(name, pose, mass, com, inertia, speed, acceleration)


def _payload(name: str, table: Table) -> Payload:
    payload = Payload(name, *_body(table))
    table.finish()
    return payload


def _check_joints(top: Table, joints: Sequence[Joint]) -> None:
    names = [joint.name for joint in joints]
    for i, name in enumerate(names):
        if name in names[:i]:
            raise InputError.at(top.file, f"joint[{i + 1}].name", f'"{name}" is taken already')
    turns = [
        max(1.0, (joint.position[1] - joint.position[0]) / (2.0 * np.pi))
        for joint in joints
        if joint.kind == "revolute" and np.isfinite(joint.position[0])
    ]
    if np.prod(turns) > MOST_TURNS:
        raise InputError.at(
            top.file,
            "joint",
            f"position limits allow {np.prod(turns):.3g} combinations of whole turns, at most {MOST_TURNS}; "
            'a joint that turns freely has position = "unlimited"',
        )


def _links(top: Table, rows: Sequence[_JointRow]) -> list[Link] | None:
    """Links of an arm whose joints all state a mass; None where none has any link data."""
    links = [row.link for row in rows if row.link is not None]
    if len(links) == len(rows):
        return links
    for row in rows:
        if row.link is None and (links or row.link_keys or row.joint.torque is not None):
            reason = "other joints have one" if links else f'"{(*row.link_keys, "torque")[0]}" needs it'
            raise InputError.at(row.table.where, f'missing key "mass": {reason}')
    return None


def _positions(top: Table, joints: Sequence[Joint], problems: Problems) -> dict[str, Array]:
    """[positions]: named joint vectors inside the position limits."""
    table = top.table("positions")
    dimensions = [joint_dimension(joint.kind, "position") for joint in joints]
    positions: dict[str, Array] = {}
    table.take("home")
    for key in table.data:
        with problems.gather():
            q = table.mixed_vector(key, dimensions, noun="joint positions")
            for value, joint, dimension in zip(q.tolist(), joints, dimensions, strict=True):
                low, high = np.clip(joint.position, -FARTHEST, FARTHEST).tolist()
                if not low <= value <= high:
                    raise table.error(
                        key,
                        f"{joint.name} at {format_quantity(value, dimension)} is outside its limits, "
                        f"{format_quantity(low, dimension)} to {format_quantity(high, dimension)}",
                    )
            positions[key] = q
    return positions


def _limits(top: Table, joints: Sequence[Joint], problems: Problems) -> Limits:
    """Identity rows of the joints, then the [[limit]] rows."""
    plain = joint_rows(joints)
    names, kinds = list(plain.names), list(plain.kinds)
    rows, bounds = [plain.matrix], {key: [getattr(plain, key)] for key in _BOUNDS}
    for table in top.tables("limit"):
        with problems.gather():
            name = table.text("name")
            if name in names:
                raise table.error("name", f'"{name}" is taken already')
            kind = _row_kind(table, joints)
            row = _row(table, kind, joints)
            given = {key: _row_bound(table, key, kind) for key in _BOUNDS}
            table.finish()
            if all(np.isinf(bound).all() for bound in given.values()):
                raise InputError.at(table.where, "limits nothing, expected position, velocity, acceleration or jerk")
            names.append(name)
            kinds.append(kind)
            rows.append(row[None])
            for key, bound in given.items():
                bounds[key].append(bound)
    torque = np.vstack([plain.torque, np.tile([-np.inf, np.inf], (len(names) - len(joints), 1))])
    stacked = {key: read_only(np.vstack(parts)) for key, parts in bounds.items()}
    return Limits(tuple(names), read_only(np.vstack(rows)), torque=read_only(torque), kinds=tuple(kinds), **stacked)


_BOUNDS = ("position", "velocity", "acceleration", "jerk")


def _row_kind(table: Table, joints: Sequence[Joint]) -> Kind:
    """Whether a row counts in deg or in mm: as its joints, or as it says."""
    coefficients = table.vector("row", len(joints), "number")
    kinds = {joint.kind for joint, c in zip(joints, coefficients, strict=True) if c != 0.0}
    if not kinds or np.abs(coefficients).max() > 1e6:
        raise table.error(
            "row", f"expected a coefficient for each joint, not all zero, got {toml_text(table.data['row'])}"
        )
    if table.has("kind") or len(kinds) > 1:
        kind: Kind = table.choice("kind", ("revolute", "prismatic"))
        return kind
    return kinds.pop()


def _row(table: Table, kind: str, joints: Sequence[Joint]) -> Array:
    """Coefficients in SI: a file states them in deg or mm of the row per deg or mm of the joint."""
    size = {"revolute": np.deg2rad(1.0), "prismatic": 1e-3}
    coefficients: Array = table.vector("row", len(joints), "number")
    return coefficients * size[kind] / np.array([size[joint.kind] for joint in joints])


def _row_bound(table: Table, key: Any, kind: str) -> Array:
    """(1, 2) low, high of one quantity: infinite where not given, one number is symmetric."""
    if not table.has(key):
        return np.array([[-np.inf, np.inf]])
    dimension = joint_dimension(kind, key)
    if key == "position":
        return np.array([_ordered(table, key, dimension)])
    if isinstance(table.data[key], list):
        low, high = table.vector(key, 2, dimension)
        if not (-LARGEST <= low <= -SMALLEST and SMALLEST <= high <= LARGEST):
            raise table.error(key, f"expected [low below zero, high above zero], got {toml_text(table.data[key])}")
        return np.array([[low, high]])
    limit = _limit(table, key, dimension)
    return np.array([[-1.0, 1.0]]) * np.array(limit)
