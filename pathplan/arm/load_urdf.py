"""Arm files that take their geometry, masses and most limits from a URDF file:

    urdf = "stacker.urdf"           # beside the arm file, or a path from there
    base_link = "base"              # default: the link that hangs on nothing
    tip_link = "flange"             # default: the end of the chain with most moving joints
    name = "stacker"                # default: the robot's name in the URDF file

    [mount]                         # where the base link stands in the arm's own base; default: in it
    xyz = [0, 0, 300]

    [mechanical_interface]          # from the tip link; default: it
    rpy = [0, 90, 0]

    [[joint]]                       # one table for each moving joint of the chain, in any order
    name = "joint_1"                # as in the URDF file
    acceleration = 900              # URDF has none
    jerk = 9000
    velocity = 150                  # this and what follows only where the URDF file's values are not right:
    position = [-160, 160]
    torque = 120                    # and every other key of drive and link data; mass, com, inertia in the link frame

Joints of the chain come in its order. A further axis that the URDF file doesn't know (a track, a turntable) is a table
with kind, origin, axis, and parent where it does not stand on the base; it comes before the chain if it is listed
before any of the chain's joints, else after it. `mounted_on = "track"` stands the base link on such a joint, listed
before the chain.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from pathplan.arm.arm import Arm
from pathplan.arm.load_bodies import LINK_KEYS, body, friction
from pathplan.arm.load_joints import BASE, JointRow, drive, joint_row, position
from pathplan.arm.load_values import LARGEST, SMALLEST, limit
from pathplan.arm.model import Array, Joint, Link
from pathplan.arm.plausible import plausibility
from pathplan.arm.urdf import MovingJoint, Urdf, UrdfChain, read_urdf
from pathplan.errors import InputError
from pathplan.tomlfile import Problems, Table, listed, nearest
from pathplan.units import DIMENSIONS, format_quantity, joint_dimension, toml_text

__all__ = ["ENDLESS", "UrdfParts", "sketch", "unfinished", "urdf_chain", "urdf_parts"]

ENDLESS = 1000.0  # rad: limits beyond this are a way of saying that a joint turns without end


@dataclass(frozen=True)
class UrdfParts:
    """What an arm file and its URDF file come to."""

    name: str
    sources: Mapping[str, str]
    rows: tuple[JointRow, ...]
    tip_from_flange: Array  # (4, 4) of the URDF's chain
    mount: Array  # (4, 4) the base link in the arm's own base
    mounted_on: int  # joint, -1 the base
    warnings: tuple[str, ...]

    def geometry(self, interface: Array) -> tuple[Array, Array, Array, tuple[int, ...], int, Sequence[Array]]:
        """As `pathplan.arm.load` asks for it."""
        names = [row.joint.name for row in self.rows]
        n = len(self.rows)
        fixed, axes, parents = np.tile(np.eye(4), (n, 1, 1)), np.empty((n, 3)), []
        before = -1
        for i, row in enumerate(self.rows):
            if row.moving is not None:
                if before < 0:
                    stand = np.eye(4)
                    if self.mounted_on >= 0:
                        stand[:3, 3] = -self.rows[self.mounted_on].origin
                    fixed[i] = stand @ self.mount @ row.moving.parent_from_joint
                    parents.append(self.mounted_on)
                else:
                    fixed[i] = row.moving.parent_from_joint
                    parents.append(before)
                axes[i] = row.moving.joint.axis
                before = i
            else:
                parent = -1 if row.parent in (None, BASE) else names.index(str(row.parent))
                fixed[i, :3, 3] = row.origin - (self.rows[parent].origin if parent >= 0 else 0.0)
                axes[i] = row.axis / np.linalg.norm(row.axis)
                parents.append(parent)
        return fixed, axes, self.tip_from_flange @ interface, tuple(parents), before, [np.eye(4)] * n


def urdf_chain(top: Table, folder: Path) -> tuple[Urdf, UrdfChain]:
    """The URDF file that an arm file names, and the chain that it means."""
    name = top.text("urdf")
    base, tip = top.text("base_link", None), top.text("tip_link", None)
    if Path(name).suffix.lower() != ".urdf":
        raise top.error("urdf", f'expected the name of a URDF file such as "arm.urdf", got {toml_text(name)}')
    robot = read_urdf(folder / name)
    return robot, robot.chain(base, tip)


def urdf_parts(top: Table, folder: Path, problems: Problems) -> UrdfParts:
    """Read what an arm file adds to its URDF file. Raises InputError for a URDF file that can't be used."""
    if top.has("dh"):
        raise top.error("dh", "given together with urdf, expected one of the two")
    robot, chain = urdf_chain(top, folder)
    tables, added = _tables(top, chain, problems)
    rows: list[JointRow] = []
    warnings: list[str] = []
    weighed = any(joint.body.mass > 0.0 for joint in chain.joints)
    for joint in chain.joints:
        with problems.gather():
            if joint.name not in tables:
                raise InputError.at(
                    top.file,
                    f'joint "{joint.name}" of {robot.file} has no table [[joint]], expected one with its '
                    "acceleration and jerk, which URDF has not",
                )
            row = _chain_row(tables[joint.name], joint, robot.file, weighed, warnings)
            rows.append(row)
    with problems.gather():
        mount = top.table("mount", None)
        pose = np.eye(4) if mount is None else mount.pose(position=False)
        if mount is not None:
            mount.finish()
    first = [row for row, leads in added if leads]
    problems.check()
    names = [row.joint.name for row in first]
    mounted_on = -1
    if top.has("mounted_on"):
        mounted_on = names.index(top.choice("mounted_on", names)) if names else -1
        if mounted_on < 0:
            raise top.error("mounted_on", "expected a joint of this file, listed before those of the URDF file")
    if not any(row.link for row in rows):
        warnings.append(f"{robot.file}: no masses: torque is neither computed nor limited")
    if chain.held:
        warnings.append(f"{robot.file}: {_held(chain.held)} beside the chain, held still at zero")
    name = top.text("name", robot.name or None)
    if not name:
        raise InputError.at(top.file, f'missing key "name": {robot.file} has none either')
    ordered = (*first, *rows, *(row for row, leads in added if not leads))
    sources = {robot.file: robot.digest}
    return UrdfParts(name, sources, ordered, chain.tip_from_flange, pose, mounted_on, tuple(warnings))


