"""The places of a task: nested frames, named poses, joint vectors, and targets made from them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.task.model import Frame, Target
from pathplan.tomlfile import Problems, Table, nearest, read_only
from pathplan.units import format_quantity, joint_dimension, toml_text

__all__ = ["Places", "check_positions", "joint_vector", "read_places"]

Array = NDArray[np.float64]
_POSE_KEYS = ("frame", "xyz", "rpy", "quat", "joints")
ORIENTATION_OF_AN_ARC = (
    "only the position of a via point counts: "
    "the orientation of an arc runs on the shortest rotation from start to target"
)


@dataclass(frozen=True)
class Places:
    """Everything of a task that has a name and a place."""

    arm: Arm
    frames: Mapping[str, Frame]
    poses: Mapping[str, Target]
    base_from_frame: dict[str, Array] = field(default_factory=dict)  # (4, 4) of every frame, "base" included

    @cached_property
    def branch_words(self) -> dict[str, tuple[str, ...]]:
        """The words of each part of a configuration that the arm's branches tell apart."""
        words: dict[str, dict[str, None]] = {}
        for label in self.arm.inverse_batch(self.arm.forward(self.arm.positions["home"])[None]).labels:
            for part, word in label.items():
                words.setdefault(part, {})[word] = None
        return {part: tuple(options) for part, options in words.items()}

    def target(self, table: Table, key: str) -> Target:
        """The target under a key: the name of a pose or arm position, or a table with a pose or joints."""
        value = table.take(key)
        if isinstance(value, str):
            return self._named(table, key, value)
        if not isinstance(value, dict):
            raise table.error(key, f"expected the name of a pose or a table with one, got {toml_text(value)}")
        inline = table.table(key)
        target = read_target(inline, self.arm, self.base_from_frame)
        inline.finish()
        return target

    def point(self, table: Table, key: str) -> tuple[Array, str]:
        """A point under a key: (3,) in the base frame, and the name of the frame it was given in."""
        value = table.take(key)
        if isinstance(value, str):
            target = self._named(table, key, value)
            return read_only(self.base_from_tool(target)[:3, 3]), target.frame
        if not isinstance(value, dict):
            raise table.error(key, f"expected the name of a pose or a table with xyz, got {toml_text(value)}")
        inline = table.table(key)
        frame = frame_name(inline, "frame", self.base_from_frame)
        xyz = inline.position("xyz")
        if key == "via":
            for orientation in ("rpy", "quat"):
                if inline.has(orientation):
                    raise inline.error(orientation, ORIENTATION_OF_AN_ARC)
        inline.finish()
        base_from_frame = self.base_from_frame[frame]
        return read_only(base_from_frame[:3, :3] @ xyz + base_from_frame[:3, 3]), frame

    def base_from_tool(self, target: Target) -> Array:
        """(4, 4) of a target at rest; of a joint vector through forward kinematics."""
        if target.joints is not None:
            return read_only(self.arm.forward(target.joints))
        assert target.frame_from_tool is not None
        return read_only(self.base_from_frame[target.frame] @ target.frame_from_tool)

    def _named(self, table: Table, key: str, name: str) -> Target:
        if name in self.poses:
            return self.poses[name]
        if name in self.arm.positions:
            return Target(joints=self.arm.positions[name])
        hint = nearest(name, [*self.poses, *self.arm.positions])
        raise table.error(key, f"no pose {toml_text(name)} in [poses]{hint}")


def read_places(root: Table, arm: Arm, problems: Problems) -> Places:
    """Read [frames] and [poses]; problems inside are gathered, and the places they spoil are left out."""
    frames: dict[str, Frame] = {}
    for name, table in root.named_tables("frames").items():
        with problems.gather():
            if name == "base":
                complaint = "base is the name of the arm's own frame, expected another name"
                raise InputError.at(table.where, complaint)
            parent = table.text("parent", "base")
            frames[name] = Frame(name, parent, table.pose(position=False))
            table.finish()
    problems.check()  # what is said of nested frames below holds only for frames that were read
    base_from_frame = resolve_frames(frames, root.file)
    poses: dict[str, Target] = {}
    for name, table in root.named_tables("poses").items():
        with problems.gather():
            if name in arm.positions:
                complaint = f"arm {arm.name} has a position of that name, expected another name"
                raise InputError.at(table.where, complaint)
            poses[name] = read_target(table, arm, base_from_frame)
            table.finish()
    return Places(arm, frames, poses, base_from_frame)


