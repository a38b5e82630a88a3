"""A template of an arm file, with what is known filled in and what is missing to be filled in."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from pathplan.arm.load_urdf import unfinished, urdf_chain
from pathplan.arm.urdf import MovingJoint, Urdf, UrdfChain, read_urdf
from pathplan.tomlfile import Table, read_toml
from pathplan.units import DIMENSIONS, Quantity, format_value, joint_dimension, to_screen, toml_text

__all__ = ["FILL_IN", "arm_template"]

FILL_IN = '"fill in"'
NEEDED: tuple[Quantity, ...] = ("velocity", "acceleration", "jerk")
# Keys of a joint that are good to have, with what they mean to the one who fills them in.
WISHED = {
    "torque": "peak",
    "continuous_torque": "",
    "gear_ratio": "motor turns per joint turn; of a slide: rad of the motor per m",
    "encoder_counts": "per turn of the motor",
    "mass": "of the link that the joint moves",
    "com": "mm, its centre of mass",
    "inertia": "xx yy zz xy xz yz about it, kg m^2",
    "viscous_friction": "joint side",
    "coulomb_friction": "joint side",
    "rotor_inertia": "motor side",
}


def arm_template(file: str | Path, base: str | None = None, tip: str | None = None) -> str:
    """The template for a URDF file (a whole arm file) or an arm file (what is missing in it), as TOML text.

    `base`, `tip`: links of a URDF file given alone. Raises InputError for a file that can't be read.
    """
    path = Path(file)
    if path.suffix.lower() == ".urdf":
        robot = read_urdf(path)
        chain = robot.chain(base, tip)
        return "\n".join([*_head(robot, chain), *_joint_tables(chain, {}), *_home(chain)])
    data, _ = read_toml(path)
    top = Table(data, path.name)
    tables = {table.get("name"): table for table in _raw_joints(data, top)}
    if "urdf" in data:
        _, chain = urdf_chain(top, path.parent)
        whole = f"# The tables [[joint]] of {path.name}, with what is missing in it; the rest of it stays as it is."
        return "\n".join([whole, *_joint_tables(chain, tables)])
    lines = [f"# What {path.name} does not say of its joints, for the tables [[joint]] that it has; where known."]
    for table in tables.values():
        if wishes := list(_wishes(table, str(table.get("kind", "")), {})):
            lines += ["", f"# {toml_text(table.get('name', '?'), 200)}", *wishes]
    if len(lines) == 1:
        return f"# {path.name} says everything of its joints that an arm file has a place for."
    return "\n".join(lines)


def _raw_joints(data: Mapping[str, Any], top: Table) -> list[dict[str, Any]]:
    tables = data.get("joint", [])
    if not isinstance(tables, list) or not all(isinstance(table, dict) for table in tables):
        raise top.error("joint", "expected a list of tables [[joint]]")
    return tables


def _head(robot: Urdf, chain: UrdfChain) -> Iterator[str]:
    yield f"# Arm file for {robot.file}: mm, deg and seconds. Replace every {FILL_IN}; a line with # is a choice."
    yield f"name = {json.dumps(robot.name or Path(robot.file).stem, ensure_ascii=False)}"
    yield f"urdf = {json.dumps(robot.file, ensure_ascii=False)}"
    yield f"base_link = {json.dumps(chain.base, ensure_ascii=False)}"
    yield f"tip_link = {json.dumps(chain.tip, ensure_ascii=False)}"


def _joint_tables(chain: UrdfChain, tables: Mapping[Any, Mapping[str, Any]]) -> Iterator[str]:
    for joint in chain.joints:
        table = tables.get(joint.name, {})
        yield ""
        yield "[[joint]]"
        yield f"name = {json.dumps(joint.name, ensure_ascii=False)}"
        known = unfinished(joint)
        if "position" in table:
            yield f"position = {toml_text(table['position'], 200)}"
        elif known["position"] is None:
            yield f'position = {FILL_IN:<16} # [low, high] in {_unit(joint, "position")}, or "unlimited"'
        else:
            yield f"# position = {_span(joint, known['position'])}    # as in the URDF file"
        for key in NEEDED:
            if key in table:
                yield f"{key} = {toml_text(table[key], 200)}"
            elif known.get(key) is None:
                yield f"{key} = {FILL_IN:<16} # {_unit(joint, key)}"
            else:
                yield f"# {key} = {_value(joint, key, known[key])}    # {_unit(joint, key)}, as in the URDF file"
        for wished, value in table.items():
            if wished in WISHED:
                yield f"{wished} = {toml_text(value, 200)}"
        yield from _wishes(table, joint.kind, _given(joint, known))


def _given(joint: MovingJoint, known: Mapping[str, Any]) -> dict[str, str]:
    """What the URDF file says of the keys that are good to have, in the words of an arm file."""
    given: dict[str, str] = {}
    if known["torque"] is not None:
        given["torque"] = f"{_value(joint, 'torque', known['torque'])}"
    if joint.body.mass > 0.0:
        given["mass"] = f'"{format_value(joint.body.mass)} kg"'
        given["com"] = given["inertia"] = ""
    if joint.joint.damping > 0.0:
        given["viscous_friction"] = format_value(joint.joint.damping)
    if joint.joint.friction > 0.0:
        given["coulomb_friction"] = format_value(joint.joint.friction)
    return given


def _wishes(table: Mapping[str, Any], kind: str, given: Mapping[str, str]) -> Iterator[str]:
    """As comments, what a table could still give."""
    if kind not in ("revolute", "prismatic"):
        return
    units = {
        "torque": joint_dimension(kind, "torque"),
        "continuous_torque": joint_dimension(kind, "torque"),
        "mass": "mass",
        "viscous_friction": "angular_friction" if kind == "revolute" else "linear_friction",
        "coulomb_friction": joint_dimension(kind, "torque"),
        "rotor_inertia": "inertia",
    }
    for key, meaning in WISHED.items():
        if key in table:
            continue
        unit = DIMENSIONS[units[key]].screen if key in units else ""
        if key in given:
            if given[key]:
                yield f"# {key} = {given[key]}    # {unit}, as in the URDF file"
            continue
        comment = ", ".join(part for part in (unit, meaning) if part)
        yield f"# {key} =    # {comment}"


def _unit(joint: MovingJoint, quantity: Quantity) -> str:
    return DIMENSIONS[joint_dimension(joint.kind, quantity)].screen


def _value(joint: MovingJoint, quantity: Quantity, value: float) -> str:
    return format_value(to_screen(value, joint_dimension(joint.kind, quantity)), 6)


def _span(joint: MovingJoint, position: tuple[float, float]) -> str:
    if not np.isfinite(position).all():
        return '"unlimited"'
    return f"[{_value(joint, 'position', position[0])}, {_value(joint, 'position', position[1])}]"


def _home(chain: UrdfChain) -> Iterator[str]:
    """Zero where the limits allow it, else their middle."""
    values = []
    for joint in chain.joints:
        position = unfinished(joint)["position"] or (-np.inf, np.inf)
        inside = position[0] <= 0.0 <= position[1]
        values.append("0" if inside else _value(joint, "position", (position[0] + position[1]) / 2.0))
    yield ""
    yield "[positions]"
    yield f"home = [{', '.join(values)}]    # within the limits; choose a pose the arm waits in"
    yield ""
    yield "# [tools.NAME]"
    yield "# xyz = [0, 0, 100]    # tool centre point in the mechanical interface"
    yield '# mass = "1 kg"'
