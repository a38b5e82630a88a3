"""Reading one step of a task: what a [[step]] that moves or waits may say, and what it means."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.errors import InputError
from pathplan.task.curves import read_offset
from pathplan.task.model import Blend, Curve, Motion, Step, Target, Taught
from pathplan.task.places import Places
from pathplan.tomlfile import Table, listed, nearest, read_only
from pathplan.units import DIMENSIONS, format_quantity, joint_dimension, toml_text

__all__ = ["MAX_WAIT", "MOTIONS", "STEP_KEYS", "Caps", "read_caps", "read_step", "step_to_start", "takes_tolerance"]

Array = NDArray[np.float64]
MAX_WAIT = 3600.0  # s
MOTIONS: tuple[Motion, ...] = ("joint", "line", "arc", "curve", "taught")
HOLDING: tuple[Motion, ...] = ("line", "arc", "curve")  # those that can hold a tool speed
CAP_KEYS = ("speed", "acceleration", "turning_speed")
MOVING_KEYS = ("motion", "to", "offset", "blend", *CAP_KEYS, "held_speed", "configuration", "axes", "roll")
TOLERANCES = ("orientation_tolerance", "tilt")
ARC_KEYS = ("via", "centre", "axis", "angle", "tool_along")
CARRYING_KEYS = ("tool", "payload")
STEP_KEYS = ("name", "mark", "wait", *CARRYING_KEYS, *MOVING_KEYS, *TOLERANCES, *ARC_KEYS, "along")
ROLLS = ("fixed", "free")
CONFIGURATION = {
    "shoulder": ("left", "right"),
    "elbow": ("up", "down", "left", "right"),
    "wrist": ("positive", "negative"),
}
"""The words for a branch of the inverse; which of them an arm knows, its branch labels say."""

# Below these a plan would need more rows than any file holds; they are a slip of the unit.
_LEAST = {"length": 1e-6, "angle": 1e-5, "ratio": 1e-4, "speed": 1e-5, "acceleration": 1e-4}
_LEAST["angular_speed"] = np.deg2rad(1e-3)
_MOST_TOLERANCE = float(np.deg2rad(30.0))
_MOST_ANGLE = np.deg2rad(3600.0)


@dataclass(frozen=True)
class Caps:
    """Tool speed (m/s), acceleration (m/s^2) and turning speed (rad/s) a step keeps to; None: no cap."""

    speed: float | None = None
    acceleration: float | None = None
    turning_speed: float | None = None

    def within(self, other: Caps) -> Caps:
        """The lower of each."""
        pairs = ((getattr(self, key), getattr(other, key)) for key in CAP_KEYS)
        return Caps(*(_lower(one, two) for one, two in pairs))


def read_step(table: Table, index: int, where: str, places: Places, caps: Caps) -> Step:
    """One step, resolved: SI, points and directions in the base frame, offsets applied.

    `places` are those seen with what the step carries; `where` names it in messages about the finished task.
    """
    arm = places.arm
    fields: dict[str, Any] = {
        "index": index,
        "where": where,
        "name": table.text("name", ""),
        "mark": table.text("mark", None),
        "tool": arm.tool.name,
        "payload": arm.payload.name if arm.payload is not None else None,
    }
    if table.has("wait"):
        return Step(motion="wait", wait=_wait(table), **fields)
    if not table.has("motion"):
        raise _neither_motion_nor_wait(table)
    motion: Motion = table.choice("motion", MOTIONS)
    _only_for(table, motion)
    own = read_caps(table)
    fields |= {"motion": motion, "blend": read_blend(table), **vars(own.within(caps))}
    fields["held_speed"] = _held_speed(table, own.speed, arm)
    fields["configuration"] = read_configuration(table, places)
    fields["axes"] = read_axes(table, places.arm)
    fields |= read_tolerance(table, motion, places.arm)
    fields["roll_free"] = table.choice("roll", ROLLS, ROLLS[0]) == ROLLS[1]
    if motion in ("curve", "taught"):
        return Step(**fields, **_along(table, motion, places))
    if motion == "arc" and table.has("centre"):
        return Step(**fields, **_centre_arc(table, places))
    for key in ARC_KEYS[2:]:
        if table.has(key):
            raise table.error(key, f"{key} goes with centre, which is missing")
    aimed = _shifted(table, "offset", places.target(table, "to"))
    target = places.settled(aimed)
    if target.joints is not None:
        _refuse_choices(table)
    if motion != "joint":
        target = with_pose(target, places)
    if motion != "arc":
        return Step(**fields, target=target)
    via, point_frame = _via(table, aimed, places)
    return Step(**fields, target=target, via=via, point_frame=point_frame)


def step_to_start(motion: Motion, index: int, file: str, start: Array, places: Places, caps: Caps) -> Step:
    """The step back to the start that `return` asks for."""
    target = Target(joints=start)
    return Step(
        index=index,
        motion=motion,
        where=f"{file}: return",
        name="return to start",
        target=target if motion == "joint" else with_pose(target, places),
        **vars(caps),
        tool=places.arm.tool.name,
        payload=places.arm.payload.name if places.arm.payload is not None else None,
    )


def with_pose(target: Target, places: Places) -> Target:
    """The same target; a joint vector also gets the tool pose (in the base frame) that it means."""
    if target.joints is None:
        return target
    return replace(target, frame="base", frame_from_tool=places.base_from_tool(target))


def read_caps(table: Table) -> Caps:
    """Keys `speed`, `acceleration` and `turning_speed`: caps on the tool, of a step or of the whole task."""
    dimensions = ("speed", "acceleration", "angular_speed")
    return Caps(*(_at_least(table, key, dimension) for key, dimension in zip(CAP_KEYS, dimensions, strict=True)))


def _held_speed(table: Table, cap: float | None, arm: Arm) -> float | None:
    """Key `held_speed`, refused where the step's own cap or that of its tool never lets the tool go so fast.

    Caps of the whole task are another matter: they come and go (a first run at reduced speed), and the audit says what
    they leave of it.
    """
    held = _at_least(table, "held_speed", "speed")
    caps = ((cap, "this step"), (arm.tool.speed, f"tool {arm.tool.name}"))
    for lowest, whose in caps:
        if held is not None and lowest is not None and lowest < held:
            fast, slow = (format_quantity(value, "speed") for value in (held, lowest))
            raise table.error("held_speed", f"{fast} can't be held, the speed of {whose} is capped at {slow}")
    return held


def read_blend(table: Table) -> Blend | None:
    """Key `blend`: a number (mm) or a length, an angle or a share with its unit; always above zero."""
    value = table.take("blend", None)
    if value is None:
        return None
    kind = _blend_kind(value)
    if kind is None:
        length, angle, share = (DIMENSIONS[name].expected for name in ("length", "angle", "ratio"))
        raise table.error("blend", f"expected {length}, {angle} or {share}, got {toml_text(value)}")
    size = _at_least(table, "blend", kind)
    assert size is not None
    if kind == "ratio" and size > 0.5:
        raise table.error("blend", f"expected a share of at most 50 %, got {toml_text(value)}")
    if kind == "ratio":
        return Blend("share", size, value.strip())
    text = value.strip() if isinstance(value, str) else f"{value:g} mm"
    return Blend("angle" if kind == "angle" else "length", size, text)


def read_configuration(table: Table, places: Places) -> dict[str, str]:
    """Key `configuration`: words for the branch asked at the target, among those of the arm's branches."""
    asked = table.table("configuration", None)
    if asked is None:
        return {}
    words: dict[str, str] = {}
    known = places.branch_words
    for part in asked.data:
        if part not in known:
            if part in CONFIGURATION:
                complaint = f"arm {places.arm.name} has no choice of {part}"
            else:
                complaint = f"expected {listed(list(CONFIGURATION))}{nearest(part, CONFIGURATION)}"
            raise asked.error(part, complaint)
        words[part] = asked.choice(part, known[part])
    return words