def resolve_frames(frames: Mapping[str, Frame], file: str) -> dict[str, Array]:
    """(4, 4) base_from_frame of every frame; refuses unknown parents and cycles, naming the cycle."""
    resolved: dict[str, Array] = {"base": np.eye(4)}
    for first in frames:
        chain: dict[str, None] = {}
        name = first
        while name not in resolved:
            if name not in frames:
                child = next(reversed(chain))
                hint = nearest(name, ["base", *frames])
                complaint = f"no frame {toml_text(name)} in [frames]{hint}"
                raise InputError.at(file, f"frames.{child}.parent", complaint)
            if name in chain:
                names = list(chain)
                cycle = [*names[names.index(name) :], name]
                shown = " -> ".join(cycle if len(cycle) < 8 else [*cycle[:6], "...", name])
                raise InputError.at(file, f"frames.{name}.parent", f"frames in a cycle: {shown}")
            chain[name] = None
            name = frames[name].parent
        for name in reversed(chain):
            resolved[name] = resolved[frames[name].parent] @ frames[name].parent_from_frame
    return resolved


def frame_name(table: Table, key: str, frames: Mapping[str, Any]) -> str:
    """The name of a frame under a key; "base" where it is missing."""
    name: str = table.text(key, "base")
    if name not in frames:
        raise table.error(key, f"no frame {toml_text(name)} in [frames]{nearest(name, frames)}")
    return name


def read_target(table: Table, arm: Arm, frames: Mapping[str, Any]) -> Target:
    """A pose (frame, xyz, rpy or quat) or a joint vector (joints) from a table."""
    if table.has("joints"):
        for key in ("frame", "xyz", "rpy", "quat"):
            if table.has(key):
                raise table.error(key, "given together with joints, expected a pose or a joint vector")
        return Target(joints=joint_vector(table, "joints", arm))
    return Target(frame=frame_name(table, "frame", frames), frame_from_tool=table.pose())


def joint_vector(table: Table, key: str, arm: Arm) -> Array:
    """(n,) joint vector under a key, deg and mm in the file, SI here; refused outside the position limits."""
    dimensions = [joint_dimension(joint.kind, "position") for joint in arm.joints]
    joints: Array = table.mixed_vector(key, dimensions, noun="joint positions")
    check_positions(joints, arm, table.at(key))
    return joints


def check_positions(joints: Array, arm: Arm, where: str) -> None:
    """Refuse a joint vector (n,) outside the position limits, naming row, value and limits."""
    rows = arm.limits.matrix @ joints
    low, high = arm.limits.position[:, 0], arm.limits.position[:, 1]
    slack = 1e-12 * np.maximum(1.0, np.abs(rows))  # a limit itself, converted from deg, is inside
    outside = (rows < low - slack) | (rows > high + slack)
    for row in np.flatnonzero(outside):
        dimension = _row_dimension(arm, int(row))
        value, *limits = (format_quantity(float(v), dimension, 6) for v in (rows[row], low[row], high[row]))
        name = arm.limits.names[row]
        raise InputError.at(
            where,
            f"joint {name} at {value}, expected from {limits[0]} to {limits[1]}",
            data={"joint": name, "value": float(rows[row]), "limit": (float(low[row]), float(high[row]))},
        )


def _row_dimension(arm: Arm, row: int) -> str:
    kinds = {arm.joints[column].kind for column in np.flatnonzero(arm.limits.matrix[row])}
    return joint_dimension(kinds.pop(), "position") if len(kinds) == 1 else "number"
