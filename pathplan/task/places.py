"""The places of a task: nested frames, named poses, patterns and curves, and targets made from them.

Frames and poses that hang on a pattern move with it: they mean something only where a step repeats the pattern, at the
place it is at. `Places.at` gives the places as they are there. A file that is included has places of its own, moved as
a whole (`Places.under`). Either way a target ends up in a frame that the task itself knows: `Places.settled`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.task.curves import read_curve, read_taught
from pathplan.task.joints import check_positions, joint_vector
from pathplan.task.model import Curve, Frame, Target, Taught
from pathplan.task.patterns import Pattern, read_pattern
from pathplan.tomlfile import Problems, Table, listed, nearest, read_only
from pathplan.units import toml_text

__all__ = ["Places", "check_positions", "joint_vector", "read_places"]

Array = NDArray[np.float64]
ORIENTATION_OF_AN_ARC = (
    "only the position of a via point counts: "
    "the orientation of an arc runs on the shortest rotation from start to target"
)


IDENTITY = read_only(np.eye(4))
"""The `frame_from_here` of a frame that the task itself knows, and of no other."""


@dataclass(frozen=True)
class Tie:
    """Where a frame stands: in a frame that the task knows, and in the base frame or that of a joint carrying it."""

    frame: str
    frame_from_here: Array  # (4, 4)
    base_from_here: Array  # (4, 4)
    joint: str | None = None  # that carries it: "base" is then that joint's moving frame


@dataclass(frozen=True)
class Places:
    """Everything of a task file that has a name and a place."""

    arm: Arm
    frames: Mapping[str, Frame]  # all but those that hang on a pattern
    poses: Mapping[str, Target]
    patterns: Mapping[str, Pattern] = field(default_factory=dict)
    curves: Mapping[str, Curve] = field(default_factory=dict)
    taught: Mapping[str, Taught] = field(default_factory=dict)
    moving: Mapping[str, tuple[str, Array]] = field(default_factory=dict)  # frame -> its pattern, pattern_from_frame
    ties: Mapping[str, Tie] = field(default_factory=dict)  # of every frame that stands somewhere now
    here: Mapping[str, Target] = field(default_factory=dict)  # what a step repeats, at the place it is at

    @cached_property
    def branch_words(self) -> dict[str, tuple[str, ...]]:
        """The words of each part of a configuration that the arm's branches tell apart."""
        words: dict[str, dict[str, None]] = {}
        for label in _branch_labels(self.arm):
            for part, word in label.items():
                words.setdefault(part, {})[word] = None
        return {part: tuple(options) for part, options in words.items()}

    def at(self, name: str, target: Target) -> Places:
        """The places while `name` means this target, with all that hangs on it."""
        ties = dict(self.ties)
        if target.joints is None:
            assert target.frame_from_tool is not None
            to_place = np.eye(4)
            to_place[:3, 3] = target.frame_from_tool[:3, 3]
            ties[name] = _tied(self.ties[target.frame], to_place)
            for frame, (pattern, pattern_from_frame) in self.moving.items():
                if pattern == name:
                    ties[frame] = _tied(ties[name], pattern_from_frame)
        return self._changed(ties=ties, here={**self.here, name: target})

    def under(self, tie: Tie) -> Places:
        """The places of a file that is included, its base frame moved to where `tie` says."""
        ties = {name: _tied(tie, own.base_from_here) for name, own in self.ties.items()}
        return self._changed(ties=ties)

    def carrying(self, arm: Arm) -> Places:
        """The places as another tool sees them."""
        if arm is self.arm:
            return self
        if arm not in self._seen:
            self._seen[arm] = self._changed(arm=arm)
        return self._seen[arm]

    @cached_property
    def _seen(self) -> dict[Arm, Places]:
        """The places as seen with other tools."""
        return {}

    def _changed(self, **changes: Any) -> Places:
        other = replace(self, **changes)
        if "branch_words" in self.__dict__:  # the tool has no part in them
            other.__dict__["branch_words"] = self.branch_words
        return other

    def names(self) -> Iterable[str]:
        """Everything that a step could go to."""
        ends = [f"{name}.{end}" for name in (*self.curves, *self.taught) for end in ("start", "end")]
        return (*self.here, *self.poses, *self.arm.positions, *self.patterns, *ends)

    def target(self, table: Table, key: str) -> Target:
        """The target under a key: the name of a pose or arm position, or a table with a pose or joints.

        In the frame it is given in, which may hang on a pattern: `settled` before it goes into a step.
        """
        value = table.take(key)
        if isinstance(value, str):
            return self.named(value, table.at(key))
        if not isinstance(value, dict):
            raise table.error(key, f"expected the name of a pose or a table with one, got {toml_text(value)}")
        inline = table.table(key)
        target = read_target(inline, self.arm)
        if target.joints is None:
            self.tie(target.frame, inline.at("frame"))
        inline.finish()
        return target

    def point(self, table: Table, key: str) -> tuple[Array, Tie]:
        """A point under a key: (3,) in the base frame, and where the frame stands that it was given in."""
        value = table.take(key)
        if isinstance(value, str):
            target = self.named(value, table.at(key))
            return read_only(self.base_from_tool(target)[:3, 3].copy()), self.tie(target.frame, table.at(key))
        if not isinstance(value, dict):
            raise table.error(key, f"expected the name of a pose or a table with xyz, got {toml_text(value)}")
        inline = table.table(key)
        tie = self.tie(inline.text("frame", "base"), inline.at("frame"))
        xyz = inline.position("xyz")
        if key == "via":
            for orientation in ("rpy", "quat"):
                if inline.has(orientation):
                    raise inline.error(orientation, ORIENTATION_OF_AN_ARC)
        inline.finish()
        return read_only(tie.base_from_here[:3, :3] @ xyz + tie.base_from_here[:3, 3]), tie

    def tie(self, name: str, where: str) -> Tie:
        """Where a frame stands. Raises InputError for one that is not there, or moves with a pattern elsewhere."""
        if name in self.ties:
            return self.ties[name]
        self._refuse_elsewhere(name, f"frame {toml_text(name)}", where)
        raise InputError.at(where, f"no frame {toml_text(name)} in [frames]{nearest(name, self.ties)}")

    def _refuse_elsewhere(self, frame: str, what: str, where: str) -> None:
        """Raise InputError if a frame is, or moves with, a pattern that no step around repeats."""
        pattern = frame if frame in self.patterns else self.moving.get(frame, ("",))[0]
        if pattern:
            moves = "is a pattern" if pattern == frame else f"moves with pattern {toml_text(pattern)}"
            raise InputError.at(where, f"{what} {moves}, expected inside a step that repeats it")

    def settled(self, target: Target) -> Target:
        """The same target in a frame that the task knows."""
        if target.frame_from_tool is None:
            return target
        tie = self.ties[target.frame]
        if tie.frame_from_here is IDENTITY:
            return target
        return replace(target, frame=tie.frame, frame_from_tool=read_only(tie.frame_from_here @ target.frame_from_tool))

    def base_from_tool(self, target: Target) -> Array:
        """(4, 4) of a target, in the frame of the joint that carries it, if one does; of a joint vector through
        forward kinematics.
        """
        if target.joints is not None:
            return read_only(self.arm.forward(target.joints))
        assert target.frame_from_tool is not None
        return read_only(self.ties[target.frame].base_from_here @ target.frame_from_tool)

    def named(self, name: str, where: str) -> Target:
        """The pose, place, arm position, or end of a curve of that name."""
        target = self.here.get(name) or self.poses.get(name)
        if target is None and name in self.arm.positions:
            target = Target(joints=self.arm.positions[name])
        if target is None:
            target = self._end_of(name)
        if target is None:
            if name in self.patterns:
                self._refuse_elsewhere(name, toml_text(name), where)
            hint = nearest(name, self.names())
            raise InputError.at(where, f"no pose {toml_text(name)} in [poses]{hint}")
        if target.joints is None and target.frame not in self.ties:
            what = toml_text(name) if target.frame in self.moving else f"{toml_text(name)} stands in a place that"
            self._refuse_elsewhere(target.frame, what, where)
        return target

    def _end_of(self, name: str) -> Target | None:
        path, _, end = name.rpartition(".")
        if end not in ("start", "end"):
            return None
        if path in self.curves:
            curve = self.curves[path]
            return Target(frame=curve.frame, frame_from_tool=curve.pose(end=end == "end"))
        if path in self.taught:
            return Target(joints=read_only(self.taught[path].points[-1 if end == "end" else 0].copy()))
        return None


