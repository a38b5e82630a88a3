"""Peaks, shares and limits: closed forms, and each limit broken by hand and found."""

import math
from dataclasses import replace

import numpy as np
import pytest

from pathplan.arm import Tool
from pathplan.auditing import audit
from pathplan.errors import InputError
from pathplan.table import JointTable, tick_times
from tests.auditing.cast import jerk_phases, made_arm, move_table, with_cell


def exceedances(table, arm, **more):
    return [finding for finding in audit(table, arm, **more).findings if finding.level == "exceedance"]


def test_peaks_of_the_minimum_jerk_polynomial(arm):
    """Flash & Hogan 1985: peaks 1.875 A/D, 5.7735 A/D^2, jerk +60 and -30 A/D^3 (checks.md)."""
    distance, duration = np.array([0.4, 0.8, -1.2]), 3.0
    found = audit(move_table([0.2, -0.5, 0.3], distance, duration, 0.001), arm)
    assert found.passed and found.measured == "columns" and found.duration == 3.0 and found.count == 3001
    for joint, size in zip(found.joints, distance, strict=True):
        assert joint.velocity.peak == pytest.approx(1.875 * size / duration, rel=1e-9)
        assert abs(joint.acceleration.peak) == pytest.approx(5.7735 * abs(size) / duration**2, rel=1e-5)
        assert joint.jerk.peak == pytest.approx(60 * size / duration**3, rel=1e-12)
        assert joint.velocity.time == pytest.approx(1.5, abs=1e-3)
        assert joint.jerk.time == 0.0 and joint.jerk.row == 0 and joint.jerk.step == 0
        # what the drive sees has the same peaks, up to the rows that the first difference falls between
        assert joint.differences["velocity"].peak == pytest.approx(1.875 * size / duration, rel=1e-5)
        assert abs(joint.differences["jerk"].peak) < 60 * abs(size) / duration**3


def test_peaks_of_the_double_s_example():
    """Biagiotti & Melchiorri 2008, Ex. 3.9: q 0 to 10, v0 1, v1 0, limits 5, 10, 30 (checks.md)."""
    tj, ta, tv, td = 1 / 3, 0.5 * (4 / 5) + 1 / 3, 1.1433333333333333, 5 / 10 + 1 / 3
    assert (round(tj, 4), round(ta, 4), round(tv, 4), round(td, 4)) == (0.3333, 0.7333, 1.1433, 0.8333)
    phases = [(tj, 30), (ta - 2 * tj, 0), (tj, -30), (tv, 0), (tj, -30), (td - 2 * tj, 0), (tj, 30)]
    time = tick_times(np.arange(2711), 0.001)
    assert sum(duration for duration, _ in phases) == pytest.approx(2.71, abs=1e-12)
    values = jerk_phases(time, phases, speed=1.0)
    assert values[0, -1] == pytest.approx(10.0, abs=1e-9)
    still = np.zeros((len(time), 2))
    columns = [np.column_stack([still, column]) for column in values]
    table = JointTable(time, *columns, joint_kinds=("prismatic", "revolute", "revolute"), cycle=0.001)
    found = audit(table, made_arm(limits=None))
    bend = found.joints[2]
    assert bend.position is None  # turns without end
    assert bend.velocity.peak == pytest.approx(5.0, abs=1e-9) and bend.velocity.limit == 5.0
    assert bend.acceleration.peak == pytest.approx(10.0, abs=1e-9) and bend.acceleration.share <= 1 + 1e-9
    assert abs(bend.jerk.peak) == 30.0 and bend.jerk.share == 1.0
    # it starts at speed 1: no drive can follow that from rest, and the audit says so both ways
    texts = [finding.text for finding in found.findings if finding.level == "exceedance"]
    assert "bend: the first row is not at rest, velocity 57.3 deg/s at 0 s" in texts
    assert any(text.startswith("bend: acceleration") and "limit 573" in text for text in texts)
    # seven phases: jerk, acceleration and speed are at their limits in turn
    parts = {(part.joint, part.quantity): part.part for part in found.pacing[0].parts}
    assert parts[("bend", "jerk")] == pytest.approx(4 * tj / 2.71, abs=2e-3)
    assert parts[("bend", "acceleration")] == pytest.approx((ta + td - 4 * tj) / 2.71, abs=2e-3)
    assert parts[("bend", "velocity")] == pytest.approx(tv / 2.71, abs=2e-3)


