"""Coupled drives: limits on sums of joints, timed and audited on the motor side."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.arm.model import Limits
from pathplan.report.plan_screen import plan_screen

ROOT = Path(__file__).parent.parent
TASK = """
arm = "{arm}"
cycle = "1 ms"
start = "home"

[[step]]
motion = "joint"
to = {{ joints = [{joints}] }}
"""


@pytest.fixture(scope="module")
def spline():
    return pathplan.load_arm(ROOT / "robots" / "sorter4-spline.toml")


@pytest.fixture(scope="module")
def tray():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "sorter4-spline-tray.toml"))


def planned(tmp_path, arm_file, joints):
    file = tmp_path / "task.toml"
    file.write_text(TASK.format(arm=arm_file.as_posix(), joints=joints))
    return pathplan.plan(pathplan.load_task(file))


def seven_phases(distance, velocity, acceleration, jerk):
    """Least time of a rest-to-rest move under symmetric limits (Biagiotti & Melchiorri 2008, sec. 3.4)."""
    ramp = velocity / acceleration + acceleration / jerk
    if velocity * jerk < acceleration**2:
        ramp = 2 * np.sqrt(velocity / jerk)
    if distance >= velocity * ramp:
        return distance / velocity + ramp
    if distance < 2 * acceleration**3 / jerk**2:
        return 4 * np.cbrt(distance / (2 * jerk))
    half = acceleration**2 / jerk
    top = -half / 2 + np.sqrt((half / 2) ** 2 + acceleration * distance)
    return 2 * (top / acceleration + acceleration / jerk)


def coupled(arm, name, row, position=(-np.inf, np.inf), others=(np.inf, np.inf, np.inf), kind="revolute"):
    """The arm with one more row; velocity, acceleration and jerk in rad."""
    plain = arm.limits
    bounds = {"position": position, "torque": (-np.inf, np.inf)}
    bounds |= {key: (-v, v) for key, v in zip(("velocity", "acceleration", "jerk"), others, strict=True)}
    stacked = {key: np.vstack([getattr(plain, key), value]) for key, value in bounds.items()}
    limits = Limits((*plain.names, name), np.vstack([plain.matrix, row]), kinds=(*plain.kinds, kind), **stacked)
    return replace(arm, limits=limits)


def test_the_nut_counts_lift_and_turns(spline):
    """18 deg a mm and a deg a deg: of the file's units, in SI."""
    row = spline.limits.matrix[spline.limits.names.index("nut")]
    np.testing.assert_allclose(row, [0, 0, np.deg2rad(18) * 1000, 1])
    assert spline.limits.kinds[-1] == "revolute" and spline.limit_kinds[-1] == "revolute"


def test_motors_keep_their_limits_by_differences(tray):
    """matrix @ q of the rows as they are written, judged without our audit."""
    arm, position, cycle = tray.task.arm, tray.table.position, tray.task.cycle
    motor = position @ arm.limits.matrix.T
    padded = np.concatenate([np.repeat(motor[:1], 4, axis=0), motor, np.repeat(motor[-1:], 4, axis=0)])
    rounding = np.abs(arm.limits.matrix) @ np.spacing(np.abs(position).max(axis=0))
    used = []
    for n, name in enumerate(("velocity", "acceleration", "jerk"), start=1):
        low, high = getattr(arm.limits, name).T
        seen = np.diff(padded, n, axis=0) / cycle**n
        slack = 8 * rounding / cycle**n
        assert (seen.max(axis=0) <= high * (1 + 1e-6) + slack).all(), name
        assert (seen.min(axis=0) >= low * (1 + 1e-6) - slack).all(), name
        used.append((np.abs(seen).max(axis=0) / high)[-1])
    assert max(used) > 0.99  # the nut does set the pace somewhere
    low, high = arm.limits.position.T
    assert (motor >= low - 1e-9).all() and (motor <= high + 1e-9).all()


