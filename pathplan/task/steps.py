"""Reading the steps of a task: what one [[step]] may say, and what it means."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.task.model import Blend, Motion, Step, Target
from pathplan.task.places import Places
from pathplan.tomlfile import Problems, Table, listed, nearest, read_only
from pathplan.units import DIMENSIONS, format_quantity, toml_text

__all__ = ["MAX_STEPS", "MAX_WAIT", "MOTIONS", "Caps", "read_caps", "read_steps", "step_to_start"]

Array = NDArray[np.float64]
MAX_STEPS = 100_000
MAX_WAIT = 3600.0  # s
MOTIONS: tuple[Motion, ...] = ("joint", "line", "arc")
MOVING_KEYS = ("motion", "to", "offset", "blend", "speed", "acceleration", "configuration")
ARC_KEYS = ("via", "centre", "axis", "angle", "tool_along")
STEP_KEYS = ("name", "mark", "wait", *MOVING_KEYS, *ARC_KEYS)
CONFIGURATION = {
    "shoulder": ("left", "right"),
    "elbow": ("up", "down", "left", "right"),
    "wrist": ("positive", "negative"),
}
"""The words for a branch of the inverse; which of them an arm knows, its branch labels say."""

# Below these a plan would need more rows than any file holds; they are a slip of the unit.
_LEAST = {"length": 1e-6, "angle": 1e-5, "ratio": 1e-4, "speed": 1e-5, "acceleration": 1e-4}
_MOST_ANGLE = np.deg2rad(3600.0)


@dataclass(frozen=True)
class Caps:
    """Tool speed (m/s) and acceleration (m/s^2) a step keeps to; None: no cap."""

    speed: float | None = None
    acceleration: float | None = None

    def within(self, other: Caps) -> Caps:
        """The lower of each."""
        return Caps(_lower(self.speed, other.speed), _lower(self.acceleration, other.acceleration))


def read_steps(
    root: Table, places: Places, caps: Caps, problems: Problems, *, returns: bool
) -> tuple[Step, ...]:
    """All steps of a task. `caps`: the task's own; `returns`: a way back to the start follows the last."""
    tables = root.tables("step")
    if not tables:
        raise root.error("step", "expected at least one step [[step]], got none")
    if len(tables) > MAX_STEPS:
        raise root.error("step", f"expected at most {MAX_STEPS} steps, got {len(tables)}")
    steps = []
    for index, (table, following) in enumerate(zip(tables, [*tables[1:], None], strict=True)):
        with problems.gather():
            steps.append(read_step(table, index, places, caps))
            table.finish()
            _check_stop(table, following, returns=returns)
    if not problems.found and all(step.motion == "wait" for step in steps):
        raise root.error("step", "expected at least one step that moves, got only waits")
    return tuple(steps)


def read_step(table: Table, index: int, places: Places, caps: Caps) -> Step:
    """One step, resolved: SI, points and directions in the base frame, offsets applied."""
    step = Step(
        index=index,
        motion="wait",
        where=table.where,
        name=table.text("name", ""),
        mark=table.text("mark", None),
        tool=places.arm.tool.name,
        payload=places.arm.payload.name if places.arm.payload is not None else None,
    )
    if table.has("wait"):
        return replace(step, wait=_wait(table))
    if not table.has("motion"):
        raise _neither_motion_nor_wait(table)
    motion: Motion = table.choice("motion", MOTIONS)
    _only_for_arcs(table, motion)
    own = read_caps(table).within(caps)
    step = replace(
        step,
        motion=motion,
        blend=read_blend(table),
        speed=own.speed,
        acceleration=own.acceleration,
        configuration=read_configuration(table, places),
    )
    if motion == "arc" and table.has("centre"):
        return replace(step, **_centre_arc(table, places))
    for key in ARC_KEYS[2:]:
        if table.has(key):
            raise table.error(key, f"{key} goes with centre, which is missing")
    target = _shifted(table, "offset", places.target(table, "to"))
    if target.joints is not None and step.configuration:
        raise table.error("configuration", "the target is a joint vector, which leaves nothing to choose")
    if motion != "joint":
        target = with_pose(target, places)
    via = places.point(table, "via")[0] if motion == "arc" else None
    return replace(step, target=target, via=via)