BROKEN = [
    ("velocity", 0, 1.02, "lift: velocity 1020 mm/s at 1.2 s (row 301) in step 1 exceeds the limit 1000 mm/s, 102.0 %"),
    (
        "velocity",
        1,
        -2.5,
        "swing: velocity -143.2 deg/s at 1.2 s (row 301) in step 1 exceeds the limit -114.6 deg/s, 125.0 %",
    ),
    (
        "acceleration",
        0,
        -4.4,
        "lift: acceleration -4400 mm/s^2 at 1.2 s (row 301) in step 1 exceeds the limit -4000 mm/s^2, 110.0 %",
    ),
    (
        "acceleration",
        2,
        10.00002,
        "bend: acceleration 572.959 deg/s^2 at 1.2 s (row 301) in step 1 exceeds the limit 572.958 deg/s^2, 100.0002 %",
    ),
    ("jerk", 1, 160.0, "swing: jerk 9167 deg/s^3 at 1.2 s (row 301) in step 1 exceeds the limit 4584 deg/s^3, 200.0 %"),
    ("torque", 1, -66.0, "swing: torque -66 N m at 1.2 s (row 301) in step 1 exceeds the limit -60 N m, 110.0 %"),
    ("torque", 0, 501.0, "lift: torque 501 N at 1.2 s (row 301) in step 1 exceeds the limit 500 N, 100.2 %"),
]


@pytest.mark.parametrize(("quantity", "joint", "value", "text"), BROKEN)
def test_each_limit_broken_in_one_row_is_found(arm, calm_table, quantity, joint, value, text):
    name = ("lift", "swing", "bend")[joint]
    found = audit(with_cell(calm_table, quantity, 300, joint, value), arm)
    (finding,) = [finding for finding in found.findings if finding.level == "exceedance"]
    assert not found.passed and finding.text == text
    assert (finding.joint, finding.quantity, finding.step) == (name, quantity, 0)
    assert finding.time == 1.2 and finding.value == value
    limit = math.copysign(getattr(arm.joints[joint], quantity), value)
    assert finding.limit == limit
    peak = getattr(found.joints[joint], quantity)
    assert (peak.peak, peak.limit, peak.share, peak.row) == (value, limit, value / limit, 300)


@pytest.mark.parametrize(
    ("start", "text"),
    [
        (0.51, "lift: position 910 mm at 3 s (row 751) in step 2 lies beyond the limit 900 mm by 10 mm"),
        (-0.12, "lift: position -120 mm at 0 s (row 1) in step 1 lies beyond the limit -100 mm by 20 mm"),
    ],
)
def test_a_position_beyond_its_limit_is_found(arm, start, text):
    found = audit(move_table([start, 0.0, 0.0], [0.4, 0.1, 0.1], 3.0), arm)
    (finding,) = [finding for finding in found.findings if finding.level == "exceedance"]
    assert finding.text.startswith(text) and " rows from " in finding.text
    lift = found.joints[0].position
    assert lift.margin == pytest.approx(-abs(finding.value - finding.limit)) and lift.share > 1


def test_positions_have_margin_and_share_of_their_range(arm, calm_table):
    lift, swing, bend = audit(calm_table, arm).joints
    # -0.1 .. 0.9 m, middle 0.4: the move from 0.2 to 0.6 leaves it by 0.2 of 0.5
    assert (lift.position.peak, lift.position.limit) == pytest.approx((0.6, 0.9))
    assert lift.position.share == pytest.approx(0.4) and lift.position.margin == pytest.approx(0.3)
    assert swing.position.margin == pytest.approx(1.5) and bend.position is None and bend.torque is None


def test_a_position_on_its_limit_passes_up_to_rounding(arm):
    on = move_table([0.9, 0.0, 0.0], [-0.4, 0.1, 0.1], 3.0)
    assert audit(on, arm).passed
    assert audit(replace(on, position=on.position + np.array([5e-10, 0, 0])), arm).passed
    assert not audit(replace(on, position=on.position + np.array([2e-9, 0, 0])), arm).passed


def test_a_one_sided_position_limit(arm):
    limits = arm.limits
    one_sided = replace(limits, position=np.array([[-np.inf, 0.9], *limits.position[1:]]))
    table = move_table([-5.0, 0.0, 0.0], [0.4, 0.1, 0.1], 3.0)
    found = audit(table, made_arm(limits=one_sided))
    assert found.passed and found.joints[0].position.margin == pytest.approx(5.5)
    assert found.joints[0].position.share == pytest.approx(-4.5)
    beyond = audit(move_table([0.6, 0.0, 0.0], [0.4, 0.1, 0.1], 3.0), made_arm(limits=one_sided))
    assert not beyond.passed and beyond.joints[0].position.share == pytest.approx(1.1)


def test_limits_hold_up_to_a_millionth(arm, calm_table):
    assert audit(with_cell(calm_table, "jerk", 9, 1, 80 * (1 + 0.9e-6)), arm).passed
    assert not audit(with_cell(calm_table, "jerk", 9, 1, 80 * (1 + 1.1e-6)), arm).passed