def test_audit_and_screen_name_the_nut(tray):
    row = tray.audit.rows[0]
    assert (row.name, row.kind) == ("nut", "revolute")
    assert max(row.velocity.share, row.acceleration.share, row.jerk.share) > 0.999
    text = plan_screen(tray)
    line = next(line for line in text.splitlines() if line.startswith("nut "))
    assert " deg " in line
    assert "nut jerk" in text and "(SI)" not in text
    data = tray.audit.to_dict()
    assert data["coupled"][0]["name"] == "nut" and data["coupled"][0]["velocity"]["unit"] == "deg/s"


@pytest.mark.parametrize(("lift", "turn"), [(-150, 180), (-150, -180), (-40, 90), (-190, 0), (-5, 5)])
def test_a_straight_move_takes_the_closed_form_of_whichever_motor_is_slowest(tmp_path, lift, turn):
    file = ROOT / "robots" / "sorter4-spline.toml"
    plan = planned(tmp_path, file, f"0, 90, {lift}, {turn}")
    arm = plan.task.arm
    change = arm.limits.matrix @ (plan.table.position[-1] - plan.table.position[0])
    # On a straight line every motor's motion is the same one scaled: the slowest by each kind of limit sets the pace.
    limits = [getattr(arm.limits, name)[:, 1] for name in ("velocity", "acceleration", "jerk")]
    moving = np.abs(change) > 1e-9
    tightest = [float((limit[moving] / np.abs(change[moving])).min()) for limit in limits]
    assert plan.motion_time == pytest.approx(seven_phases(1.0, *tightest), rel=2e-3)
    assert plan.audit.passed


def test_the_audit_sees_a_motor_that_is_asked_too_much(spline):
    """A table within every joint's own limits that turns the nut too fast."""
    time = np.arange(400) * 0.001
    wave = (1 - np.cos(2 * np.pi * time / time[-1])) / 2
    position = np.outer(wave, [0, 0, -0.06, np.deg2rad(-60)]) + spline.positions["home"]
    slow = coupled(spline, "slow nut", spline.limits.matrix[-1], others=(np.deg2rad(5000), np.inf, np.inf))
    table = pathplan.JointTable(time, position, cycle=0.001)
    found = [f for f in pathplan.audit(table, slow).findings if f.joint == "slow nut"]
    assert found and found[0].quantity == "velocity" and found[0].level == "exceedance"
    assert "deg/s" in found[0].text
    peak = np.pi / time[-1] * (60 * 18 + 60)  # deg/s, of the sum
    assert abs(np.rad2deg(found[0].value)) == pytest.approx(peak, rel=1e-3)


def test_the_inverse_keeps_coupled_position_limits(spline):
    """Turns of the wrist at which the nut's hose would be twisted too far are no answers."""
    q = np.array([0.3, 1.0, -0.2, np.deg2rad(100)])
    assert np.rad2deg(spline.limits.matrix[-1] @ q) == pytest.approx(-3500)  # a turn of the wrist less: -3860
    answers = spline.inverse(spline.forward(q))
    nut = np.rad2deg(answers @ spline.limits.matrix[-1])
    assert nut.min() >= -3800 - 1e-6
    free = replace(spline, limits=Limits(*(v[:4] for v in _fields(spline.limits))))
    assert len(free.inverse(spline.forward(q))) > len(answers)


def _fields(limits):
    return (getattr(limits, f) for f in ("names", "matrix", "position", "velocity", "acceleration", "jerk", "torque"))