def takes_tolerance(arm: Arm) -> bool:
    """Whether a tolerance of the orientation can be made use of: six axes that end in a spherical wrist."""
    return arm.n == 6 and arm.structure == "spherical wrist"


def read_tolerance(table: Table, motion: Motion, arm: Arm) -> dict[str, float]:
    """Keys `orientation_tolerance` and `tilt`: how far the tool may leave its orientation, one of them at most."""
    asked = [key for key in TOLERANCES if table.has(key)]
    if not asked:
        return {}
    key = asked[-1]
    if len(asked) > 1:
        raise table.error(key, "expected either orientation_tolerance or tilt, got both")
    if motion not in HOLDING:
        raise table.error(key, f'only a line, an arc or a curve takes {key}, this motion is "{motion}"')
    if table.has("roll") and table.choice("roll", ROLLS) == "free":
        raise table.error(key, f'{key} goes with roll = "fixed", got "free"')
    if not takes_tolerance(arm):
        raise table.error(key, f"helps where six axes end in a spherical wrist, which arm {arm.name} has not")
    value = _at_least(table, key, "angle")
    assert value is not None
    if value > _MOST_TOLERANCE:
        most = format_quantity(_MOST_TOLERANCE, "angle")
        raise table.error(key, f"expected at most {most}, got {toml_text(table.data[key])}")
    return {key: value}


