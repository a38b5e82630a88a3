"""Plans: ticks, waits, marks, pace, caps, and what the table says of them."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.timeline import ticks_of

ROOT = Path(__file__).parent.parent
TASK = """
title = "two tiles"
arm = "{arm}"
cycle = "4 ms"
start = "home"
return = true

[[step]]
motion = "joint"
to = {{ joints = [300, 200, -100, 40] }}
blend = "30 mm"
mark = "passing"

[[step]]
motion = "joint"
to = {{ joints = [600, 100, -200, 0] }}
mark = "there"

[[step]]
wait = "10.5 ms"
mark = "closed"
"""


@pytest.fixture
def task(tmp_path) -> pathplan.Task:
    file = tmp_path / "two.toml"
    file.write_text(TASK.format(arm=(ROOT / "robots" / "loader4.toml").as_posix()))
    return pathplan.load_task(file)


def test_waits_and_marks_round_up_to_ticks(task):
    plan = pathplan.plan(task)
    first, wait, back = plan.parts
    assert (wait.last - wait.first) * task.cycle == pytest.approx(0.012)
    assert first.last == wait.first and wait.last == back.first and back.last == plan.ticks
    assert 0 <= first.last * task.cycle - first.timing.duration < task.cycle
    marks = {mark.name: mark for mark in plan.marks}
    assert [mark.name for mark in plan.marks] == ["passing", "there", "closed"]
    assert marks["there"].row == first.last and marks["closed"].row == wait.last
    assert 0 < marks["passing"].row < first.last
    corner = plan.path.corners[0]
    middle = first.timing.parameter(np.array([(marks["passing"].row - 1) * 0.004, marks["passing"].row * 0.004]))
    assert middle[0] < (corner.s_from + corner.s_to) / 2 <= middle[1]
    assert all(mark.time == plan.table.time[mark.row] for mark in plan.marks)
    assert plan.waiting_time == pytest.approx(0.012)
    assert plan.duration == pytest.approx(plan.ticks * 0.004)


def test_rows_carry_their_step(task):
    plan = pathplan.plan(task)
    step = plan.table.step
    assert list(np.unique(step)) == [0, 1, 2, 3] and np.all(np.diff(step) >= 0)
    assert (step == 2).sum() == 3
    waiting = step == 2
    assert not plan.table.velocity[waiting].any()
    goal = task.steps[1].target.joints
    np.testing.assert_allclose(plan.table.position[waiting], np.tile(goal, (3, 1)), atol=1e-15)


def test_pace_slows_the_whole_trajectory(task):
    """Pace k: speeds by k, accelerations by k^2, jerks by k^3 (Biagiotti & Melchiorri 2008, sec. 5.2)."""
    full, half = pathplan.plan(task), pathplan.plan(replace(task, pace=0.5))
    assert half.motion_time == pytest.approx(2 * full.motion_time, rel=1e-12)
    assert half.waiting_time == full.waiting_time
    t = np.linspace(0, full.timings[0].duration, 101)
    for derivative, (fast, slow) in enumerate(
        zip(full.timings[0].derivatives(t), half.timings[0].derivatives(2 * t), strict=True)
    ):
        np.testing.assert_allclose(slow, fast * 0.5**derivative, atol=1e-8 * np.abs(fast).max())


@pytest.mark.parametrize("pace", [0.0, -1.0, 1.5])
def test_bad_pace(task, pace):
    with pytest.raises(pathplan.InputError, match="pace: expected more than 0 and at most 1, got"):
        pathplan.plan(replace(task, pace=pace))


def test_a_cap_on_the_tool_holds_everywhere(task):
    plan = pathplan.plan(replace(task, speed=0.25))
    assert plan.table.tool_speed.max() <= 0.25 * (1 + 1e-6)
    assert plan.table.tool_speed.max() > 0.2499
    moved = np.linalg.norm(np.diff(plan.table.pose[:, :3, 3], axis=0), axis=1) / task.cycle
    assert moved.max() <= 0.25 * (1 + 1e-6)


def test_the_same_task_gives_the_same_table(task):
    one, other = pathplan.plan(task).table, pathplan.plan(task).table
    for name in ("time", "position", "velocity", "acceleration", "jerk", "pose"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_progress_is_told(task):
    told = []
    pathplan.plan(task, progress=lambda what, done, total: told.append((what, done, total)))
    assert told[0][:2] == ("path", 0) and told[-1] == ("timing", 2, 2)


def test_ticks():
    assert [ticks_of(t, 0.004) for t in (0.0, 1e-6, 0.004, 0.0040000001, 0.012)] == [0, 1, 1, 2, 3]


def test_rows_refuses_a_chunk_of_nothing(task):
    with pytest.raises(pathplan.InputError, match="expected a positive number of rows a chunk, got 0"):
        next(pathplan.plan(task).rows(0))


def test_torque_follows_what_is_carried():
    """Bare to the tile, with it to the car, bare again: by pinocchio below, by the arm itself here."""
    plan = pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml"))
    table, arm = plan.table, plan.task.arm
    assert arm.payload is None and plan.task.payloads == ("tile",)
    for step, payload in ((1, None), (2, "tile"), (4, "tile"), (7, None), (8, None)):
        rows = np.flatnonzero(table.step == step)[1:]  # the row on which two steps meet is of the earlier
        carrying = arm.equipped(tool="cup", payload=payload)
        asked = carrying.torque(table.position[rows], table.velocity[rows], table.acceleration[rows])
        np.testing.assert_allclose(table.torque[rows], asked, atol=1e-12)
