"""The numeric contract of a plan, on every example, judged without our own audit.

Positions are taken from the CSV as text, limits from the arm's joints, lines from the task's own poses.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.planning import Plan
from pathplan.timeline import evaluate

EXAMPLES = sorted((Path(__file__).parent.parent / "examples").glob("*.toml"))
THINNER = {"loader4-stack-tiles": ("count = [3, 4, 5]", "count = [2, 1, 2]")}  # fewer rounds, to spare time
UNIT = {"revolute": (180 / np.pi, "deg"), "prismatic": (1000.0, "mm")}


@pytest.fixture(scope="module", params=EXAMPLES, ids=lambda file: file.stem)
def plan(request, tmp_path_factory) -> Plan:
    file = request.param
    if file.stem in THINNER:
        old, new = THINNER[file.stem]
        text = file.read_text(encoding="utf-8")
        assert text.count(old) == 1
        text = text.replace(old, new).replace('"../robots', f'"{(file.parents[1] / "robots").as_posix()}')
        file = tmp_path_factory.mktemp("thinner") / file.name
        file.write_text(text, encoding="utf-8")
    return pathplan.plan(pathplan.load_task(file))


def written_positions(plan: Plan, folder: Path) -> np.ndarray:
    """Joint positions in mm and deg as they stand in the file."""
    file = folder / "table.csv"
    pathplan.write_table(plan.rows(700), file)
    with file.open(newline="") as stream:
        rows = csv.reader(line for line in stream if not line.startswith("#"))
        header = next(rows)
        columns = [header.index(f"{joint.name}_{UNIT[joint.kind][1]}") for joint in plan.task.arm.joints]
        return np.array([[float(row[k]) for k in columns] for row in rows])


def test_differences_of_the_written_positions_keep_the_limits(plan, tmp_path):
    position, cycle, joints = written_positions(plan, tmp_path), plan.task.cycle, plan.task.arm.joints
    assert len(position) == plan.ticks + 1
    padded = np.concatenate([np.repeat(position[:1], 4, axis=0), position, np.repeat(position[-1:], 4, axis=0)])
    for k, joint in enumerate(joints):
        unit = UNIT[joint.kind][0]
        rounding = np.spacing(np.abs(position[:, k]).max())
        for n, limit in enumerate((joint.velocity, joint.acceleration, joint.jerk), start=1):
            seen = np.abs(np.diff(padded[:, k], n)).max() / cycle**n
            assert seen <= limit * unit * (1 + 1e-6) + 8 * rounding / cycle**n, (joint.name, n)


def test_the_trajectory_between_the_rows_keeps_the_limits(plan):
    joints = plan.task.arm.joints
    for part in plan.parts:
        if part.timing is None:
            continue
        t = np.arange(0.0, part.timing.duration, plan.task.cycle / 20)
        values = part.timing.derivatives(t)
        for derivative, name in enumerate(("position", "velocity", "acceleration", "jerk")):
            for k, joint in enumerate(joints):
                limit = getattr(joint, name)
                low, high = limit if name == "position" else (-limit, limit)
                seen = values[derivative][:, k]
                assert low * (1 + 1e-6) - 1e-9 <= seen.min(), (joint.name, name)
                assert seen.max() <= high * (1 + 1e-6) + 1e-9, (joint.name, name)


def test_every_stretch_rests_at_its_ends_and_the_last_row_is_the_goal(plan):
    table = plan.table
    for part in plan.parts:
        for row in (part.first, part.last):
            assert not table.velocity[row].any() and not table.acceleration[row].any()
    last = plan.task.steps[-1].target
    assert last is not None
    if last.joints is not None:
        np.testing.assert_allclose(table.position[-1], last.joints, atol=1e-12)
    else:
        target = plan.task.pose(last, table.position[-1])
        columns = [2, 3] if plan.task.steps[-1].roll_free else [0, 1, 2, 3]  # the tool's own axis alone
        np.testing.assert_allclose(table.pose[-1][:, columns], target[:, columns], atol=2e-7)


def test_lines_are_followed_to_a_micrometre_and_a_microradian(plan):
    """Rows and instants between them, outside corners, against the line between the poses of the task."""
    task, checked = plan.task, 0
    stretches = [part for part in plan.parts if part.stretch is not None]
    corners = [(c.stretch, c.s_from, c.s_to) for c in plan.path.corners if c.kind == "fly-by"]
    for number, part in enumerate(stretches):
        local = np.arange(0.0, part.timing.duration, task.cycle / 2)
        rows = evaluate(part, local, len(task.arm.joints))
        free = np.ones(len(local), dtype=bool)
        for stretch, begin, end in corners:
            free &= (stretch != number) | (rows.s < begin) | (rows.s > end)
        for step in task.steps:
            here = free & (rows.step == step.index)
            begin = _pose_before(task, step)
            if step.motion != "line" or not here.any() or begin is None:
                continue
            joint, carrier_from_frame = task.carrier_from_frame(step.target.frame)
            end = carrier_from_frame @ step.target.frame_from_tool
            along = end[:3, 3] - begin[:3, 3]
            pose = part.stretch.arm.forward(rows.position[here])
            if joint is not None:  # a line on a workpiece that turns
                pose = np.linalg.inv(task.arm.base_from_joint(joint, rows.position[here])) @ pose
            offset = pose[:, :3, 3] - begin[:3, 3]
            if np.linalg.norm(along) > 1e-6:
                direction = along / np.linalg.norm(along)
                across = offset - np.outer(offset @ direction, direction)
                assert np.linalg.norm(across, axis=1).max() <= 1e-6
                share = (offset @ direction) / np.linalg.norm(along)
                assert share.min() >= -1e-6 and share.max() <= 1 + 1e-6
                if step.roll_free:
                    _check_axis(pose, begin, end, share)
                else:
                    _check_orientation(pose, begin, end, share, step.orientation_tolerance or step.tilt)
                checked += 1
    assert checked or all(step.motion != "line" for step in task.steps)


def _pose_before(task, step):
    """Tool pose at which a step begins, None after an arc by centre, a joint vector, and with another tool."""
    before = next((s for s in reversed(task.steps[: step.index]) if s.motion != "wait"), None)
    if before is None:
        return task.arm.forward(task.start)
    if task.carrier(before) != task.carrier(step):
        return None
    target = before.target
    if target is None or target.frame_from_tool is None or before.tool != step.tool:
        return None
    return task.carrier_from_frame(target.frame)[1] @ target.frame_from_tool


def _check_axis(pose, begin, end, share):
    """The tool's axis runs evenly on the great circle between the two asked; its roll is free."""
    one, two = begin[:3, 2], end[:3, 2]
    angle = np.arccos(np.clip(one @ two, -1.0, 1.0))
    weights = np.stack([1.0 - share, share]) if angle < 1e-7 else np.sin([angle * (1 - share), angle * share])
    axis = weights.T @ [one, two]
    axis /= np.linalg.norm(axis, axis=1, keepdims=True)
    assert np.linalg.norm(pose[:, :3, 2] - axis, axis=1).max() <= 2e-6


def _check_orientation(pose, begin, end, share, tolerance):
    """Orientation runs evenly on the shortest rotation, within what the step tolerates: scipy's Slerp."""
    from scipy.spatial.transform import Rotation, Slerp

    asked = Slerp([0.0, 1.0], Rotation.from_matrix([begin[:3, :3], end[:3, :3]]))(np.clip(share, 0, 1))
    assert (asked.inv() * Rotation.from_matrix(pose[:, :3, :3])).magnitude().max() <= tolerance + 2e-6


def test_motion_is_near_the_best_possible(plan):
    assert plan.bounds.sum() <= plan.motion_time
    assert plan.bound <= plan.duration


def test_pieces_make_the_whole_table(plan):
    pieces = list(plan.rows(333))
    for name in ("time", "position", "velocity", "acceleration", "jerk", "torque", "step", "pose", "tool_speed"):
        whole = getattr(plan.table, name)
        if whole is None:
            assert all(getattr(piece, name) is None for piece in pieces)
        else:
            np.testing.assert_array_equal(np.concatenate([getattr(piece, name) for piece in pieces]), whole)


def test_the_audit_passes(plan):
    assert plan.audit.passed, [finding.text for finding in plan.audit.findings]