def _branch_labels(arm: Arm) -> tuple[Mapping[str, str], ...]:
    if arm.free_joints:
        return arm.free_solver(arm.free_joints).typical.labels
    return arm.inverse_batch(arm.forward(arm.positions["home"])[None]).labels


def _tied(tie: Tie, here_from_there: Array) -> Tie:
    """Where something stands that stands in a frame of this tie."""
    frame_from_there, base_from_there = (m @ here_from_there for m in (tie.frame_from_here, tie.base_from_here))
    return Tie(tie.frame, read_only(frame_from_there), read_only(base_from_there), tie.joint)


def read_places(root: Table, arm: Arm, problems: Problems, folder: Path) -> tuple[Places, dict[str, str]]:
    """Read [frames], [poses], [patterns], [curves] and [taught], and the files they name from `folder`.

    Problems inside are gathered, and the places they spoil are left out. The second part: SHA-256 by file name.
    """
    tables = root.named_tables("patterns")
    frames = _read_frames(root, arm, tables, problems)
    problems.check()  # what is said of nested frames below holds only for frames that were read
    resolved = resolve_frames(frames, root.file, tuple(tables))
    moving = {name: place for name, place in resolved.items() if place[0] != "base"}
    still = {name: frame for name, frame in frames.items() if name not in moving}
    known = {**resolved, **{name: (name, np.eye(4)) for name in tables}}
    ties = {
        name: Tie(name, IDENTITY, base_from_frame, _carrier(frames, name))
        for name, (root_name, base_from_frame) in resolved.items()
        if root_name == "base"
    }
    poses = _read_poses(root, arm, known, problems)
    taken = {**dict.fromkeys(poses, "pose"), **dict.fromkeys(arm.positions, "position of the arm")}
    patterns: dict[str, Pattern] = {}
    for name, table in tables.items():
        with problems.gather():
            _check_name(name, taken, table)
            frame = known_frame(table, known)
            if frame == name:
                raise table.error("frame", "a pattern can't stand in itself")
            patterns[name] = read_pattern(name, table, frame)
            table.finish()
    curves: dict[str, Curve] = {}
    taught: dict[str, Taught] = {}
    sources: dict[str, str] = {}
    for key in ("curves", "taught"):
        for name, table in root.named_tables(key).items():
            with problems.gather():
                _check_name(name, taken, table)
                if key == "curves":
                    curves[name], points = read_curve(name, table, folder, arm, known_frame(table, known))
                else:
                    taught[name], points = read_taught(name, table, folder, arm)
                table.finish()
                taken[name] = key
                sources[table.data["points"]] = points.digest
    return Places(arm, still, poses, patterns, curves, taught, moving, ties), sources


