"""The example tasks: they load, and all of them can be followed well away from limits and singularities."""

from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import PPoly
from scipy.spatial.transform import Rotation, Slerp

from pathplan.arm.kinematics import smallest_singular_value
from pathplan.task import load_task

FOLDER = Path(__file__).parents[2] / "examples"
EXAMPLES = sorted(FOLDER.glob("*.toml"))
READ = {  # beside the task and the arm
    "glazer6-basin-rim": ["parts/rim.csv"],
    "glazer6-board-of-tiles": ["parts/bead.toml"],
    "glazer6-kiln-mouth": ["parts/hop.csv"],
}


def moves(task):
    """(step, start pose, end pose) of every step with a pose to go to; None where an arc goes its own way."""
    arm, pose = task.arm, task.arm.forward(task.start)
    for step in task.steps:
        if step.motion == "wait":
            continue
        if step.tool != arm.tool.name:  # another tool centre point, at the same flange
            pose = pose @ np.linalg.inv(arm.tool.flange_from_tool)
            arm = arm.equipped(tool=step.tool)
            pose = pose @ arm.tool.flange_from_tool
        start = pose
        if step.target is None:
            turn = Rotation.from_rotvec(step.axis * step.angle).as_matrix()
            pose = pose.copy()
            pose[:3, 3] = step.centre + turn @ (start[:3, 3] - step.centre)
            assert not step.along, "the test below keeps the orientation on an arc"
        elif step.target.joints is not None:
            pose = arm.forward(step.target.joints)
        else:
            pose = task.pose(step.target)
        yield step, start, pose


def samples(step, start, end, base_from_curve=None, count=60):
    """(count, 4, 4) poses along a line, an arc about a centre or a curve; only the end of anything else."""
    share = np.linspace(0.0, 1.0, count)
    poses = np.tile(end, (count, 1, 1))
    if step.motion == "line":
        poses[:, :3, 3] = start[:3, 3] + share[:, None] * (end - start)[:3, 3]
        ends = Rotation.from_matrix([start[:3, :3], end[:3, :3]])
        poses[:, :3, :3] = Slerp([0.0, 1.0], ends)(share).as_matrix()
    elif step.target is None:
        turns = Rotation.from_rotvec(step.axis * (step.angle * share)[:, None])
        poses[:, :3, 3] = step.centre + turns.apply(start[:3, 3] - step.centre)
    elif step.motion == "curve":
        curve = PPoly(np.concatenate([step.curve.position, step.curve.quaternion], axis=2), step.curve.breaks)
        x = curve(share * step.curve.breaks[-1])
        own = np.tile(np.eye(4), (count, 1, 1))
        own[:, :3, 3] = x[:, :3]
        own[:, :3, :3] = Rotation.from_quat(x[:, 3:], scalar_first=True).as_matrix()
        poses = base_from_curve @ own
    else:
        poses = poses[-1:]
    return poses


def test_there_is_one_of_each_kind():
    assert [path.name for path in EXAMPLES] == [
        "glazer6-basin-rim.toml",
        "glazer6-bead.toml",
        "glazer6-board-of-tiles.toml",
        "glazer6-change-tools.toml",
        "glazer6-kiln-mouth.toml",
        "glazer6-one-line.toml",
        "glazer6-past-the-wrist.toml",
        "glazer6-pick-and-place.toml",
        "glazer6-rosettes.toml",
        "loader4-belt-to-car.toml",
        "loader4-stack-tiles.toml",
        "sorter4-sort-tiles.toml",
        "sorter4-spline-tray.toml",
        "stacker6-four-boxes.toml",
        "stacker7-along-the-belt.toml",
    ]


# What a stacker's spare axis is to do is chosen in planning, and one example runs through a singularity on purpose:
# `tests/test_contract.py` judges what comes of it.
@pytest.mark.parametrize(
    "path", [e for e in EXAMPLES if "stacker" not in e.stem and "past" not in e.stem], ids=lambda path: path.stem
)
def test_every_step_has_a_branch_with_room_to_spare(path):
    task = load_task(path)
    assert set(task.sources) == {path.name, task.arm.file.name, *READ.get(path.stem, [])}
    arm = task.arm
    low, high = np.array([joint.position for joint in arm.joints]).T
    spare = np.array([np.deg2rad(10) if joint.kind == "revolute" else 0.02 for joint in arm.joints])
    for step, start, end in moves(task):
        if step.target is not None and step.target.joints is not None:
            continue
        placed = None
        if step.curve is not None:
            placed = task.base_from_frame(step.target.frame) @ step.frame_from_curve
        arm = task.arm.equipped(tool=step.tool)
        branches = arm.inverse_batch(samples(step, start, end, placed))
        good = []
        for k, label in enumerate(branches.labels):
            if not branches.valid[:, k].all() or not step.configuration.items() <= label.items():
                continue
            q = np.unwrap(branches.q[:, k], axis=0) if len(branches.q) > 1 else branches.q[:, k]
            inside = np.all((q > low + spare) & (q < high - spare))
            if inside and smallest_singular_value(arm, q).min() > 0.2:
                good.append(label)
        assert good, f"{step.where} ({step.name})"


def test_the_marks_of_a_task_differ_within_a_round():
    for path in EXAMPLES:
        marks = [(step.mark, step.where.partition(" ")[2]) for step in load_task(path).steps if step.mark]
        assert len(marks) >= (2 if path.stem != "glazer6-one-line" else 0)
        assert len(set(marks)) == len(marks)


def test_the_bead_ends_where_it_begins_and_keeps_its_speed():
    task = load_task(FOLDER / "glazer6-bead.toml")
    bead = [(step, end) for step, _, end in moves(task) if step.held_speed == pytest.approx(0.12)]
    begin = task.pose(task.steps[2].target)
    assert len(bead) == 9
    assert bead[-1][1] == pytest.approx(begin, abs=1e-12)
    before = begin
    for (side, corner), (arc, end) in zip(bead[:-1:2], bead[1::2], strict=True):
        assert (side.motion, arc.motion) == ("line", "arc")
        out = corner[:3, 3] - arc.centre
        forward = corner[:3, 3] - before[:3, 3]
        assert np.linalg.norm(out) == pytest.approx(0.03)
        # The arc leaves along axis x radius, which must be where the side was going.
        assert np.cross(arc.axis, out) / 0.03 == pytest.approx(forward / np.linalg.norm(forward), abs=1e-12)
        before = end
