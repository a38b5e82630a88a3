"""Turning speed and held tool speed from the task file to table, audit, screens and savings."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from pathplan.auditing.held import HELD_WITHIN
from pathplan.cli import main
from tests.timing.cases import seven_phases

ROOT = Path(__file__).parent.parent

TURNS = """
title = "look round the edge"
arm = "glazer6.toml"
cycle = "1 ms"
start = "home"
tool = "nozzle"

[[step]]
motion = "joint"
to = { joints = [0, -15, 25, 0, 80, 90] }
turning_speed = "60 deg/s"

[[step]]
motion = "line"
to = { xyz = [620, 120, 560], rpy = [160, 20, 60] }
turning_speed = 40
blend = "15 mm"

[[step]]
motion = "line"
to = { xyz = [560, -80, 600], rpy = [200, 10, -20] }
"""

BEADS = """
title = "beads"
arm = "loader4.toml"
cycle = "4 ms"
start = [100, 100, -100, 0]

[[step]]
name = "bead"
motion = "line"
to = { joints = [700, 100, -100, 0] }
held_speed = "300 mm/s"

[[step]]
motion = "joint"
to = { joints = [700, 100, -100, 90] }
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    for arm in ("glazer6", "loader4"):
        (tmp_path / f"{arm}.toml").write_text((ROOT / "robots" / f"{arm}.toml").read_text())
    (tmp_path / "turns.toml").write_text(TURNS)
    (tmp_path / "beads.toml").write_text(BEADS)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def change(file, *pairs):
    text = Path(file).read_text()
    for old, new in pairs:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    Path(file).write_text(text)


def turned(table, step):
    """Angular speed (N,) between the rows of a step, deg/s, of the written poses alone, by scipy."""
    rows = np.flatnonzero(table.step == step)
    pose = Rotation.from_matrix(table.pose[rows][:, :3, :3])
    return np.rad2deg((pose[:-1].inv() * pose[1:]).magnitude()) / table.cycle


def test_turning_speed_holds_in_joint_steps_lines_and_corners(folder):
    plan = pathplan.plan(pathplan.load_task("turns.toml"))
    audit = plan.audit
    assert audit.passed, [finding.text for finding in audit.findings]
    # the first step turns the flange alone: its time is that of the seven phases
    assert plan.timings[0].duration == pytest.approx(seven_phases(90, 60, 1500, 15000), rel=2e-3)
    assert turned(plan.table, 0).max() == pytest.approx(60, rel=1e-4)
    assert turned(plan.table, 1).max() == pytest.approx(40, rel=1e-3) and turned(plan.table, 1).max() < 40 * (1 + 1e-6)
    assert turned(plan.table, 2).max() > 50
    assert plan.bounds[1] <= plan.timings[1].duration <= 1.15 * plan.bounds[1]
    assert audit.tool_turning_speed.share == pytest.approx(1.0, abs=2e-5)
    assert np.rad2deg(audit.tool_turning_speed.limit) in (pytest.approx(60), pytest.approx(40))
    paced = {(part.joint, part.quantity): part.part for part in audit.pacing[1].parts}
    assert paced[None, "tool turning speed"] > 0.5


def test_of_tool_task_and_step_the_lowest_cap_counts(folder):
    change("glazer6.toml", ("speed = 600 ", "turning_speed = 30\nspeed = 600 "))
    change("turns.toml", ('tool = "nozzle"', 'tool = "nozzle"\nturning_speed = "50 deg/s"'))
    plan = pathplan.plan(pathplan.load_task("turns.toml"))
    assert plan.audit.passed
    assert max(turned(plan.table, step).max() for step in range(3)) == pytest.approx(30, rel=1e-3)
    change("glazer6.toml", ("turning_speed = 30\n", ""))
    plan = pathplan.plan(pathplan.load_task("turns.toml"))
    assert [round(turned(plan.table, step).max(), 1) for step in range(3)] == [50.0, 40.0, 50.0]