def _carrier(frames: Mapping[str, Frame], name: str) -> str | None:
    """The joint that carries a frame, None if it rests."""
    while name != "base":
        if frames[name].joint is not None:
            return frames[name].joint
        name = frames[name].parent
    return None


def _read_frames(root: Table, arm: Arm, patterns: Mapping[str, Any], problems: Problems) -> dict[str, Frame]:
    frames: dict[str, Frame] = {}
    for name, table in root.named_tables("frames").items():
        with problems.gather():
            if name == "base":
                complaint = "base is the name of the arm's own frame, expected another name"
                raise InputError.at(table.where, complaint)
            if name in patterns:
                raise InputError.at(table.where, "a pattern has that name, expected another name")
            joint = _read_carrier(table, arm)
            parent = table.text("parent", "base")
            frames[name] = Frame(name, parent, table.pose(position=False), joint)
            table.finish()
    return frames


def _read_carrier(table: Table, arm: Arm) -> str | None:
    """Key `joint` of a frame: the joint of the arm file that carries it."""
    name: str | None = table.text("joint", None)
    if name is None:
        return None
    if table.has("parent"):
        raise table.error("joint", "given together with parent, expected one of them")
    carriers = [joint.name for i, joint in enumerate(arm.joints) if i not in arm.tool_joints]
    if name in carriers:
        return name
    there = f"expected {listed(carriers)}" if carriers else f"arm {arm.name} has no joint that carries a workpiece"
    if name in arm.joint_names:
        raise table.error("joint", f"joint {toml_text(name)} moves the tool; {there}")
    raise table.error("joint", f"no joint {toml_text(name)}; {there}")


