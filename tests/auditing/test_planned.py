"""What the plan adds: deviation, speeds, times, corners, the trajectory between rows."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.arm import Tool
from pathplan.auditing import (
    Evidence,
    audit,
    joint_peaks,
    path_deviation,
    tool_speed_by_step,
    worse_deviation,
    worse_peaks,
)
from pathplan.auditing.model import QUANTITIES
from pathplan.task.model import Step, Task
from tests.auditing.cast import made_arm


def moved_poses(angles, shifts):
    poses = np.tile(np.eye(4), (len(angles), 1, 1))
    poses[:, :3, :3] = Rotation.from_rotvec(np.outer(angles, [0.6, 0.0, 0.8])).as_matrix()
    poses[:, 0, 3] = shifts
    return poses


def test_path_deviation_is_good_near_nothing_and_near_half_a_turn():
    angles = np.array([0.0, 1e-7, 3e-12, 3.1415926, 9.0])
    shifts = np.array([0.0, 2e-7, 1e-3, 0.0, 9.0])
    known = np.array([True, True, True, True, False])
    base = moved_poses(np.full(5, 0.7), np.full(5, 0.2))
    actual = base @ moved_poses(angles, shifts)
    found = path_deviation(actual, base, known, np.arange(5) * 0.1, np.arange(5))
    assert found.position == pytest.approx(1e-3, rel=1e-9)
    assert (found.position_time, found.position_step) == (0.2, 2)
    assert found.angle == pytest.approx(3.1415926, abs=1e-9) and found.angle_step == 3 and found.count == 4
    small = path_deviation(actual[:2], base[:2], known[:2], np.arange(2.0), np.arange(2))
    assert small.angle == pytest.approx(1e-7, rel=1e-6) and small.position == pytest.approx(2e-7, rel=1e-6)
    assert worse_deviation(small, found) == replace(found, count=6)
    assert worse_deviation(None, small) == small == worse_deviation(small, None)
    assert path_deviation(actual, base, ~known & False, np.arange(5.0), np.arange(5)) is None


def test_speeds_by_step():
    speed = np.array([0.0, 0.5, 0.9995, 1.0, 0.2, 0.2, 0.1])
    step = np.array([0, 0, 0, 0, 1, 1, 2])
    found = tool_speed_by_step(speed, np.array([1.0, np.inf, 0.4]), step, np.full(7, 0.1))
    assert found == {
        0: (1.0, pytest.approx(0.2), pytest.approx(0.4)),
        1: (0.2, 0.0, pytest.approx(0.2)),
        2: (0.1, 0.0, pytest.approx(0.1)),
    }


def test_peaks_of_pieces_are_the_peaks_of_all(arm, calm_table):
    columns = {quantity: getattr(calm_table, quantity) for quantity in QUANTITIES}
    whole = joint_peaks(arm, calm_table.time, calm_table.step, **columns)
    pieces = ()
    for start in range(0, 751, 100):
        piece = calm_table.part(start, start + 100)
        mine = {quantity: getattr(piece, quantity) for quantity in QUANTITIES}
        pieces = worse_peaks(pieces, joint_peaks(arm, piece.time, piece.step, start, **mine))
    assert pieces == whole
    assert [joint.name for joint in whole] == ["lift", "swing", "bend", "shaft"]


def made_plan(arm, evidence=None, findings=(), corners=()):
    """A plan of three steps, of which the second is a wait."""

    def step(index, motion, name="", speed=None):
        return Step(index, motion, "", name=name, speed=speed, tool="none")

    steps = (step(0, "line", "bring", 0.5), step(1, "wait"), step(2, "joint", "return"))
    return SimpleNamespace(
        task=Task("", None, arm, np.zeros(3), steps, 0.004),
        path=SimpleNamespace(corners=corners, findings=findings),
        bound=2.9,
        evidence=evidence or Evidence(),
    )


@pytest.fixture
def table(calm_table):
    """Step 1 moves at 0.4 m/s and touches 0.5; from row 400 step 2 waits, from row 500 step 3 moves."""
    speed = np.full(751, 0.4)
    speed[100:201] = 0.5
    step = np.repeat([0, 1, 2], [400, 100, 251])
    return replace(calm_table, tool_speed=speed, step=step)


def test_times_speeds_and_names(arm, table):
    found = audit(table, arm, plan=made_plan(arm))
    assert found.passed and found.bound == 2.9
    assert found.waiting_time == pytest.approx(0.4) and found.motion_time == pytest.approx(2.6)
    assert [(s.step, s.name, s.asked, s.reached) for s in found.speeds] == [
        (0, "bring", 0.5, 0.5),
        (1, "", None, 0.4),
        (2, "return", None, 0.4),
    ]
    assert found.speeds[0].part == pytest.approx(101 / 399)
    assert [(s.step, s.name) for s in found.pacing] == [(0, "bring"), (1, ""), (2, "return")]
    paced = {part.quantity: part.part for part in found.pacing[0].parts}
    assert paced == {"tool speed": pytest.approx(101 / 399), "none": pytest.approx(298 / 399)}
    assert found.pacing[0].duration == pytest.approx(399 * 0.004)


def test_a_step_that_is_too_fast_for_its_cap(arm, table):
    speed = table.tool_speed.copy()
    speed[150] = 0.51
    speed[600] = 3.0  # nothing caps this step
    found = audit(replace(table, tool_speed=speed), arm, plan=made_plan(arm))
    (finding,) = [f for f in found.findings if f.level == "exceedance"]
    assert finding.text == "tool: speed 510 mm/s at 0.6 s (row 151) in step 1 exceeds the limit 500 mm/s, 102.0 %"
    assert found.tool_speed.row == 150 and found.tool_speed.limit == 0.5 and finding.joint is None


def test_what_the_plan_hands_over(arm, table):
    base = moved_poses(np.zeros(3), np.zeros(3))
    deviation = path_deviation(
        moved_poses([0, 2e-7, 0], [0, 0, 3e-7]), base, np.ones(3, bool), np.arange(3.0), np.arange(3)
    )
    velocity = np.zeros((5, 3))
    velocity[2, 1] = 2.0 * (1 + 3e-6)
    continuous = joint_peaks(arm, np.arange(5) * 0.01, np.zeros(5, dtype=int), velocity=velocity)
    corner = SimpleNamespace(
        after_step=0, kind="fly-by", reason="", asked="20 mm", asked_value=0.02, used=0.012, region="length"
    )
    note = SimpleNamespace(step=0, __str__=lambda self: "")

    class Note:
        step = 0

        def __str__(self):
            return "step 1: the blend shrinks from 20 mm to 12 mm"

    assert note.step == 0
    plan = made_plan(arm, Evidence(deviation, None, continuous), (Note(),), (corner,))
    found = audit(table, arm, plan=plan)
    assert found.deviation_rows == deviation and found.deviation_midway is None
    assert found.continuous == continuous
    assert [(c.asked, c.asked_value, c.used, c.region) for c in found.corners] == [("20 mm", 0.02, 0.012, "length")]
    assert [(f.level, f.text) for f in found.findings] == [
        (
            "exceedance",
            "swing: velocity 114.5919 deg/s at 0.02 s in step 1 exceeds the limit 114.5916 deg/s, 100.0003 % "
            "(between rows)",
        ),
        ("note", "step 1: the blend shrinks from 20 mm to 12 mm"),
    ]


def test_the_tool_caps_the_steps_of_a_plan():
    cup = Tool("cup", np.eye(4), speed=0.3)
    arm = made_arm(tool=cup, tools={"cup": cup})
    plan = made_plan(arm)
    assert np.array_equal(np.isfinite([s.speed or np.inf for s in plan.task.steps]), [True, False, False])