def read_axes(table: Table, arm: Arm) -> dict[str, float]:
    """Key `axes`: where joints that the tool pose leaves free stand at the end of the step, rad or m."""
    asked = table.table("axes", None)
    if asked is None:
        return {}
    free = [joint.name for i, joint in enumerate(arm.joints) if i not in arm.tool_joints] + list(arm.free_joints)
    if not free:
        raise table.error("axes", f"arm {arm.name} has no axis that a tool pose leaves free")
    found: dict[str, float] = {}
    for name in asked.data:
        if name not in free:
            raise asked.error(
                name, f"no axis that a tool pose leaves free, expected {listed(free)}{nearest(name, free)}"
            )
        joint = arm.joints[arm.joint_names.index(name)]
        dimension = joint_dimension(joint.kind, "position")
        value: float = asked.quantity(name, dimension)
        low, high = joint.position
        if not low - 1e-12 <= value <= high + 1e-12:
            limits = " to ".join(format_quantity(limit, dimension, 6) for limit in (low, high))
            raise asked.error(name, f"at {format_quantity(value, dimension, 6)}, expected from {limits}")
        found[name] = min(max(value, low), high)
    return found


def _refuse_choices(table: Table) -> None:
    """What a joint vector settles already."""
    for key in ("configuration", "axes", "roll"):
        if table.has(key):
            raise table.error(key, "the target is a joint vector, which leaves nothing to choose")


def _via(table: Table, target: Target, places: Places) -> tuple[Array, str]:
    """The point that an arc goes through, in the frame that carries its target, and the frame it was given in."""
    via, tie = places.point(table, "via")
    carrier = None if target.joints is not None else places.ties[target.frame].joint
    if tie.joint != carrier:
        there, here = (f'turns with joint "{name}"' if name else "rests" for name in (tie.joint, carrier))
        raise table.error("via", f"its frame {there} and that of the target {here}, expected one frame for both")
    return via, tie.frame


def _along(table: Table, motion: Motion, places: Places) -> dict[str, Any]:
    """The curve or taught path that a step follows, and where it ends."""
    for key in ("to", "offset"):
        if table.has(key):
            complaint = f'motion = "{motion}" ends where its points do, expected along = NAME and no target'
            raise table.error(key, complaint)
    name = table.text("along")
    there: Mapping[str, Curve | Taught] = places.curves if motion == "curve" else places.taught
    if name not in there:
        tables = "[curves]" if motion == "curve" else "[taught]"
        raise table.error("along", f"no path {toml_text(name)} in {tables}{nearest(name, there)}")
    path = there[name]
    if isinstance(path, Taught):
        _refuse_choices(table)
        return {"taught": path, "target": Target(joints=read_only(path.points[-1].copy()))}
    tie = places.tie(path.frame, table.at("along"))
    end = Target(frame=path.frame, frame_from_tool=path.pose(end=True))
    return {"curve": path, "frame_from_curve": tie.frame_from_here, "target": places.settled(end)}