def test_a_limit_on_a_sum_of_joints(arm, calm_table):
    """The shaft turns by swing - 2 bend; each joint keeps its own limit of 2 and 5 rad/s."""
    table = with_cell(with_cell(calm_table, "velocity", 300, 1, 1.0), "velocity", 300, 2, -4.0)
    found = audit(table, arm)
    (finding,) = [finding for finding in found.findings if finding.level == "exceedance"]
    assert (
        finding.text
        == "shaft: velocity 515.7 deg/s at 1.2 s (row 301) in step 1 exceeds the limit 458.4 deg/s, 112.5 %"
    )
    (shaft,) = found.rows
    assert (shaft.name, shaft.velocity.peak, shaft.velocity.row) == ("shaft", 9.0, 300)
    assert shaft.acceleration is None and shaft.torque is None and shaft.position is not None
    assert shaft.differences["velocity"].share < 0.5


def test_the_rows_of_one_step_are_told_together(arm, calm_table):
    velocity = calm_table.velocity.copy()
    velocity[300:310, 1] = 2.2
    velocity[305, 1] = 2.4
    velocity[500, 1] = 2.1
    found = exceedances(replace(calm_table, velocity=velocity), arm)
    assert [finding.text for finding in found] == [
        "swing: velocity 137.5 deg/s at 1.22 s (row 306) in step 1 exceeds the limit 114.6 deg/s, 120.0 %; "
        "10 rows from 1.2 s to 1.236 s",
        "swing: velocity 120.3 deg/s at 2 s (row 501) in step 2 exceeds the limit 114.6 deg/s, 105.0 %",
    ]


def test_tool_caps_are_limits(calm_table):
    """The tool is 0.9 m from the swing axis when the arm is stretched: v = 0.9 * 1.25, a = v^2 / 0.9 too."""
    arm = made_arm(tool=Tool("cup", np.eye(4), speed=1.0, acceleration=1.2))
    still = np.zeros((751, 1))
    swing = np.full((751, 1), 1.25)
    table = replace(
        calm_table,
        position=np.hstack([still, still, still]),
        velocity=np.hstack([still, swing, still]),
        acceleration=np.hstack([still, still, still]),
        jerk=np.hstack([still, still, still]),
    )
    found = audit(table, arm)
    assert found.tool_speed.peak == pytest.approx(1.125) and found.tool_speed.limit == 1.0
    assert found.tool_acceleration.peak == pytest.approx(0.9 * 1.25**2, rel=1e-8)
    texts = [finding.text for finding in found.findings if (finding.quantity or "").startswith("tool")]
    assert texts[0].startswith("tool: speed 1125 mm/s at 0 s (row 1) in step 1 exceeds the limit 1000 mm/s, 112.5 %")
    assert any(text.startswith("tool: acceleration 1406 mm/s^2") for text in texts)
    assert audit(replace(table, tool_speed=np.full(751, 0.3)), arm).tool_speed.peak == 0.3
    assert audit(table, made_arm()).tool_speed is None


def test_joints_that_do_not_fit_the_arm(arm, calm_table):
    two = JointTable(calm_table.time, calm_table.position[:, :2])
    with pytest.raises(InputError) as error:
        audit(two, arm)
    assert str(error.value) == "table: has 2 joints, test arm has 3"
    with pytest.raises(InputError) as error:
        audit(replace(calm_table, joint_kinds=("revolute",) * 3), arm)
    assert str(error.value) == "table: joint lift is revolute, lift of test arm is prismatic"
    with pytest.raises(InputError) as error:
        audit([], arm)
    assert str(error.value) == "table: there are no rows to judge"
    other = audit(replace(calm_table, joint_names=("x", "y", "z")), arm)
    assert other.passed
    assert [(f.level, f.text) for f in other.findings] == [
        ("warning", "the table's joints have other names, taken in their order: x, y, z")
    ]


def test_missing_torque_is_said(arm, calm_table):
    found = audit(replace(calm_table, torque=None), arm)
    assert found.passed and found.joints[0].torque is None
    assert [f.text for f in found.findings] == ["torque is not judged: the table has no torque columns"]


@pytest.mark.parametrize(("size", "rows"), [(1, 80), (2, 80), (7, 400), (250, 751), (751, 751)])
def test_chunks_are_judged_as_the_whole(arm, calm_table, size, rows):
    table = with_cell(calm_table, "velocity", 30, 1, 2.5)
    table = with_cell(table, "position", 50, 1, 1.0).part(0, rows)
    assert audit(table.chunks(size), arm) == audit(table, arm)


def test_a_table_of_one_row_at_rest_passes(arm, calm_table):
    found = audit(calm_table.part(0, 1), arm)
    assert found.duration == 0.0 and found.count == 1 and found.passed
    bare = JointTable([0.0], [[0.1, 0.2, 0.3]])
    assert audit(bare, arm).passed