def _held(names: Sequence[str]) -> str:
    shown = ", ".join(names[:6]) + (", ..." if len(names) > 6 else "")
    return f"joint{'s' if len(names) > 1 else ''} {shown}"


def _tables(top: Table, chain: UrdfChain, problems: Problems) -> tuple[dict[str, Table], list[tuple[JointRow, bool]]]:
    """Tables of the chain's joints by name, and joints that only this file has, with whether they come first."""
    known = [joint.name for joint in chain.joints]
    tables: dict[str, Table] = {}
    added: list[tuple[JointRow, bool]] = []
    for table in top.tables("joint"):
        with problems.gather():
            name = table.text("name")
            if name in tables:
                raise table.error("name", f'"{name}" is taken already')
            if name in known:
                tables[name] = table
                continue
            if not table.has("kind"):
                hint = nearest(name, known) or f", expected {listed(known)}"
                raise table.error(
                    "name",
                    f'no moving joint "{name}" between link "{chain.base}" and link "{chain.tip}"{hint}; a joint of '
                    "this file only needs kind, origin and axis",
                )
            row = joint_row(table, has_dh=False)
            earlier = [BASE, *(other.joint.name for other, _ in added), *known]
            if row.parent is not None and row.parent not in earlier:
                raise table.error("parent", f"no earlier joint {toml_text(row.parent)}, expected {listed(earlier)}")
            if row.parent in known and row.parent != BASE:
                raise table.error("parent", "a joint of the URDF file can't carry one of this file")
            added.append((row, not tables))
    return tables, added


def given_velocity(joint: MovingJoint) -> float | None:
    """The URDF's velocity limit where it is one: above zero, of a size that a machine can have."""
    value = joint.joint.velocity
    return value if value is not None and SMALLEST <= value <= LARGEST else None


def given_torque(joint: MovingJoint) -> float | None:
    """The URDF's effort limit where it is one."""
    value = joint.joint.effort
    return value if value is not None and SMALLEST <= value <= LARGEST else None


def _chain_row(table: Table, moving: MovingJoint, file: str, weighed: bool, warnings: list[str]) -> JointRow:
    """One joint of the chain: the URDF's values, or the file's own where it gives them."""
    kind = moving.kind
    if table.has("kind"):
        raise table.error("kind", f"is {moving.joint.type} by {file}, expected no kind here")
    for key in ("dh", "origin", "axis", "parent"):
        if table.has(key):
            raise table.error(key, f"comes from {file}, expected limits and drive data only")
    velocity = _velocity(table, moving, file)
    values: dict[str, Any] = {
        "acceleration": limit(table, "acceleration", joint_dimension(kind, "acceleration")),
        "jerk": limit(table, "jerk", joint_dimension(kind, "jerk")),
    }
    weighed = weighed or table.has("mass")
    torque = given_torque(moving)
    if torque is None and not table.has("torque"):
        warnings.append(f"{moving.name}: no torque limit ({_effort(moving)} in {file})")
    elif torque is not None and not weighed:
        warnings.append(f"{moving.name}: torque limit left aside: {file} has no masses to judge it by")
        torque = None
    values |= drive(table, kind, velocity, torque)
    joint = Joint(moving.name, kind, _position(table, moving, file, warnings), velocity, **values)
    link = _link(table, moving, weighed)
    table.finish()
    return JointRow(table.where, joint, link=link, moving=moving)


def _effort(moving: MovingJoint) -> str:
    effort = moving.joint.effort
    return "no effort" if effort is None else f"effort {effort:g}"


