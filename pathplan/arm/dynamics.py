"""Joint torque through roboticstoolbox, and the toolbox's own robot for notebooks.

The toolbox takes seconds to import: only these functions do.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm.bodies import Body, combined, moved
from pathplan.arm.chain import moved_link
from pathplan.arm.mdh import ModifiedChain, modified_chain
from pathplan.arm.model import Array, Link, Payload, Tool
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["combined_link", "toolbox", "torque"]


def torque(arm: Arm, q: Any, qd: Any, qdd: Any) -> Array:
    """Joint torques (N, n), N m or N: see `Arm.torque`.

    Rigid bodies with tool and payload on the last link, gravity, rotors (gear_ratio^2 rotor_inertia qdd),
    viscous friction (viscous qd) and Coulomb friction by the sign of qd, zero at rest (recursive
    Newton-Euler, Luh, Walker & Paul 1980, by roboticstoolbox).
    """
    if arm.links is None:
        raise InputError(f"{arm.name}: no dynamics: the arm file gives no link masses")
    arrays = [np.ascontiguousarray(value, dtype=float) for value in (q, qd, qdd)]
    rows = np.shape(arrays[0])[0] if arrays[0].ndim == 2 else -1
    for name, value in zip(("q", "qd", "qdd"), arrays, strict=True):
        if value.shape != (rows, arm.n):
            raise InputError(f"{name}: expected shape (N, {arm.n}), the same N for q, qd and qdd, got {value.shape}")
        if not np.isfinite(value).all():
            raise InputError(f"{name}: expected finite numbers, got NaN or infinity")
    if rows == 0:
        return np.zeros((0, arm.n))
    result = np.empty((rows, arm.n))
    for joints, chain in arm.separate_chains:
        result[:, joints] = _chain_torque(chain, [np.ascontiguousarray(value[:, joints]) for value in arrays])
    return result


def _chain_torque(arm: Arm, arrays: list[Array]) -> Array:
    """(N, n) of a single chain."""
    rows = len(arrays[0])
    robot, fixed_front = arm.rigid_body
    if fixed_front:
        arrays = [np.column_stack([np.zeros(rows), value]) for value in arrays]
    # One row alone comes back flat.
    result = np.asarray(robot.rne(*arrays), dtype=float).reshape(rows, arm.n + fixed_front)
    return result[:, 1:] if fixed_front else result


def build_rigid_body(arm: Arm) -> tuple[Any, bool]:
    """The toolbox robot that torque is computed with, and whether a joint held at zero stands in front.

    rne of the toolbox (1.5.0) is wrong where the first joint is prismatic; a massless revolute joint held
    at zero in front of it is the remedy.
    """
    from roboticstoolbox import RevoluteMDH

    front = arm.joints[0].kind == "prismatic"
    lead = [RevoluteMDH(m=0.0, r=np.zeros(3), I=np.zeros(6), Jm=0.0, B=0.0, Tc=[0.0, 0.0], G=1.0)] if front else []
    return _robot(arm, lead), front


def separate_chains(arm: Arm) -> tuple[tuple[list[int], Arm], ...]:
    """The chains that stand on the base, each with its joints' indices and as an arm of its own: what one of them does
    the others don't feel. Raises InputError where joints branch above the base.
    """
    if arm.tool_joints == tuple(range(arm.n)):
        return ((list(range(arm.n)), arm),)
    from pathplan.arm.arm import joint_rows

    chains = []
    for root in (i for i in range(arm.n) if arm.parents[i] < 0):
        joints = [root]
        while after := [i for i in range(arm.n) if arm.parents[i] == joints[-1]]:
            if len(after) > 1:
                names = ", ".join(arm.joint_names[i] for i in after)
                raise InputError(f"{arm.name}: no torque: joint {arm.joint_names[joints[-1]]} carries several, {names}")
            joints += after
        holds_tool = joints[-1] == arm.tip
        part = replace(
            arm,
            joints=tuple(arm.joints[i] for i in joints),
            parent_from_joint=arm.parent_from_joint[joints],
            axes=arm.axes[joints],
            parents=(),
            tip=-1,
            tip_from_flange=arm.tip_from_flange if holds_tool else np.eye(4),
            links=None if arm.links is None else tuple(arm.links[i] for i in joints),
            tool=arm.tool if holds_tool else Tool("none", np.eye(4)),
            payload=arm.payload if holds_tool else None,
            positions={},
            limits=joint_rows([arm.joints[i] for i in joints]),
            free_first=(),
        )
        chains.append((joints, part))
    return tuple(chains)


def toolbox(arm: Arm) -> Any:
    """The arm as a new roboticstoolbox DHRobot (modified DH rows found from the axes): see `Arm.toolbox`.

    Base, tool, position limits and, where the arm has them, link data and friction are in it; tool and
    payload masses are part of the last link. For an arm whose first joint is prismatic use `Arm.torque`,
    not the robot's own `rne`.
    """
    return _robot(arm, [])


def _robot(arm: Arm, lead: list[Any]) -> Any:
    from roboticstoolbox import DHRobot, PrismaticMDH, RevoluteMDH
    from spatialmath import SE3

    chain = modified_chain(arm)
    links = _links_in(arm, chain)
    for i, (row, joint) in enumerate(zip(chain.rows, arm.joints, strict=True)):
        shared: dict[str, Any] = {"alpha": row.alpha, "a": row.a}
        if np.isfinite(joint.position).all():
            shared["qlim"] = np.array(joint.position)
        if links is not None:
            shared |= _dynamic_parameters(links[i], joint.gear_ratio)
        if joint.kind == "revolute":
            lead.append(RevoluteMDH(d=row.d, offset=row.theta, **shared))
        else:
            lead.append(PrismaticMDH(theta=row.theta, offset=row.d, **shared))
    return DHRobot(
        lead,
        name=arm.name,
        base=SE3(chain.base, check=False),
        tool=SE3(chain.tool, check=False),
        gravity=arm.gravity,
    )


def _dynamic_parameters(link: Link, gear_ratio: float) -> dict[str, Any]:
    """Friction moved to the motor side, as the toolbox wants it: it adds G^2 B qd + |G| Tc."""
    return {
        "m": link.mass,
        "r": link.com,
        "I": link.inertia,
        "Jm": link.rotor_inertia,
        "B": link.viscous / gear_ratio**2,
        "Tc": [link.coulomb[0] / abs(gear_ratio), -link.coulomb[1] / abs(gear_ratio)],
        "G": gear_ratio,
    }


def _links_in(arm: Arm, chain: ModifiedChain) -> list[Link] | None:
    """Link data in the modified DH frames, tool and payload joined to the last link."""
    if arm.links is None:
        return None
    links, base_from_joint = [], np.eye(4)
    for i, link in enumerate(arm.links):
        base_from_joint = base_from_joint @ arm.parent_from_joint[i]
        if i == arm.n - 1:
            link = combined_link(link, arm.tip_from_flange @ arm.tool.flange_from_tool, arm.tool, arm.payload)
        frame_from_joint = np.linalg.inv(chain.base_from_frames[i]) @ base_from_joint
        links.append(moved_link(link, frame_from_joint))
    return links


def combined_link(link: Link, joint_from_tool: Array, tool: Tool, payload: Payload | None) -> Link:
    """The last link with tool and payload fixed to it, in the joint's moving frame."""
    things: list[Tool | Payload] = [tool] if payload is None else [tool, payload]
    carried = [moved(Body(thing.mass, thing.com, thing.inertia), joint_from_tool) for thing in things]
    body = combined([Body(link.mass, link.com, link.inertia), *carried])
    if body.mass == 0.0:
        return link
    return replace(link, mass=body.mass, com=body.com, inertia=body.inertia)
