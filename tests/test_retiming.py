"""Tables timed anew: along their own path, within the limits, rests kept, deviation told."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.retiming import task_along
from pathplan.table import Mark
from tests.random_tasks import broken_limits

ROOT = Path(__file__).parent.parent
UNIT = {"revolute": 180 / np.pi, "prismatic": 1000.0}


@pytest.fixture(scope="module")
def planned():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml"))


@pytest.fixture(scope="module")
def retimed(planned):
    return pathplan.retime(planned.table, planned.task.arm)


def bare(table, digits=None):
    """Only times and positions, rounded as another program might write them (mm, deg)."""
    position = table.position
    if digits is not None:
        unit = np.array([UNIT[kind] for kind in table.joint_kinds])
        position = np.round(position * unit, digits) / unit
    return pathplan.JointTable(table.time, position, joint_names=table.joint_names, joint_kinds=table.joint_kinds)


def farthest(table, other):
    """Largest distance of the rows of one table from the path of another, joint space, rad."""
    path = other.position
    return max(np.linalg.norm(path - row, axis=1).min() for row in table.position[::7])


def test_it_keeps_every_limit_judged_by_differences(retimed):
    plan = retimed
    assert broken_limits(plan.task.arm, plan.table.position, plan.task.cycle) == []
    assert plan.audit.passed, [finding.text for finding in plan.audit.findings if finding.level == "exceedance"]


def test_it_follows_the_path_of_the_table(planned, retimed):
    assert farthest(planned.table, retimed.table) < 1e-4 + 0.012  # tolerance, and half the way between two rows
    assert farthest(retimed.table, planned.table) < 1e-4 + 0.012
    dense = retimed.path.stretches[1].path
    q = dense(np.linspace(0, dense.length, 40001))
    rows = planned.table.position[(planned.table.step > 2) & (planned.table.step < 7)]
    assert max(np.linalg.norm(q - row, axis=1).min() for row in rows[::5]) <= 1e-4 * (1 + 1e-3)


def test_ends_stops_rests_and_marks_stay(planned, retimed):
    before, after = planned.table, retimed.table
    np.testing.assert_array_equal(after.position[0], before.position[0])
    np.testing.assert_allclose(after.position[-1], before.position[-1], rtol=0, atol=1e-14)
    assert [step.motion for step in retimed.task.steps] == ["taught", "wait", "taught", "wait", "taught"]
    assert retimed.waiting_time == pytest.approx(planned.waiting_time)
    assert [mark.name for mark in retimed.marks] == ["suction on", "suction off"]
    for one, other in zip(planned.marks, retimed.marks, strict=True):
        np.testing.assert_allclose(after.position[other.row], before.position[one.row], atol=1e-12)


def test_it_is_as_fast_as_the_limits_allow(planned, retimed):
    """The table was capped at the tool; without these caps the same path takes less time."""
    assert retimed.motion_time < 0.8 * planned.motion_time
    share = max(
        peak.share for joint in retimed.audit.joints for peak in (joint.velocity, joint.acceleration, joint.jerk)
    )
    assert share > 0.999


def test_a_cap_on_the_tool_holds(planned):
    task = replace(task_along(planned.table, planned.task.arm), speed=0.25)
    assert pathplan.plan(task).table.tool_speed.max() <= 0.25 * (1 + 1e-6)


@pytest.mark.parametrize("digits", [3, 5])
def test_tables_that_were_rounded(planned, digits):
    plan = pathplan.retime(bare(planned.table, digits), planned.task.arm)
    assert plan.audit.passed
    assert [step.motion for step in plan.task.steps] == ["taught", "wait", "taught", "wait", "taught"]
    assert plan.waiting_time == pytest.approx(planned.waiting_time, abs=0.06)  # rest begins where digits end
    assert plan.task.cycle == 0.004


def test_the_deviation_is_told(retimed):
    texts = [finding.text for finding in retimed.path.findings]
    assert len(texts) == 3
    assert texts[0].startswith('taught path "rows 1 to 361" is at most 0.00') and "deg (" in texts[0]
    assert retimed.task.steps[0].where == "table: rows 1 to 361"


def test_a_tighter_tolerance_is_kept(planned):
    plan = pathplan.retime(planned.table, planned.task.arm, tolerance=1e-5)
    dense = plan.path.stretches[0].path
    q = dense(np.linspace(0, dense.length, 200001))
    rows = planned.table.position[planned.table.step < 2]
    assert max(np.linalg.norm(q - row, axis=1).min() for row in rows[::9]) <= 1.5e-5  # as fine as the samples lie


def gantry(*legs, cycle=0.004):
    """A table of loader4 that goes straight from point to point at an even pace, stopping nowhere; m."""
    parts = [np.linspace(a, b, n, endpoint=False) for (a, b, n) in legs]
    position = np.concatenate([*parts, [legs[-1][1]]])
    return pathplan.JointTable(
        np.arange(len(position)) * cycle, position, joint_kinds=("prismatic",) * 3 + ("revolute",)
    )


A, B, C = ([0.2, 0.2, -0.1, 0.0], [1.0, 0.2, -0.1, 0.0], [1.0, 0.9, -0.1, 0.5])


def test_sharp_corners_and_reversals_become_stops():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    plan = pathplan.retime(gantry((A, B, 300), (B, C, 300), (C, B, 200)), arm)
    assert [step.name for step in plan.task.steps] == ["rows 1 to 301", "rows 301 to 601", "rows 601 to 801"]
    assert plan.audit.passed
    np.testing.assert_allclose([stretch.path([0.0])[0] for stretch in plan.path.stretches], [A, B, C], atol=1e-12)


def test_a_straight_line_takes_its_closed_form():
    """Seven phases of the joint that sets the pace: x by 0.8 m at 1.5 m/s, 4 m/s^2, 50 m/s^3 of loader4.

    T = d/v + v/a + a/j where the speed is reached (Biagiotti & Melchiorri 2008, sec. 3.4).
    """
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    plan = pathplan.retime(gantry((A, B, 500)), arm)
    assert plan.motion_time == pytest.approx(0.8 / 1.5 + 1.5 / 4 + 4 / 50, rel=2e-3)


def test_rests_are_kept_and_short_ones_are_not():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    table = gantry((A, A, 20), (A, B, 200), (B, B, 50), (B, C, 200), (C, C, 4), (C, B, 100), (B, B, 100))
    plan = pathplan.retime(table, arm)
    motions = [(step.motion, round(step.wait, 9)) for step in plan.task.steps]
    assert motions == [("wait", 0.08), ("taught", 0), ("wait", 0.2), ("taught", 0), ("taught", 0), ("wait", 0.4)]
    assert pathplan.retime(table, arm, rest=0.3).waiting_time == pytest.approx(0.4)


def test_marks_in_a_motion_move_to_a_stop_and_that_is_said():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    table = replace(gantry((A, B, 300)), marks=(Mark("half way", 0.6, 150, 0), Mark("there", 1.2, 300, 0)))
    plan = pathplan.retime(table, arm)
    assert [mark.name for mark in plan.marks] == ["half way"]
    text = plan.path.findings[0].text
    assert 'mark "half way" of row 151 is given at the stop of row 301' in text
    assert 'mark "there" of row 301 is left out' in text


def test_another_cycle():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    plan = pathplan.retime(gantry((A, B, 300)), arm, cycle=0.001)
    assert plan.task.cycle == 0.001 and plan.table.time[1] == 0.001


def complaint(table, arm, **how):
    with pytest.raises(pathplan.PathplanError) as caught:
        pathplan.retime(table, arm, **how)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def test_tables_that_can_not_be_timed():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    good = gantry((A, B, 50))
    assert complaint(gantry((A, A, 50)), arm) == "table: nothing moves in it"
    assert complaint(good, pathplan.load_arm(ROOT / "robots" / "glazer6.toml")) == "table: has 4 joints, glazer6 has 6"
    position = np.array(good.position)
    position[7, 2] = np.nan
    bad = replace(good, position=position)
    assert complaint(bad, arm) == "table: row 8: position of z is not a finite number"
    position[7, 2] = 0.3
    line = "table: row 8: joint z at 300 mm, expected from -600 mm to 0 mm"
    assert complaint(replace(good, position=position), arm) == line
    wrong = replace(good, joint_kinds=("revolute",) * 4)
    assert complaint(wrong, arm) == "table: joint joint1 is revolute, x of loader4 is prismatic"
    time = np.array(good.time)
    time[9] = time[7]
    assert (
        complaint(replace(good, time=time), arm)
        == "table: row 10: its time is not a finite number, or before the row above"
    )
    time = np.cumsum(np.random.default_rng(0).uniform(1e-3, 9e-3, len(good)))
    line = "table: its times lie on no regular grid: say the cycle of the new table"
    assert complaint(replace(good, time=time, cycle=None), arm) == line
    assert complaint(good, arm, tolerance=0.0) == "tolerance: expected an angle above zero, got 0.0"


def test_the_command_line(tmp_path, monkeypatch, capsys):
    from pathplan.cli import main

    monkeypatch.chdir(tmp_path)
    pathplan.write_table(gantry((A, B, 200), (B, B, 30), (B, C, 200)), "old.csv")
    arm = str(ROOT / "robots" / "loader4.toml")
    assert main(["retime", "old.csv", "--arm", arm, "-o", "new.csv"]) == 0
    shown = capsys.readouterr().out
    assert "within limits" in shown and "rows 1 to 201" in shown and "written: new.csv" in shown
    table = pathplan.read_table("new.csv")
    assert set(table.meta["sources"]) == {"old.csv", "loader4.toml"}
    assert Path("new.audit.json").exists()
    slow = ["--speed", "200 mm/s", "--tool", "vacuum gripper", "--payload", "tile", "--tolerance", "0.5 mm"]
    assert main(["retime", "new.csv", "--arm", arm, "-o", "slow.npz", *slow, "--cycle", "2 ms", "--quiet"]) == 0
    assert pathplan.read_table("slow.npz").tool_speed.max() <= 0.2 * (1 + 1e-6)


@pytest.mark.parametrize(
    ("argv", "line"),
    [
        (["old.csv", "-o", "new.csv"], "the following arguments are required: --arm (see pathplan retime --help)"),
        (["old.csv", "--arm", "ARM"], "the following arguments are required: -o (see pathplan retime --help)"),
        (["old.csv", "--arm", "ARM", "-o", "old.csv"], "old.csv: is the table that is read: choose another name"),
        (
            ["old.csv", "--arm", "ARM", "-o", "new.csv", "--tolerance", "0"],
            '--tolerance: expected an angle or a length above zero such as "0.01 deg" or "0.1 mm", got "0"',
        ),
        (
            ["old.csv", "--arm", "ARM", "-o", "new.csv", "--rest", "0"],
            '--rest: expected a time above zero such as "50 ms", got "0"',
        ),
        (
            ["old.csv", "--arm", "ARM", "-o", "new.csv", "--tool", "cup"],
            'loader4: unknown tool "cup", there is "vacuum gripper"',
        ),
        (["none.csv", "--arm", "ARM", "-o", "new.csv"], None),
    ],
)
def test_bad_arguments(argv, line, tmp_path, monkeypatch, capsys):
    from pathplan.cli import main

    monkeypatch.chdir(tmp_path)
    pathplan.write_table(gantry((A, B, 20)), "old.csv")
    arm = str(ROOT / "robots" / "loader4.toml")
    assert main(["retime", *(arm if word == "ARM" else word for word in argv)]) == 2
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert line is None or said == f"pathplan: {line}\n"
    assert not Path("new.csv").exists()
