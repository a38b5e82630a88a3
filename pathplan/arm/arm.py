"""The arm: what can move, how far and how fast, and where its tool then is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.arm import kinematics
from pathplan.arm.inverse_form import Structure
from pathplan.arm.model import Array, Joint, Limits, Link, Mask, Payload, Tool, read_only
from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.arm.inverse import Branches
    from pathplan.arm.redundant import FreeSolver
    from pathplan.arm.solver import Solver

__all__ = ["Arm", "Structure", "joint_rows"]

NOTHING = "none"  # the name of no tool and of no payload
BARE = Tool(NOTHING, np.eye(4))
GRAVITY = (0.0, 0.0, -9.80665)  # m/s^2, standard gravity (ISO 80000-3)
# Built from libraries, cheap to build again, and not picklable.
LIBRARY_OBJECTS = ("rigid_body", "separate_chains", "_free_solvers")


def joint_rows(joints: Sequence[Joint]) -> Limits:
    """The plain per-joint limits as identity rows."""

    def symmetric(values: Sequence[float | None]) -> Array:
        high = np.array([np.inf if value is None else value for value in values])
        return read_only(np.column_stack([-high, high]))

    return Limits(
        names=tuple(joint.name for joint in joints),
        matrix=read_only(np.eye(len(joints))),
        position=read_only([joint.position for joint in joints]),
        velocity=symmetric([joint.velocity for joint in joints]),
        acceleration=symmetric([joint.acceleration for joint in joints]),
        jerk=symmetric([joint.jerk for joint in joints]),
        torque=symmetric([joint.torque for joint in joints]),
        kinds=tuple(joint.kind for joint in joints),
    )


def _is_tree(parents: Sequence[int]) -> bool:
    """Every joint leads to the base, -1."""
    n = len(parents)
    at = np.array(parents)
    if ((at < -1) | (at >= n)).any():
        return False
    for _ in range(n):
        at = np.where(at < 0, -1, np.array(parents)[at])
    return bool((at < 0).all())


@dataclass(frozen=True, eq=False)
class Arm:
    """An arm with the tool and payload it carries now. Everything SI; arrays are read-only; the base frame
    is the cell's.

    `parent_from_joint` (n, 4, 4) are the fixed transforms from the parent's moving frame (or the base) to
    each joint's frame at q = 0; a joint moves about or along `axes[i]` ((n, 3), unit, in its own frame).
    `tip` is the joint that carries the mechanical interface at `tip_from_flange` (4, 4). `links` None means
    that the arm has no dynamics. Raises InputError where the parts don't fit together.
    """

    name: str
    joints: tuple[Joint, ...]
    parent_from_joint: Array
    axes: Array
    tip_from_flange: Array = field(default_factory=lambda: np.eye(4))
    title: str = ""
    file: Path | None = None
    sources: Mapping[str, str] = field(default_factory=dict)  # file name -> sha256
    parents: tuple[int, ...] = ()  # -1 is the base; empty: one chain
    tip: int = -1
    links: tuple[Link, ...] | None = None
    gravity: Array = field(default_factory=lambda: np.array(GRAVITY))
    tools: Mapping[str, Tool] = field(default_factory=dict)
    payloads: Mapping[str, Payload] = field(default_factory=dict)
    tool: Tool = BARE
    payload: Payload | None = None
    positions: Mapping[str, Array] = field(default_factory=dict)  # "home" is always there: zero if not given
    own_length: float | None = None  # m: what `length` then is
    free_first: tuple[int, ...] = ()  # joints that planning is to leave free before others (`free_joints`)
    warnings: tuple[str, ...] = ()  # about limits and masses that look wrong: one line each
    limits: Limits = None  # type: ignore[assignment]  # default: identity rows of the joints

    def __post_init__(self) -> None:
        n = len(self.joints)
        if n == 0:
            raise InputError(f"{self.name}: an arm needs at least one joint")

        def put(name: str, value: Any) -> None:
            object.__setattr__(self, name, value)

        put("joints", tuple(self.joints))
        put("warnings", tuple(self.warnings))
        put("free_first", tuple(self.free_first))
        put("parents", tuple(self.parents) or tuple(range(-1, n - 1)))
        put("tip", self.tip if self.tip >= 0 else n - 1)
        shapes = {"parent_from_joint": (n, 4, 4), "axes": (n, 3), "tip_from_flange": (4, 4), "gravity": (3,)}
        for name, shape in shapes.items():
            put(name, read_only(getattr(self, name)))
            if getattr(self, name).shape != shape:
                raise InputError(f"{self.name}: {name}: expected shape {shape}, got {getattr(self, name).shape}")
            if not np.isfinite(getattr(self, name)).all():
                raise InputError(f"{self.name}: {name}: expected finite numbers")
        if np.abs(np.linalg.norm(self.axes, axis=1) - 1.0).max() > 1e-9:
            raise InputError(f"{self.name}: axes: expected unit vectors")
        if len(self.parents) != n or not _is_tree(self.parents):
            raise InputError(f"{self.name}: parents: expected {n} indices of other joints or -1, without a loop")
        if self.links is not None and len(self.links) != n:
            raise InputError(f"{self.name}: links: expected {n}, got {len(self.links)}")
        if len({joint.name for joint in self.joints}) != n:
            raise InputError(f"{self.name}: joints: names must differ")
        positions = {"home": np.zeros(n), **self.positions}
        put("positions", MappingProxyType({key: read_only(value) for key, value in positions.items()}))
        for key, value in self.positions.items():
            if np.shape(value) != (n,):
                raise InputError(f"{self.name}: positions.{key}: expected {n} joint values, got {np.size(value)}")
        for name in ("tools", "payloads", "sources"):
            put(name, MappingProxyType(dict(getattr(self, name))))
        if self.limits is None:
            put("limits", joint_rows(self.joints))

    @classmethod
    def from_axes(
        cls,
        name: str,
        joints: Sequence[Joint],
        origins: Any,
        axes: Any,
        base_from_flange: Any,
        **rest: Any,
    ) -> Arm:
        """A single chain from points on the axes (n, 3) and axis directions (n, 3) in the base frame at q =
        0.

        `base_from_flange` (4, 4) is the mechanical interface at q = 0; `rest` are the other fields of
        `Arm`. Joint frames are parallel to the base at q = 0.
        """
        from pathplan.arm.chain import chain_from_axes

        parent_from_joint, unit_axes, tip_from_flange = chain_from_axes(origins, axes, base_from_flange)
        return cls(name, tuple(joints), parent_from_joint, unit_axes, tip_from_flange, **rest)

    @property
    def n(self) -> int:
        """Number of joints."""
        return len(self.joints)

    @property
    def joint_names(self) -> tuple[str, ...]:
        return tuple(joint.name for joint in self.joints)

    @cached_property
    def limit_kinds(self) -> tuple[str, ...]:
        """What each row of the limits counts in: "revolute" (rad) or "prismatic" (m).

        "" for a row that sums joints of both kinds where its limits don't say.
        """
        kinds: list[str] = list(self.limits.kinds)
        for row in self.limits.matrix[len(kinds) :]:
            involved = {joint.kind for joint, share in zip(self.joints, row, strict=True) if share != 0.0}
            kinds.append(str(involved.pop()) if len(involved) == 1 else "")
        return tuple(kinds)

    def equipped(self, *, tool: Tool | str | None = None, payload: Payload | str | None = None) -> Arm:
        """The same arm carrying another tool and payload. None or "none": the bare mechanical interface, no payload.

        Raises InputError, naming those there are, for a name that the arm does not know.
        """
        carried = self._known("tool", self.tools, tool) if isinstance(tool, str) else tool
        held = self._known("payload", self.payloads, payload) if isinstance(payload, str) else payload
        return replace(self, tool=carried or BARE, payload=held)

    def _known(self, kind: str, things: Mapping[str, Any], name: str) -> Any:
        if name == NOTHING:
            return None
        if name not in things:
            there = ", ".join(f'"{key}"' for key in things) or "none"
            raise InputError(f'{self.name}: unknown {kind} "{name}", there is {there}')
        return things[name]

    def forward(self, q: Any) -> Array:
        """Tool pose base_from_tool (..., 4, 4) of joint positions q (..., n) in rad and m."""
        return kinematics.forward(self, q)

    def jacobian(self, q: Any) -> Array:
        """Jacobian (..., 6, n) at the tool centre point: rows linear x y z, angular x y z, in the base
        frame."""
        return kinematics.jacobian(self, q)

    def base_from_joint(self, name: str, q: Any) -> Array:
        """(..., 4, 4) moving frame of the named joint at joint positions q (..., n); only those count that move it."""
        if name not in self.joint_names:
            raise InputError(f'{self.name}: unknown joint "{name}", there is {", ".join(self.joint_names)}')
        return kinematics.joint_frame(self, self.joint_names.index(name), q)

    def inverse(self, pose: Any, outside: Any = None) -> Array:
        """Every joint vector (k, n) that puts the tool at `pose`, within the position limits, turn
        equivalents included.

        `pose`: base_from_tool, a 4x4 rigid transform or a spatialmath SE3. `outside` (n,): where joints stand that
        don't carry the tool; NaN in the answers if not given. Ordered by branch (see `inverse_batch`), then by joint
        values. Every answer is verified through `forward` to 1e-9 m and 1e-9 rad; on an arm with fewer than six axes
        the components it does not serve are judged against 0.001 deg. A joint without limits answers in (-pi, pi].
        An arm with more than six axes has answers without end: up to 16 are given, from all over the range of its
        free joints (`inverse_free` gives all for values of your choice). Raises InputError for what is no rigid
        transform, and UnreachableError, saying how far off the best answer is, which component the arm does not
        serve, or which joint limit excludes every branch.
        """
        from pathplan.arm.inverse import inverse

        return inverse(self, pose, outside)

    def inverse_batch(self, poses: Any, outside: Any = None) -> Branches:
        """All branches for poses (N, 4, 4), position limits left aside: see
        `pathplan.arm.inverse.inverse_batch`."""
        from pathplan.arm.inverse import inverse_batch

        return inverse_batch(self, poses, outside)

    def inverse_free(self, poses: Any, joints: Any, values: Any) -> Branches:
        """All branches with some joints held at given values: how the free coordinate of an arm with more than six
        axes is chosen.

        Parameters: poses (N, 4, 4); joints, a name, an index or a list of them, among `tool_joints`, so many that six
        or fewer are left (`free_joints` suggests some); values (M,) for one joint, (M, k) for k, or (N, M, k), others
        at each pose. Returns `Branches` with q (N, M, B, n), valid and errors (N, M, B); the held joints carry their
        values, which may lie outside their limits. For one value the branch index follows the poses as in
        `inverse_batch`: always where `free_solver(joints).typical.steady`, else within the call, while it can be
        told. Raises InputError for wrong shapes, unknown joints, or joints that don't move the tool.

        Held at the base or tool end of the chain (a track, a turntable: see `seen_from`; `with_tool_roll`) all N M
        poses are one batch; otherwise every value costs about a millisecond, then some microseconds a pose and branch.
        """
        from pathplan.arm.redundant import inverse_free

        return inverse_free(self, poses, joints, values)

    def free_solver(self, joints: Any) -> FreeSolver:
        """What `inverse_free` solves with: its `typical` solver tells structure, method, labels and `steady`."""
        from pathplan.arm.redundant import FreeSolver, held_joints

        held = held_joints(self, joints)
        if held not in self._free_solvers:
            self._free_solvers[held] = FreeSolver(self, held)
        return self._free_solvers[held]

    @cached_property
    def revolute(self) -> Mask:
        """(n,) which joints turn; the others slide."""
        mask = np.array([joint.kind == "revolute" for joint in self.joints])
        mask.flags.writeable = False
        return mask

    @cached_property
    def _free_solvers(self) -> dict[tuple[int, ...], FreeSolver]:
        return {}

    @cached_property
    def free_joints(self) -> tuple[str, ...]:
        """Joints that an arm with more than six axes best leaves free, by name; none for six or fewer.

        A track or the joint of a turning workpiece first, then those that leave axes with a closed form.
        """
        from pathplan.arm.redundant import suggested

        return suggested(self)

    def seen_from(self, joint: str) -> Arm:
        """The arm as seen from the moving frame of a joint that carries a workpiece (a turntable).

        It has the same joint vector, limits and tools; `forward`, `jacobian`, `inverse_free` and the rest give
        poses and motions of the tool in that frame. `tool_joints` then has the workpiece's joints as well, and
        `free_joints` names them first. It has no link data: torque is asked of the arm itself, with the same q.
        Raises InputError for an unknown joint and for one that carries the tool.
        """
        from pathplan.arm.relative import seen_from

        return seen_from(self, joint)

    def with_tool_roll(self) -> Arm:
        """The arm with one more joint, "tool roll", an endless turn about the z axis of its tool, which nothing limits.

        For tools that don't care how they are turned about their axis: six axes become seven with the roll free, five
        become six, which serve a position and the direction of the tool's z axis. It has no link data, tools or
        payloads of its own; joint vectors of the arm itself are its first n columns.
        """
        from pathplan.arm.relative import with_tool_roll

        return with_tool_roll(self)

    def torque(self, q: Any, qd: Any, qdd: Any) -> Array:
        """Joint torques (N, n), N m or N, with gravity, friction, drives, the tool and the payload.

        q, qd, qdd (N, n). Raises InputError if the arm file gives no link masses.
        """
        from pathplan.arm.dynamics import torque

        return torque(self, q, qd, qdd)

    def toolbox(self) -> Any:
        """The same arm, tool included, as a new roboticstoolbox DHRobot, for notebooks. Slow to import
        (seconds)."""
        from pathplan.arm.dynamics import toolbox

        return toolbox(self)

    @cached_property
    def chain(self) -> kinematics.Chain:
        """Constants of the kinematic walk, tool included."""
        tip_from_tool = self.tip_from_flange @ self.tool.flange_from_tool
        kinds = tuple(joint.kind for joint in self.joints)
        return kinematics.Chain.build(kinds, self.parents, self.parent_from_joint, self.axes, self.tip, tip_from_tool)

    @cached_property
    def separate_chains(self) -> tuple[tuple[list[int], Arm], ...]:
        """The chains that stand on the base, with their joints' indices: see `pathplan.arm.dynamics`."""
        from pathplan.arm.dynamics import separate_chains

        return separate_chains(self)

    @cached_property
    def rigid_body(self) -> tuple[Any, bool]:
        """The toolbox robot behind `torque`, built once: see `pathplan.arm.dynamics.build_rigid_body`."""
        from pathplan.arm.dynamics import build_rigid_body

        return build_rigid_body(self)

    @property
    def tool_joints(self) -> tuple[int, ...]:
        """Indices of the joints between base and tool, in their order; the others (a turntable) don't move the tool."""
        return self.chain.path

    @cached_property
    def solver(self) -> Solver:
        """What solves the inverse of the joints between base and tool."""
        from pathplan.arm.solver import solver_of
        from pathplan.arm.structure import geometry_of

        return solver_of(geometry_of(self), self.search_range[list(self.tool_joints)])

    @property
    def search_range(self) -> Array:
        """(n, 2) travels of prismatic joints, the characteristic length either way where they are endless."""
        limits = np.array([joint.position for joint in self.joints])
        return np.where(np.isfinite(limits).all(axis=1)[:, None], limits, [[-self.length, self.length]])

    @property
    def structure(self) -> Structure:
        """What the axes make of the arm, recognised from their geometry."""
        return self.solver.structure

    @property
    def steady_branches(self) -> bool:
        """The branch index of `inverse_batch` follows a path by itself, in whatever batch of poses."""
        return self.solver.steady

    @cached_property
    def serves(self) -> frozenset[str]:
        """Components of a pose change that the arm can follow in general position.

        Names from "x", "y", "z", "rotation about x", "rotation about y", "rotation about z" (base frame);
        all six for an arm with six or more independent axes.
        """
        from pathplan.arm.structure import served_components

        return served_components(self)

    @cached_property
    def serves_pointing(self) -> bool:
        """Position and direction of the tool's z axis are served in general position, whatever its roll about it."""
        from pathplan.arm.structure import serves_pointing

        return serves_pointing(self)

    @cached_property
    def length(self) -> float:
        """Characteristic length, m, always above 0: it makes angles and distances comparable.

        Half of the largest span of the joints between base and tool: half the length of the stretched-out chain from
        the first of them to the mechanical interface, travels of prismatic joints included (not of those that carry a
        whole arm of six axes or more, a track); of a gantry, half the diagonal of its travel. 1 m where neither gives
        a length.
        """
        if self.own_length is not None:
            return self.own_length
        path = list(self.tool_joints)
        while len(path) > 6 and self.joints[path[0]].kind == "prismatic":
            path.pop(0)
        slides = [i for i in path if self.joints[i].kind == "prismatic"]
        travels = np.diff([self.joints[i].position for i in slides]).ravel() if slides else np.zeros(0)
        travel = travels[np.isfinite(travels)]
        if self._three_slides(path):
            span = float(np.sqrt(np.sum(travel**2)))
        else:
            fixed = [*self.parent_from_joint[path[1:], :3, 3], self.tip_from_flange[:3, 3]]
            span = float(np.sum(np.linalg.norm(fixed, axis=1)) + np.sum(travel))
        return span / 2.0 if span > 1e-6 else 1.0

    def _three_slides(self, path: Sequence[int]) -> bool:
        """Three prismatic joints that move in independent directions."""
        frames, axes = np.eye(3), []
        for i in path:
            frames = frames @ self.parent_from_joint[i, :3, :3]
            if self.joints[i].kind == "prismatic":
                axes.append(frames @ self.axes[i])
        return len(axes) == 3 and bool(abs(np.linalg.det(axes)) > 1e-3)

    def __getstate__(self) -> dict[str, Any]:
        state = {key: value for key, value in self.__dict__.items() if key not in LIBRARY_OBJECTS}
        for name in ("tools", "payloads", "sources", "positions"):
            state[name] = dict(state[name])
        return state

    def __setstate__(self, state: dict[str, Any]) -> None:
        for name, value in state.items():
            mapping = name in ("tools", "payloads", "sources", "positions")
            object.__setattr__(self, name, MappingProxyType(value) if mapping else value)

    def __repr__(self) -> str:
        return f"<Arm {self.name}: {self.n} joints, {self.structure}, tool {self.tool.name}>"