def _wait(table: Table) -> float:
    for key in table.data:
        if key not in ("wait", "mark", "name", *CARRYING_KEYS):
            complaint = "this step is a wait, which takes only mark, name, tool and payload beside it"
            raise table.error(key, complaint)
    seconds: float = table.quantity("wait", "time", positive=True)
    if seconds > MAX_WAIT:
        most = format_quantity(MAX_WAIT, "time")
        raise table.error("wait", f"expected a time of at most {most}, got {toml_text(table.data['wait'])}")
    return seconds


def _neither_motion_nor_wait(table: Table) -> InputError:
    """The complaint about a step without both; a misspelt key is named."""
    for key in table.data:
        if key not in STEP_KEYS and nearest(key, STEP_KEYS):
            return table.error(key, f"unknown key{nearest(key, STEP_KEYS)}")
    return InputError.at(table.where, f"expected a motion ({listed(MOTIONS)}) or a wait, got neither")


def _only_for(table: Table, motion: Motion) -> None:
    """Refuse keys of other motions."""
    for key in ARC_KEYS:
        if table.has(key) and motion != "arc":
            raise table.error(key, f'only an arc takes {key}, this motion is "{motion}"')
    if table.has("along") and motion not in ("curve", "taught"):
        raise table.error("along", f'only a curve or a taught path takes along, this motion is "{motion}"')
    if table.has("held_speed") and motion not in HOLDING:
        raise table.error("held_speed", f'only {listed(HOLDING)} holds a tool speed, this motion is "{motion}"')
    if motion == "arc" and table.has("via") == table.has("centre"):
        got = "got both" if table.has("via") else "got neither"
        raise table.error("motion", f"an arc takes via and to, or centre, axis and angle, {got}")


def _centre_arc(table: Table, places: Places) -> dict[str, Any]:
    for key in ("to", "offset"):
        if table.has(key):
            raise table.error(key, "an arc by its centre ends where its angle says, expected no target")
    centre, tie = places.point(table, "centre")
    axis = table.vector("axis", 3, "number")
    largest = float(np.max(np.abs(axis)))
    if largest == 0.0:
        raise table.error("axis", "expected a direction, got [0, 0, 0]")
    axis = tie.base_from_here[:3, :3] @ (axis / largest)  # scaled first: its square can't overflow
    angle = table.quantity("angle", "angle")
    if not _LEAST["angle"] <= abs(angle) <= _MOST_ANGLE:
        got = toml_text(table.data["angle"])
        raise table.error("angle", f"expected an angle other than zero up to 3600 deg either way, got {got}")
    axis = read_only(axis / np.linalg.norm(axis))
    along = table.flag("tool_along", False)
    return {"centre": centre, "axis": axis, "angle": angle, "along": along, "point_frame": tie.frame}


def _shifted(table: Table, key: str, target: Target) -> Target:
    """The target moved along the axes of its frame, then along and about those of the tool."""
    offset = read_offset(table, key)
    if offset is None:
        return target
    if target.frame_from_tool is None:
        raise table.error(key, "the target is a joint vector, expected a pose to offset")
    in_frame, in_tool = offset
    return replace(target, frame_from_tool=read_only(in_frame @ target.frame_from_tool @ in_tool))


def _blend_kind(value: Any) -> str | None:
    """The dimension a blend is meant in, by its unit; None where it fits none."""
    if isinstance(value, int | float) and not isinstance(value, bool):
        return "length"
    if isinstance(value, str):
        for kind in ("length", "angle", "ratio"):
            if any(value.rstrip().endswith(unit) for unit in DIMENSIONS[kind].units):
                return kind
    return None


def _at_least(table: Table, key: str, dimension: str) -> float | None:
    """A quantity above zero and above what a slip of the unit would give; None where the key is missing."""
    value: float | None = table.quantity(key, dimension, None)
    if value is None or value >= _LEAST[dimension]:
        return value
    known, got = DIMENSIONS[dimension], toml_text(table.data[key])
    if value <= 0.0:
        raise table.error(key, f"expected {known.expected}, got {got}")
    least = format_quantity(_LEAST[dimension], dimension)
    raise table.error(key, f"expected {known.phrase} of at least {least}, got {got}")


def _lower(one: float | None, other: float | None) -> float | None:
    return min((value for value in (one, other) if value is not None), default=None)