def test_a_table_is_judged_by_the_caps_of_its_task(folder, capsys):
    assert main(["plan", "turns.toml", "--quiet"]) == 0
    assert main(["audit", "turns.csv", "--task", "turns.toml", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)["audit"]["tool_turning_speed"]
    assert told["unit"] == "deg/s" and told["percent"] == pytest.approx(100, abs=2e-3)
    change("turns.toml", ("turning_speed = 40", "turning_speed = 36"))
    assert main(["audit", "turns.csv", "--task", "turns.toml", "--json"]) == 1
    document = json.loads(capsys.readouterr().out)
    (found,) = [f for f in document["audit"]["findings"] if f["level"] == "exceedance"]
    assert found["step"] == 2 and found["quantity"] == "tool turning speed" and found["limit"] == pytest.approx(36)
    assert found["text"].startswith("tool: turning speed 40 deg/s at") and "exceeds the limit 36 deg/s" in found["text"]
    # by hand, with no task: the option alone, for all rows
    assert main(["audit", "turns.csv", "--turning-speed", "260", "--quiet"]) == 0
    assert main(["audit", "turns.csv", "--turning-speed", "55 deg/s", "--quiet"]) == 1


def test_a_table_of_another_source_is_judged_by_the_common_caps_of_a_task(folder, capsys):
    table = pathplan.plan(pathplan.load_task("turns.toml")).table
    names = ",".join(f"{name}_deg" for name in table.joint_names)
    rows = np.column_stack([table.time, np.rad2deg(table.position)])
    np.savetxt("log.csv", rows, delimiter=",", header=f"time_s,{names}", comments="", fmt="%.17g")
    assert main(["audit", "log.csv", "--task", "turns.toml", "--quiet"]) == 0  # whose steps these are nobody says
    change("turns.toml", ('tool = "nozzle"', 'tool = "nozzle"\nturning_speed = "50 deg/s"'))
    assert main(["audit", "log.csv", "--task", "turns.toml", "--json"]) == 1
    peak = json.loads(capsys.readouterr().out)["audit"]["tool_turning_speed"]
    assert peak["peak"] == pytest.approx(max(turned(table, step).max() for step in range(3)), rel=1e-3)


def test_turning_speed_from_the_command_line(folder, capsys):
    assert main(["plan", "turns.toml", "--turning-speed", "25 deg/s", "--no-table"]) == 0
    out = capsys.readouterr().out
    assert "turning speed capped at 25 deg/s" in out and "tool turning speed: at most 25 deg/s of 25 deg/s" in out
    assert "tool turning 9" in out  # paces 90 % and more of a step
    for bad, complaint in (
        ("0", 'expected an angular speed above zero such as "90 deg/s", got "0"'),
        ("1e-5", 'expected at least 0.001 deg/s, got "1e-5"'),
        ("90 mm/s", 'expected an angular speed such as "180 deg/s", got "90 mm/s"'),
    ):
        assert main(["plan", "turns.toml", "--turning-speed", bad, "--no-table"]) == 2
        assert capsys.readouterr().err == f"pathplan: --turning-speed: {complaint}\n"


def test_a_held_line_of_one_axis_by_the_closed_form(folder):
    """Jerk 50 m/s^3 to 0.3 m/s without reaching 4 m/s^2: two phases of sqrt(v/j) up and two down.

    The last 1 % of the speed takes sqrt(0.02 v/j); what is left of the ramp is missed.
    """
    plan = pathplan.plan(pathplan.load_task("beads.toml"))
    (held,) = plan.audit.held
    v, j, length = 0.3, 50.0, 0.6
    ramp, last = 2 * np.sqrt(v / j), np.sqrt(2 * HELD_WITHIN * v / j)
    missed_length = v * ramp / 2 - (v * last - j * last**3 / 6)
    assert held.length == pytest.approx(length, rel=1e-5)
    assert held.length_part == pytest.approx(1 - 2 * missed_length / length, abs=1e-3)
    total = seven_phases(length, v, 4.0, j)
    assert held.time_part == pytest.approx(1 - 2 * (ramp - last) / total, abs=4e-3)
    parts = {(m.where, m.joint, m.quantity): m.length_part for m in held.missed if m.quantity != "none"}
    assert set(parts) == {("start", "x", "jerk"), ("end", "x", "jerk")}
    assert parts["start", "x", "jerk"] == pytest.approx(missed_length / length, abs=1e-3)
    on = plan.table.tool_speed[(plan.table.step == 0) & (plan.table.tool_speed > 0.999 * v)]
    assert len(on) > 400 and on.max() <= v * (1 + 1e-6)
    assert np.quantile(on, 0.02) > v * (1 - 5e-5)


@pytest.fixture(scope="module")
def bead():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-bead.toml"))


def test_the_bead_is_laid_at_one_speed(bead):
    """Its run-in and run-out come to speed and leave it: all of the bead has the speed, to 0.1 %."""
    table, held = bead.table, bead.audit.held
    assert [entry.step for entry in held] == list(range(3, 12))
    assert min(entry.length_part for entry in held) > 1 - 1e-9
    rows = np.isin(table.step, [entry.step for entry in held])
    moved = np.linalg.norm(np.diff(table.pose[:, :3, 3], axis=0), axis=1)[rows[1:] & rows[:-1]] / table.cycle
    assert moved.max() <= 0.12 * (1 + 1e-6)
    assert table.tool_speed[rows].min() >= 0.12 * (1 - 1e-3)
    note = next(finding for finding in bead.audit.findings if "hold their tool speed" in finding.text)
    assert (note.level, note.text) == ("note", "9 steps hold their tool speed to 1 % over their whole length")


def test_too_fast_a_bead_tells_what_stops_it(bead):
    fast = tuple(
        replace(step, speed=step.speed and 0.36, held_speed=step.held_speed and 0.36) for step in bead.task.steps
    )
    plan = pathplan.plan(replace(bead.task, steps=fast))
    assert plan.audit.passed and plan.bound <= plan.duration
    held = {entry.step: entry for entry in plan.audit.held}
    assert held[4].length_part == 0 and held[4].reached < 0.3  # round the first corner
    assert 0.6 < held[7].length_part < 0.9 and {m.where for m in held[7].missed} == {"corner before", "corner after"}
    assert sum(m.length_part for m in held[7].missed) + held[7].length_part == pytest.approx(1.0)
    rows = plan.table.step == 7
    near = np.abs(plan.table.tool_speed[rows] / 0.36 - 1) <= 0.01
    assert held[7].time_part == pytest.approx(near[1:].mean(), abs=0.01)
    texts = [finding.text for finding in plan.audit.findings if finding.level == "warning"]
    assert any(text.startswith("step 5 (first corner): 360 mm/s is never reached, at most 2") for text in texts)
    assert any("step 8 (long side): 360 mm/s is held to 1 % over 7" in text for text in texts)


def test_held_speeds_on_screen_and_in_json(folder, capsys):
    assert main(["plan", "beads.toml", "--json", "-o", "beads.csv"]) == 0
    document = json.loads(capsys.readouterr().out)
    (entry,) = document["audit"]["held"]
    assert entry["step"] == 1 and entry["held_mm_s"] == pytest.approx(300) and entry["tolerance_percent"] == 1.0
    assert {part["where"] for part in entry["elsewhere"]} == {"start", "end"} and entry["begins_at_rest"]
    assert document["steps"][0]["held_speed"]["percent_of_length"] == entry["percent_of_length"]
    assert "held_speed" not in document["steps"][1] and "tool_turning_speed" not in document["audit"]
    assert main(["plan", "beads.toml", "--no-table"]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "300 held 93 %" in out
    assert "? step 1 (bead): 300 mm/s is held to 1 % over 93.3 % of its length" in out
    assert "its run-in and run-out lie on the work: blend with a step of the same speed" in out
    # the table by itself, with the task whose steps it counts
    assert main(["audit", "beads.csv", "--task", "beads.toml", "--json"]) == 0
    (again,) = json.loads(capsys.readouterr().out)["audit"]["held"]
    assert again["percent_of_length"] == pytest.approx(entry["percent_of_length"], abs=1e-6)


@pytest.mark.parametrize(
    ("options", "why"),
    [
        (["--reduced-speed"], "the tool speed of the whole task is capped at 250 mm/s"),
        (["--pace", "50 %"], "the pace of 50 % slows it to 150 mm/s at most"),
    ],
)
def test_what_slows_the_whole_task_is_no_error(folder, capsys, options, why):
    assert main(["plan", "beads.toml", "--no-table", "--json", *options]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["audit"]["held"][0]["percent_of_length"] == 0.0
    texts = [finding["text"] for finding in document["audit"]["findings"]]
    assert f"step 1 (bead): 300 mm/s is not held at all: {why}" in texts


def test_a_speed_that_the_tool_may_not_have_is_bad_input(folder, capsys):
    change("glazer6.toml", ("speed = 600 ", "speed = 400 "))
    change("turns.toml", ("turning_speed = 40", 'held_speed = "450 mm/s"'))
    assert main(["plan", "turns.toml", "--no-table"]) == 2
    complaint = "450 mm/s can't be held, the speed of tool nozzle is capped at 400 mm/s"
    assert capsys.readouterr().err == f"pathplan: turns.toml: step[2].held_speed: {complaint}\n"


def test_savings_offer_caps_but_no_speed_that_is_to_be_held(folder):
    plan = pathplan.plan(pathplan.load_task("beads.toml"))
    assert not [saving for saving in plan.savings(top=8) if saving.quantity == "tool speed"]
    change("beads.toml", ('held_speed = "300 mm/s"', 'speed = "300 mm/s"'), ("cycle =", "turning_speed = 20\ncycle ="))
    plan = pathplan.plan(pathplan.load_task("beads.toml"))
    best = {(saving.quantity, saving.step): saving for saving in plan.savings(top=3)}
    # a quarter turn at 20 deg/s in place of 22 deg/s, 0.6 m at 300 in place of 330 mm/s, less a little for the ramps
    assert best["tool turning speed", None].saved == pytest.approx(90 / 20 - 90 / 22, rel=0.02)
    assert best["tool speed", 0].saved == pytest.approx(2 - 2 / 1.1, rel=0.15)


def test_a_report_shows_both(folder):
    change("beads.toml", ("cycle =", "turning_speed = 20\ncycle ="))
    pathplan.report.write_report(pathplan.plan(pathplan.load_task("beads.toml")), "beads.html")
    page = Path("beads.html").read_text()
    assert "300 held over 93.3 % of its length" in page
    assert "Tool turning speed: at most 20 deg/s of 20 deg/s" in page and "turning speed capped at" in page
    assert "tool turning" in page