def _velocity(table: Table, moving: MovingJoint, file: str) -> float:
    dimension = joint_dimension(moving.kind, "velocity")
    given = given_velocity(moving)
    if given is None and not table.has("velocity"):
        value = moving.joint.velocity
        why = "gives none" if value is None else f"says {value:g}"
        raise InputError.at(
            table.where, f'missing key "velocity": {file} {why}, expected {DIMENSIONS[dimension].expected}'
        )
    value = limit(table, "velocity", dimension, None)
    return float(given if value is None else value)  # type: ignore[arg-type]


def _position(table: Table, moving: MovingJoint, file: str, warnings: list[str]) -> tuple[float, float]:
    dimension = joint_dimension(moving.kind, "position")
    if table.has("position"):
        return position(table, dimension)
    given = moving.position
    if given is None:
        lower, upper = moving.joint.lower, moving.joint.upper
        why = "gives none" if lower is None or upper is None else f"says {lower:g} to {upper:g}"
        raise InputError.at(table.where, f'missing key "position": {file} {why}, expected [low, high] or "unlimited"')
    if moving.kind == "revolute" and max(map(abs, given)) > ENDLESS:
        if moving.joint.type != "continuous":
            warnings.append(f"{moving.name}: limits of {given[0]:g} to {given[1]:g} rad in {file}: taken as unlimited")
        return (-np.inf, np.inf)
    if max(map(abs, given)) > ENDLESS:
        low, high = (format_quantity(value, dimension) for value in given)
        raise InputError.at(table.where, f'missing key "position": {file} says {low} to {high}, which no slide has')
    return given


def _link(table: Table, moving: MovingJoint, weighed: bool) -> Link | None:
    """The URDF's body and friction, or the file's own; None where there are no masses at all."""
    if not weighed:
        given = [key for key in LINK_KEYS if table.has(key)]
        if given:
            raise InputError.at(table.where, f'missing key "mass": "{given[0]}" needs it')
        return None
    own = moving.body
    mass, com, inertia = own.mass, own.com, own.inertia
    if table.has("mass"):
        mass, com, inertia = body(table)
    elif table.has("com") or table.has("inertia"):
        raise InputError.at(table.where, 'missing key "mass": "com" and "inertia" come with it')
    link = friction(table, moving.kind, Link(mass, com, inertia))
    if not table.has("viscous_friction"):
        link = replace(link, viscous=moving.joint.damping)
    if not table.has("coulomb_friction"):
        link = replace(link, coulomb=(moving.joint.friction, moving.joint.friction))
    return link


def unfinished(moving: MovingJoint) -> dict[str, Any]:
    """Position limits, velocity and torque that the URDF file gives; None for each it does not."""
    given = moving.position
    if given is not None and max(map(abs, given)) > ENDLESS:
        given = (-np.inf, np.inf) if moving.kind == "revolute" else None
    return {"position": given, "velocity": given_velocity(moving), "torque": given_torque(moving)}


def sketch(file: str | Path, base: str | None = None, tip: str | None = None) -> Arm:
    """An arm of a URDF file alone, to look at and not to plan with: limits that it lacks are infinite, and warnings
    say so. Raises InputError for a file or links that can't be used.
    """
    robot = read_urdf(file)
    chain = robot.chain(base, tip)
    warnings = [f"{robot.file}: no acceleration and jerk limits: they come from an arm file, see --template"]
    joints = []
    for moving in chain.joints:
        known = unfinished(moving)
        unlimited = (-np.inf, np.inf)
        if known["position"] is None:
            warnings.append(f"{moving.name}: no position limits")
        if known["velocity"] is None:
            warnings.append(f"{moving.name}: no velocity limit")
        if known["torque"] is None:
            warnings.append(f"{moving.name}: no torque limit ({_effort(moving)})")
        joints.append(
            Joint(
                moving.name,
                moving.kind,
                known["position"] or unlimited,
                known["velocity"] or np.inf,
                np.inf,
                np.inf,
                known["torque"],
            )
        )
    weighed = any(moving.body.mass > 0.0 for moving in chain.joints)
    if not weighed:
        warnings.append(f"{robot.file}: no masses")
    if chain.held:
        warnings.append(f"{robot.file}: {_held(chain.held)} beside the chain, held still at zero")
    arm = Arm(
        name=robot.name or Path(file).stem,
        title=f'from link "{chain.base}" to link "{chain.tip}"',
        joints=tuple(joints),
        parent_from_joint=np.array([moving.parent_from_joint for moving in chain.joints]),
        axes=np.array([moving.joint.axis for moving in chain.joints]),
        tip_from_flange=chain.tip_from_flange,
        links=tuple(_body_of(moving) for moving in chain.joints) if weighed else None,
        sources={robot.file: robot.digest},
    )
    object.__setattr__(arm, "warnings", (*warnings, *plausibility(arm)))
    return arm


def _body_of(moving: MovingJoint) -> Link:
    own, friction_ = moving.body, moving.joint.friction
    return Link(own.mass, own.com, own.inertia, moving.joint.damping, (friction_, friction_))