def _read_poses(root: Table, arm: Arm, known: Mapping[str, Any], problems: Problems) -> dict[str, Target]:
    poses: dict[str, Target] = {}
    for name, table in root.named_tables("poses").items():
        with problems.gather():
            if name in arm.positions:
                complaint = f"arm {arm.name} has a position of that name, expected another name"
                raise InputError.at(table.where, complaint)
            target = read_target(table, arm)
            if target.joints is None:
                known_frame(table, known)
            poses[name] = target
            table.finish()
    return poses


def _check_name(name: str, taken: Mapping[str, str], table: Table) -> None:
    if name == "base":
        raise InputError.at(table.where, "base is the name of the arm's own frame, expected another name")
    if name in taken:
        raise InputError.at(table.where, f"a {taken[name]} has that name, expected another name")


def resolve_frames(
    frames: Mapping[str, Frame], file: str, patterns: Iterable[str] = ()
) -> dict[str, tuple[str, Array]]:
    """What every frame hangs on, "base" or a pattern, and (4, 4) root_from_frame.

    Refuses unknown parents and cycles, naming the cycle.
    """
    resolved: dict[str, tuple[str, Array]] = {"base": ("base", np.eye(4))}
    roots = {name: (name, np.eye(4)) for name in patterns}
    for first in frames:
        chain: dict[str, None] = {}
        name = first
        while name not in resolved and name not in roots:
            if name not in frames:
                child = next(reversed(chain))
                hint = nearest(name, ["base", *frames, *roots])
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
            root, root_from_parent = resolved.get(frames[name].parent) or roots[frames[name].parent]
            resolved[name] = root, root_from_parent @ frames[name].parent_from_frame
    return resolved


def known_frame(table: Table, frames: Mapping[str, Any]) -> str:
    """The name of a frame under the key "frame"; "base" where it is missing."""
    name: str = table.text("frame", "base")
    if name not in frames:
        raise table.error("frame", f"no frame {toml_text(name)} in [frames]{nearest(name, frames)}")
    return name


def read_target(table: Table, arm: Arm) -> Target:
    """A pose (frame, xyz, rpy or quat) or a joint vector (joints) from a table; its frame is not looked up."""
    if table.has("joints"):
        for key in ("frame", "xyz", "rpy", "quat"):
            if table.has(key):
                raise table.error(key, "given together with joints, expected a pose or a joint vector")
        return Target(joints=joint_vector(table, "joints", arm))
    return Target(frame=table.text("frame", "base"), frame_from_tool=table.pose())