def step_to_start(motion: Motion, index: int, file: str, start: Array, places: Places, caps: Caps) -> Step:
    """The step back to the start that `return` asks for."""
    target = Target(joints=start)
    return Step(
        index=index,
        motion=motion,
        where=f"{file}: return",
        name="return to start",
        target=target if motion == "joint" else with_pose(target, places),
        speed=caps.speed,
        acceleration=caps.acceleration,
        tool=places.arm.tool.name,
        payload=places.arm.payload.name if places.arm.payload is not None else None,
    )


def with_pose(target: Target, places: Places) -> Target:
    """The same target; a joint vector also gets the tool pose (in the base frame) that it means."""
    if target.joints is None:
        return target
    return replace(target, frame="base", frame_from_tool=places.base_from_tool(target))


def read_caps(table: Table) -> Caps:
    """Keys `speed` and `acceleration`: caps on the tool, of a step or of the whole task."""
    return Caps(_at_least(table, "speed", "speed"), _at_least(table, "acceleration", "acceleration"))


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


def _wait(table: Table) -> float:
    for key in table.data:
        if key not in ("wait", "mark", "name"):
            complaint = "this step is a wait, which takes only mark and name beside it"
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


def _only_for_arcs(table: Table, motion: Motion) -> None:
    for key in ARC_KEYS:
        if table.has(key) and motion != "arc":
            raise table.error(key, f'only an arc takes {key}, this motion is "{motion}"')
    if motion == "arc" and table.has("via") == table.has("centre"):
        got = "got both" if table.has("via") else "got neither"
        raise table.error("motion", f"an arc takes via and to, or centre, axis and angle, {got}")


def _centre_arc(table: Table, places: Places) -> dict[str, Any]:
    for key in ("to", "offset"):
        if table.has(key):
            raise table.error(key, "an arc by its centre ends where its angle says, expected no target")
    centre, frame = places.point(table, "centre")
    axis = table.vector("axis", 3, "number")
    largest = float(np.max(np.abs(axis)))
    if largest == 0.0:
        raise table.error("axis", "expected a direction, got [0, 0, 0]")
    axis = places.base_from_frame[frame][:3, :3] @ (axis / largest)  # scaled first: its square can't overflow
    angle = table.quantity("angle", "angle")
    if not _LEAST["angle"] <= abs(angle) <= _MOST_ANGLE:
        got = toml_text(table.data["angle"])
        raise table.error("angle", f"expected an angle other than zero up to 3600 deg either way, got {got}")
    axis = read_only(axis / np.linalg.norm(axis))
    return {"centre": centre, "axis": axis, "angle": angle, "along": table.flag("tool_along", False)}


def _shifted(table: Table, key: str, target: Target) -> Target:
    """The target moved along the axes of its frame, then along and about those of the tool."""
    offset = table.table(key, None)
    if offset is None:
        return target
    if target.frame_from_tool is None:
        raise table.error(key, "the target is a joint vector, expected a pose to offset")
    in_frame, in_tool = np.eye(4), np.eye(4)
    in_frame[:3, 3] = offset.position("frame", np.zeros(3))
    in_tool[:3, 3] = offset.position("tool", np.zeros(3))
    rotation = offset.rotation()
    if rotation is not None:
        in_tool[:3, :3] = rotation
    if not offset.data:
        raise table.error(key, 'expected "frame", "tool" or "rpy", got an empty table')
    offset.finish()
    return replace(target, frame_from_tool=read_only(in_frame @ target.frame_from_tool @ in_tool))


def _check_stop(table: Table, following: Table | None, *, returns: bool) -> None:
    """Refuse a blend where the arm must stop."""
    if "blend" not in table.data:
        return
    if following is not None and "wait" in following.data:
        raise table.error("blend", f"{following.path} is a wait, so this step ends at a stop point")
    if following is None and not returns:
        raise table.error("blend", "the last step ends at a stop point")


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
    known, got = DIMENSIONS[dimension], toml_text(table.data.get(key))
    if value is not None and value <= 0.0:
        raise table.error(key, f"expected {known.expected}, got {got}")
    if value is not None and value < _LEAST[dimension]:
        least = format_quantity(_LEAST[dimension], dimension)
        raise table.error(key, f"expected {known.phrase} of at least {least}, got {got}")
    return value


def _lower(one: float | None, other: float | None) -> float | None:
    return min((value for value in (one, other) if value is not None), default=None)
