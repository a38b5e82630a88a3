"""Arm files: TOML in mm, deg and seconds, checked key by key. All that can be in one:

    name = "lifter"
    title = "Swing arm with a lift"
    dh = "modified"                 # or "standard"; left out where the joints give origin and axis
    tip = "lift"                    # the joint that carries the tool; needed only where joints branch
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
    parent = "base"                 # always the arm's own base; or an earlier joint; default: the joint before
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
    turning_speed = 120             # deg/s

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

A turntable or another axis beside the arm is a joint with parent = "base". An arm described by a URDF file names it in
place of geometry; see `pathplan.arm.load_urdf`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, Literal

import numpy as np

from pathplan.arm.arm import GRAVITY, NOTHING, Arm
from pathplan.arm.chain import chain_from_axes, chain_from_dh, moved_link
from pathplan.arm.load_bodies import payload, tool
from pathplan.arm.load_joints import JointRow, joint_row, parent_indices, tip_index
from pathplan.arm.load_limits import check_joints, limit_rows, positions
from pathplan.arm.model import Array, Link
from pathplan.arm.plausible import plausibility
from pathplan.errors import InputError
from pathplan.tomlfile import Problems, Table, read_toml
from pathplan.units import toml_text

__all__ = ["load_arm"]

MOST_JOINTS = 32


def load_arm(file: str | Path) -> Arm:
    """Read an arm file (TOML, see the head of this module); the arm carries no tool and no payload.

    What looks wrong but can be planned with is in `Arm.warnings`.

    Raises:
        InputError: missing file, directory, not TOML, an unknown or missing key, a wrong unit, limits with
        low
            above high or not above zero, a quaternion not of length 1, a negative mass, an inertia that no
            body has; a URDF file that can't be used, or alone. Several problems are gathered: the first is the
            message, all are in `problems`.
    """
    path = Path(file)
    if path.suffix.lower() == ".urdf":
        raise InputError.at(
            path.name,
            "a URDF file has no acceleration and jerk limits, expected an arm file (.toml) that names it; "
            f"a template to fill in: pathplan arm {path.name} --template",
        )
    data, digest = read_toml(path)
    problems = Problems()
    top = Table(data, path.name, problems=problems)
    head: dict[str, Any] = {"file": path, "sources": {path.name: digest}}
    with problems.gather():
        head["gravity"] = _gravity(top)
    with problems.gather():
        base, interface = pose_table(top, "base"), pose_table(top, "mechanical_interface")
    if top.has("urdf"):
        from pathplan.arm.load_urdf import urdf_parts

        parts = urdf_parts(top, path.parent, problems)
        head |= {"sources": {**head["sources"], **parts.sources}, "name": parts.name}
        rows: Sequence[JointRow] = parts.rows
    else:
        rows = _rows(top, problems)
        with problems.gather():
            head["name"] = top.text("name")
    with problems.gather():
        head["title"] = top.text("title", "")
    head["tools"] = _named(top, "tools", tool, problems)
    head["payloads"] = _named(top, "payloads", payload, problems)
    problems.check()

    joints = tuple(row.joint for row in rows)
    with problems.gather():
        check_joints(top, [row.where for row in rows], joints)
    with problems.gather():
        links = _links(rows)
    with problems.gather():
        head["positions"] = positions(top, joints, problems)
    with problems.gather():
        head["limits"] = limit_rows(top, joints, problems)
    with problems.gather():
        if not top.has("urdf"):
            geometry = _geometry(top, rows, interface)
        else:
            geometry = parts.geometry(interface)
    top.finish()
    problems.check()
    fixed, axes, tip_from_flange, parents, tip, link_frames = geometry
    if links is not None:
        links = [moved_link(link, frame) for link, frame in zip(links, link_frames, strict=True)]
    for i, parent in enumerate(parents):
        if parent < 0:
            fixed[i] = base @ fixed[i]
    arm = Arm(
        joints=joints,
        parent_from_joint=fixed,
        axes=axes,
        tip_from_flange=tip_from_flange,
        parents=parents,
        tip=tip,
        links=None if links is None else tuple(links),
        **head,
    )
    object.__setattr__(arm, "warnings", plausibility(arm, () if not top.has("urdf") else parts.warnings))
    return arm


def _rows(top: Table, problems: Problems) -> list[JointRow]:
    """The [[joint]] tables of a file that gives the geometry itself."""
    rows: list[JointRow] = []
    with problems.gather():
        top.choice("dh", ("standard", "modified"), None)
    with problems.gather():
        for table in joint_tables(top):
            with problems.gather():
                rows.append(joint_row(table, has_dh=top.has("dh")))
    return rows


def _geometry(
    top: Table, rows: Sequence[JointRow], interface: Array
) -> tuple[Array, Array, Array, tuple[int, ...], int, Sequence[Array]]:
    """parent_from_joint, axes, tip_from_flange, parents, tip, and the frames in which link data are stated, seen from
    the joint's moving frame.
    """
    parents = parent_indices(rows)
    tip = tip_index(top, rows, parents)
    convention: Literal["standard", "modified"] | None = top.choice("dh", ("standard", "modified"), None)
    if convention is None:
        origins, axes = [row.origin for row in rows], [row.axis for row in rows]
        fixed, unit_axes, tip_from_flange = chain_from_axes(origins, axes, interface, parents, tip)
        return fixed, unit_axes, tip_from_flange, parents, tip, [np.eye(4)] * len(rows)
    dh_rows = [row.dh for row in rows if row.dh is not None]
    fixed, unit_axes, tip_from_last, joint_from_link = chain_from_dh(dh_rows, convention, parents, tip)
    return fixed, unit_axes, tip_from_last @ interface, parents, tip, list(joint_from_link)


def _named(top: Table, key: str, read: Callable[[str, Table], Any], problems: Problems) -> dict[str, Any]:
    """[tools.NAME] or [payloads.NAME] tables by name."""
    found: dict[str, Any] = {}
    with problems.gather():
        for name, table in top.named_tables(key).items():
            with problems.gather():
                if name == NOTHING:
                    raise InputError.at(
                        table.where, f'"{NOTHING}" means that nothing is carried, expected another name'
                    )
                found[name] = read(name, table)
    return found


def _gravity(top: Table) -> Array:
    gravity: Array = top.vector("gravity", 3, "linear_acceleration", np.array(GRAVITY))
    if np.abs(gravity).max() > 1e3:
        raise top.error("gravity", f"expected at most 1000 m/s^2, got {toml_text(top.data['gravity'])}")
    return gravity


def joint_tables(top: Table) -> list[Table]:
    """The [[joint]] tables, at least one."""
    if not top.has("joint"):
        top.take("joint")  # raises, with the key that may be meant
    tables = top.tables("joint")
    if not 1 <= len(tables) <= MOST_JOINTS:
        raise top.error("joint", f"expected 1 to {MOST_JOINTS} tables [[joint]], got {len(tables)}")
    return tables


def pose_table(top: Table, key: str) -> Array:
    """(4, 4) of a table with a pose, the identity where it is missing."""
    table = top.table(key, None)
    if table is None:
        return np.eye(4)
    pose: Array = table.pose(position=False)
    table.finish()
    return pose


def _links(rows: Sequence[JointRow]) -> list[Link] | None:
    """Links of an arm whose joints all have a mass; None where none has any link data."""
    links = [row.link for row in rows if row.link is not None]
    if len(links) == len(rows):
        return links
    for row in rows:
        if row.link is None and (links or row.link_keys or row.joint.torque is not None):
            reason = "other joints have one" if links else f'"{(*row.link_keys, "torque")[0]}" needs it'
            raise InputError.at(row.where, f'missing key "mass": {reason}')
    return None
