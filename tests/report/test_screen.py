"""The audit on a terminal: what it says, how wide, and that no name can disturb it."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.arm import Tool
from pathplan.auditing import Deviation, StepSpeed, audit
from pathplan.report import CAUTIONS, audit_screen
from tests.auditing.cast import made_arm, move_table, with_cell


@pytest.fixture(scope="module")
def table():
    torque = np.tile([100.0, -10.0, 5.0], (751, 1))
    meta = {"task": "Stack tiles"}
    return move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0, torque=torque, meta=meta)


def lines_of(found):
    text = audit_screen(found)
    assert text.isascii() and max(map(len, text.split("\n"))) <= 100
    return text.split("\n")


def test_a_table_within_limits(table):
    lines = lines_of(audit(table, made_arm(limits=None)))
    assert lines[0] == "Stack tiles, test arm: within limits"
    assert lines[1] == "cycle time 3 s, 751 rows at 4 ms"
    assert lines[3].split() == ["joint", "position", "margin", "velocity", "acceleration", "jerk", "torque"]
    # the largest share of each joint has the star
    assert lines[4].split() == "lift 40.0 %* 300 mm 25.0 % 6.4 % 3.0 % 20.0 %".split()
    assert lines[5].split() == "swing 25.0 %* 85.9 deg 25.0 % 5.1 % 2.2 % 16.7 %".split()
    assert lines[6].split() == "bend - - 15.0 %* 7.7 % 8.9 % -".split()
    assert any(line.startswith("singularity: smallest singular value 0.") for line in lines)
    assert lines[-2:] == list(CAUTIONS)


def test_what_breaks_limits_is_marked_and_told(table):
    found = audit(with_cell(table, "velocity", 300, 1, 2.0 * (1 + 2e-6)), made_arm())
    lines = lines_of(found)
    assert lines[0] == "Stack tiles, test arm: BREAKS LIMITS (1 exceedance)"
    (swing,) = [line for line in lines if line.startswith("swing ")]
    assert "100.1 %!" in swing  # never rounded to a value that looks kept
    exceeded = "! swing: velocity 114.5918 deg/s at 1.2 s (row 301) in step 1 exceeds"
    assert any(line.startswith(exceeded) for line in lines)
    beyond = lines_of(audit(move_table([0.55, 0, 0], [0.4, 0.1, 0.1], 3.0), made_arm()))
    (lift,) = [line for line in beyond if line.startswith("lift ")]
    assert "110.0 %!" in lift and "-50 mm" in lift


def test_steps_speeds_and_times(table):
    arm = made_arm(tool=Tool("cup", np.eye(4), speed=0.9))
    found = replace(
        audit(table, arm),
        speeds=(StepSpeed(0, "bring", 0.25, 0.25, 0.61), StepSpeed(1, "", None, 0.3, 0.0)),
        motion_time=2.5,
        waiting_time=0.5,
        bound=2.4567,
        deviation_rows=Deviation(3.4e-7, 0.5, 0, 2e-9, 0.7, 1, 42),
    )
    lines = lines_of(found)
    assert lines[1] == "cycle time 3 s (motion 2.5 s, waiting 0.5 s), bound 2.456 s, 751 rows at 4 ms"
    assert "path deviation, rows: 0.34 um at 0.5 s in step 1, 0.002 urad at 0.7 s in step 2" in lines
    at = next(i for i, line in enumerate(lines) if line.startswith("step"))
    assert lines[at].split() == "step time paced by, share of its time tool speed reached".split()
    assert lines[at + 1].split() == "1 1.5 s none 100 % 250 of 250 mm/s".split()
    assert lines[at + 2].split()[-1] == "-"


def test_long_lists_are_cut_and_say_so(table):
    many = replace(table, step=np.arange(751) // 20)
    velocity = table.velocity.copy()
    velocity[::20, 1] = 3.0
    lines = lines_of(audit(replace(many, velocity=velocity), made_arm()))
    assert "... and 26 shorter steps, all of them in --json" in lines
    assert any(line.startswith("... and ") and line.endswith("more findings, all of them in --json") for line in lines)


def test_names_can_not_disturb_the_screen(table):
    names = ("l\x1b[31mift", "a" * 300, "b\nc")
    found = audit(replace(table, joint_names=names, meta={"task": "x\r\ny" * 60}), made_arm())
    text = "\n".join(lines_of(found))
    assert "\x1b" not in text and "\r" not in text and "l?[31mift" in text


def test_positions_alone(table):
    bare = replace(table, velocity=None, acceleration=None, jerk=None, torque=None)
    lines = lines_of(audit(bare, made_arm()))
    assert "velocity, acceleration and jerk: where no column, finite differences of the positions" in lines
    assert not any(line.startswith("step ") for line in lines)