def test_branches_keep_the_limits_of_a_parallelogram(tmp_path):
    """The forearm of a parallelogram arm is driven from the shoulder: its motor counts shoulder plus elbow."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    row = np.array([0, 1.0, 1.0, 0, 0, 0])
    pose = arm.forward(np.deg2rad([10, 60, -65, 0, 70, 0]))
    sums = np.rad2deg(arm.inverse(pose) @ row)
    assert sums.min() < -20 and sums.max() == pytest.approx(-5)
    limited = coupled(arm, "forearm motor", row, np.deg2rad([-14, 90]))
    answers = limited.inverse(pose)
    assert 0 < len(answers) < len(sums) and np.rad2deg(answers @ row).min() >= -14
    task = tmp_path / "task.toml"
    steps = '[[step]]\nmotion = "joint"\nto = { xyz = [%s], quat = [%s] }\n'
    from scipy.spatial.transform import Rotation

    quat = Rotation.from_matrix(pose[:3, :3]).as_quat(scalar_first=True)
    step = steps % (", ".join(map(repr, (pose[:3, 3] * 1e3).tolist())), ", ".join(map(repr, quat.tolist())))
    task.write_text(f'cycle = 0.004\nstart = "home"\n{step}')
    plan = pathplan.plan(pathplan.load_task(task, arm=limited))
    assert np.rad2deg(plan.table.position @ row).min() >= -14
    assert plan.table.position[-1] @ row == pytest.approx(np.deg2rad(-5))
    shut = coupled(arm, "forearm motor", row, np.deg2rad([0, 90]))
    with pytest.raises(pathplan.UnreachableError, match=r"forearm motor at -5 deg, limit 0 deg"):
        shut.inverse(pose)
    with pytest.raises(pathplan.UnreachableError, match=r"step\[1\]: .*forearm motor at -5 deg, limit 0 deg"):
        pathplan.plan(pathplan.load_task(task, arm=shut))


def test_a_line_that_leaves_a_coupled_limit_is_refused_by_its_name(tmp_path, spline):
    """Straight down with the wrist turned: the nut runs out of turns before the screw does."""
    file = tmp_path / "task.toml"
    lines = [
        f'arm = "{(ROOT / "robots" / "sorter4-spline.toml").as_posix()}"',
        "cycle = 0.001\nstart = { joints = [0, 90, 0, -330] }\n".replace("{ joints = ", "").replace(" }", ""),
        '[[step]]\nmotion = "line"',
    ]
    q = np.array([0, np.pi / 2, -0.2, np.deg2rad(-330)])
    pose = spline.forward(q)
    turn = float(np.rad2deg(np.arctan2(pose[1, 0], pose[0, 0])))
    lines.append(f"to = {{ xyz = {(pose[:3, 3] * 1e3).tolist()}, rpy = [180, 0, {turn!r}] }}\n")
    file.write_text("\n".join(lines))
    with pytest.raises(pathplan.UnreachableError) as caught:
        pathplan.plan(pathplan.load_task(file))
    assert "joint nut meets its limit -3800 deg" in str(caught.value)
    assert caught.value.data["joint"] == "nut"


def test_a_wrist_coupling(tmp_path):
    """Motors of a hollow wrist that each turn with the axes before: pitch with roll, flange with both."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    v, a, j = np.deg2rad([250, 900, 9000])
    arm = coupled(arm, "pitch motor", [0, 0, 0, 1, 1, 0], others=(v, a, j))
    arm = coupled(arm, "flange motor", [0, 0, 0, 0.5, -1, 1], others=(v, a, j))
    file = tmp_path / "task.toml"
    file.write_text(
        'cycle = 0.002\nstart = "home"\n[[step]]\nmotion = "joint"\nto = { joints = [0, -15, 25, 60, 20, 90] }\n'
    )
    plan = pathplan.plan(pathplan.load_task(file, arm=arm))
    change = np.abs(arm.limits.matrix @ np.deg2rad([0, 0, 0, 60, -60, 90]))
    assert change[-1] == pytest.approx(np.deg2rad(180)) and change[-2] == pytest.approx(0, abs=1e-12)
    assert plan.motion_time == pytest.approx(seven_phases(change[-1], v, a, j), rel=2e-3)
    assert plan.audit.passed and [row.name for row in plan.audit.rows] == ["pitch motor", "flange motor"]
    assert plan.audit.rows[1].velocity.share > 0.999
