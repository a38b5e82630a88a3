"""The same joints, seen from another frame or with a joint added: arms for planning, made from an arm.

A turntable that carries the workpiece is a joint of the arm's tree that does not move the tool. Seen from the turning
frame it does: table_from_tool = (base_from_table)^-1 base_from_tool is the pose of a chain that starts with the table's
joint run backwards. Such an arm has the same joint vector, limits and tools, and its forward kinematics, Jacobian,
derivatives and inverse are all relative to the workpiece.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm.model import Array, Joint, Kind, Limits, Tool, read_only
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["ROLL", "seen_from", "with_tool_roll"]

ROLL = "tool roll"


def seen_from(arm: Arm, joint: str) -> Arm:
    """See `Arm.seen_from`."""
    if joint not in arm.joint_names:
        raise InputError(f'{arm.name}: unknown joint "{joint}", there is {", ".join(arm.joint_names)}')
    index = arm.joint_names.index(joint)
    path = list(arm.tool_joints)
    if index in path:
        raise InputError(f'{arm.name}: joint "{joint}" carries the tool, expected one that carries a workpiece')
    lineage = [index]
    while arm.parents[lineage[-1]] >= 0:
        lineage.append(arm.parents[lineage[-1]])
    own = [i for i in lineage if i not in path]  # from the workpiece towards the base
    rest = [i for i in path if i not in lineage]
    fixed, axes, parents = arm.parent_from_joint.copy(), arm.axes.copy(), list(arm.parents)
    before, step = -1, np.eye(4)
    for i in own:
        fixed[i], parents[i], axes[i] = step, before, -arm.axes[i]
        before, step = i, np.linalg.inv(arm.parent_from_joint[i])
    if rest:
        fixed[rest[0]], parents[rest[0]] = step @ arm.parent_from_joint[rest[0]], before
        tip, tip_from_flange = arm.tip, arm.tip_from_flange
    else:  # the workpiece hangs on the tool's own last joint
        tip, tip_from_flange = before, step @ arm.tip_from_flange
    for i in range(arm.n):  # what moves workpiece and tool alike does not count
        if i not in own and i not in rest:
            parents[i] = -1
    return replace(
        arm,
        parent_from_joint=fixed,
        axes=axes,
        parents=tuple(parents),
        tip=tip,
        tip_from_flange=tip_from_flange,
        links=None,
        free_first=tuple(own),
        own_length=arm.length,
    )


def with_tool_roll(arm: Arm) -> Arm:
    """See `Arm.with_tool_roll`."""
    roll = Joint(ROLL, "revolute", (-np.inf, np.inf), np.inf, np.inf, np.inf)
    tip_from_tool: Array = arm.tip_from_flange @ arm.tool.flange_from_tool
    tool = Tool(arm.tool.name, np.eye(4), speed=arm.tool.speed, acceleration=arm.tool.acceleration)
    return replace(
        arm,
        joints=(*arm.joints, roll),
        parent_from_joint=np.concatenate([arm.parent_from_joint, tip_from_tool[None]]),
        axes=np.concatenate([arm.axes, [[0.0, 0.0, 1.0]]]),
        parents=(*arm.parents, arm.tip),
        tip=arm.n,
        tip_from_flange=np.eye(4),
        tool=tool,
        tools={},
        payloads={},
        payload=None,
        links=None,
        positions={name: np.append(q, 0.0) for name, q in arm.positions.items()},
        limits=_with_endless_joint(arm.limits, arm.n),
        free_first=(arm.n,),
        own_length=arm.length,
    )


def _with_endless_joint(limits: Limits, n: int) -> Limits:
    """The rows of n joints, and after those of the joints themselves one of a joint n that nothing limits."""
    matrix = np.insert(np.pad(limits.matrix, ((0, 0), (0, 1))), n, np.eye(n + 1)[n], axis=0)
    none = [-np.inf, np.inf]
    kinds: tuple[Kind, ...] = limits.kinds
    return Limits(
        names=(*limits.names[:n], ROLL, *limits.names[n:]),
        matrix=read_only(matrix),
        position=read_only(np.insert(limits.position, n, none, axis=0)),
        velocity=read_only(np.insert(limits.velocity, n, none, axis=0)),
        acceleration=read_only(np.insert(limits.acceleration, n, none, axis=0)),
        jerk=read_only(np.insert(limits.jerk, n, none, axis=0)),
        torque=read_only(np.insert(limits.torque, n, none, axis=0)),
        kinds=(*kinds[:n], "revolute", *kinds[n:]) if kinds else (),
    )
