"""From a task file to a `Task`: everything resolved, checked and in SI.

A task file (TOML; numbers in mm, deg, s, mm/s, mm/s^2, or strings with a unit) says:

    title    what the task is                        arm      the arm file, relative to this file
    cycle    of the controller, "4 ms"               tool, payload    names of the arm's, carried from the start
    start    joint positions, or the name of an arm position or joint pose
    return   false; true or "joint", "line": the motion back to the start at the end
    speed, acceleration, turning_speed      caps on the tool for the whole task ("250 mm/s", "2 m/s^2", "90 deg/s");
                             of a step's own and these the lower holds

    [frames.NAME]   parent (default "base"; a frame, or a pattern), xyz, rpy or quat: a workpiece frame in its parent;
                    or joint in place of parent: a joint of the arm file that carries it (a turntable), which then
                    moves in step with the arm, and lines to poses in the frame are lines on the workpiece
    [poses.NAME]    frame (default "base"), xyz, rpy or quat: a tool pose; or joints
    [patterns.NAME] the same pose at many places: `pathplan.task.patterns`
    [curves.NAME], [taught.NAME]    paths through the points of a file: `pathplan.task.curves`
    [[step]]        one line of the task, in order:
        motion      "joint", "line", "arc", "curve" or "taught"
        to          the name of a pose, arm position, end of a curve or taught path ("NAME.start", "NAME.end"), a
                    pattern that is repeated, or a table like one of [poses]
        offset      { frame = [x, y, z], tool = [x, y, z], rpy or quat }: moves the target along the axes of
                    its frame, then along those of the tool, then turns it about those of the tool
        via         arc: a point on the way to `to`, the name of a pose or { frame, xyz }
        centre, axis, angle   arc in place of via and to: about a point (like via) and a direction in its
                    frame, by a signed angle up to ten turns; tool_along = true: the tool turns with it
        along       curve, taught: the NAME of its path, which starts where the step before ends
        blend       size of the corner region at the end: "20 mm", "10 deg", "15 %"; without it a stop point
        speed, acceleration, turning_speed      caps on the tool
        held_speed            line, arc, curve: the tool speed that a process needs, constant; caps the tool, and the
                              audit says over which part of the step it was held and what stopped it elsewhere
        configuration         { shoulder, elbow, wrist }: words for the branch at the target
        orientation_tolerance    line, arc, curve of an arm with a spherical wrist: "2 deg" that the tool may leave its
                    orientation where a singularity would hold it up; at its targets and in corners it never does
        tilt        the same of the tool's z axis alone: the tool does not turn about it
        axes        { NAME = value }: where an axis that the pose leaves free stands at the end (a turntable, a track,
                    a seventh axis); it moves there evenly along the step. Not given: an axis that carries a workpiece
                    rests while the tool is not on it, any other is chosen for the shortest time
        roll        "free": the turn of the tool about its own z axis is not asked, neither on the way nor at the end
                    (a suction cup, a drill, a nozzle), and chosen for the shortest time; five axes, which have no
                    choice, follow lines with it if no step to a pose asks for a roll. Default "fixed"
        tool, payload         carried from this step on, "none" for nothing: the arm stops before it
        name, mark            for people: the step, and the instant at which it ends
        wait        in a step of its own (name, mark, tool, payload beside it): rest for this time
        repeat, as, with, [[step.step]], include, frame     steps for many steps: `pathplan.task.sequence`
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm, load_arm
from pathplan.task.joints import check_positions, joint_vector
from pathplan.task.model import Motion, Step, Task
from pathplan.task.places import Places, read_places
from pathplan.task.sequence import Reader, carried
from pathplan.task.steps import read_caps, step_to_start
from pathplan.tomlfile import Problems, Table, read_toml
from pathplan.units import toml_text

__all__ = ["CYCLES", "load_task"]

Array = NDArray[np.float64]
CYCLES = (50e-6, 1.0)
"""Shortest and longest cycle that a controller is taken to have, s."""


def load_task(file: str | Path, *, arm: Arm | None = None) -> Task:
    """Load a task file, the arm file it names, and the files that it includes.

    Args:
        file: a TOML file; its `arm` is a path relative to the file's own folder.
        arm: taken in place of the arm file (the key `arm` is then not read from disk).

    Returns:
        The task in SI: repeats unrolled, offsets applied, via points, centres and axes in the base frame, the arm
        carrying the first step's tool and payload. `return` has become a last step. `sources` has the SHA-256 of
        what was read.

    Raises:
        InputError: the file or a key is not what it must be; one line names file, key and what was expected.
            `problems` lists all that was found.
    """
    file = Path(file)
    data, digest = read_toml(file)
    problems = Problems()
    root = Table(data, file.name, problems=problems)
    title = root.text("title", file.stem)
    arm = _arm(root, file) if arm is None else arm
    root.has("arm")
    arms: dict[tuple[str, str | None], Arm] = {}
    arm = carried(root, arm, arms)
    cycle = _cycle(root)
    caps = read_caps(root)
    motion_back = _return(root)
    places, sources = read_places(root, arm, problems, file.parent)
    with problems.gather():
        start = _start(root, arm, places)
    root.has("step")
    root.finish()
    problems.check()  # a step that names a spoilt pose would only repeat the complaint
    reader = Reader(arm, problems, sources=sources)
    reader.read(root, file, places, caps, returns=motion_back is not None)
    problems.check()
    steps = reader.steps
    if motion_back is not None:
        around = places.carrying(reader.arm)
        steps.append(step_to_start(motion_back, len(steps), root.file, start, around, caps))
    first = steps[0]
    return Task(
        title=title,
        file=file,
        arm=arm if _carries(arm, first) else arm.equipped(tool=first.tool, payload=first.payload),
        start=start,
        steps=tuple(steps),
        cycle=cycle,
        frames=places.frames,
        speed=caps.speed,
        turning_speed=caps.turning_speed,
        sources={**arm.sources, file.name: digest, **reader.sources},
    )


def _carries(arm: Arm, step: Step) -> bool:
    return (arm.tool.name, arm.payload.name if arm.payload is not None else None) == (step.tool, step.payload)


def _arm(root: Table, file: Path) -> Arm:
    name = root.text("arm")
    path = file.parent / name
    if path.is_dir():
        raise root.error("arm", f"{toml_text(name)} is a directory, expected an arm file")
    if not path.exists():
        raise root.error("arm", f"no such file {toml_text(name)}")
    return load_arm(path)


def _cycle(root: Table) -> float:
    cycle: float = root.quantity("cycle", "time")
    if not CYCLES[0] <= cycle <= CYCLES[1]:
        raise root.error("cycle", f"expected a time from 50 us to 1 s, got {toml_text(root.data['cycle'])}")
    return cycle


def _start(root: Table, arm: Arm, places: Places) -> Array:
    """The joint vector the task starts from: a list, or the name of an arm position or joint pose."""
    value: Any = root.take("start")
    if not isinstance(value, str):
        return joint_vector(root, "start", arm)
    target = places.named(value, root.at("start"))
    if target.joints is None:
        raise root.error("start", f"{toml_text(value)} is a tool pose, expected joint positions or their name")
    check_positions(target.joints, arm, root.at("start"))
    return target.joints


def _return(root: Table) -> Motion | None:
    """The motion back to the start, None if the task ends where its last step does."""
    value = root.take("return", False)
    if isinstance(value, bool):
        return "joint" if value else None
    if value in ("joint", "line"):
        return "joint" if value == "joint" else "line"
    raise root.error("return", f'expected true, false, "joint" or "line", got {toml_text(value)}')
