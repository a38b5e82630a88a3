"""Bodies of arm files: links, tools and payloads, checked to be bodies."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pathplan.arm.load_values import LARGEST, limit
from pathplan.arm.model import Array, Link, Payload, Tool, read_only
from pathplan.tomlfile import Table
from pathplan.units import joint_dimension, parse_quantity, toml_text

__all__ = ["LINK_KEYS", "body", "friction", "link", "payload", "tool"]

HEAVIEST = 1e6  # kg, and kg m^2
LINK_KEYS = ("mass", "com", "inertia", "viscous_friction", "coulomb_friction", "rotor_inertia")


def link(table: Table, kind: str) -> Link:
    """The link that a joint moves, with the friction and rotor of its drive."""
    return friction(table, kind, Link(*body(table)))


def friction(table: Table, kind: str, of: Link) -> Link:
    """A link with the friction and rotor inertia that a table gives, zero where it gives none."""
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
    coulomb = _coulomb(table, joint_dimension(kind, "torque"))
    return replace(of, viscous=viscous, coulomb=coulomb, rotor_inertia=rotor)


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


def body(table: Table, *, mass_required: bool = True) -> tuple[float, Array, Array]:
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


def tool(name: str, table: Table) -> Tool:
    """A [tools.NAME] table."""
    pose = read_only(table.pose(position=False))
    mass, com, inertia = body(table, mass_required=False)
    speed = limit(table, "speed", "speed", None)
    acceleration = limit(table, "acceleration", "acceleration", None)
    turning = limit(table, "turning_speed", "angular_speed", None)
    table.finish()
    return Tool(name, pose, mass, com, inertia, speed, acceleration, turning)


def payload(name: str, table: Table) -> Payload:
    """A [payloads.NAME] table."""
    held = Payload(name, *body(table))
    table.finish()
    return held
