"""Near singularities: kind, place, distance and cost by closed forms and by timing a line that meets nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from pathplan.auditing.passes import speed_dip
from pathplan.path.singular import nearness
from tests.path.conftest import pose, robot, step, task
from tests.path.test_crossing import DROP, FOREARM, HAND, passing, shoulder_singular

SPEED = 0.1  # m/s, low enough that all that the joints lose is lost at the singularity


def planned(distance: float, **rest) -> pathplan.Plan:
    """The shortest plan of a line past the wrist singularity."""
    arm = robot("glazer6")
    a, b = passing(arm, distance)
    plans = []
    for start in arm.inverse(a):
        try:
            plans.append(pathplan.plan(task(arm, start, [step("line", b, speed=SPEED, **rest)])))
        except pathplan.UnreachableError as refusal:
            assert "limit" in str(refusal)
    return min(plans, key=lambda plan: plan.motion_time)


@pytest.fixture(scope="module")
def through() -> pathplan.Plan:
    return planned(0.0)


@pytest.mark.parametrize("distance", [1e-3, 1e-4])
def test_wrist_passed(distance: float, through: pathplan.Plan) -> None:
    plan = planned(distance)
    (found,) = plan.audit.passes
    assert (found.kind, found.step, found.joint) == ("wrist", 0, "roll") and not found.through
    assert found.share == pytest.approx(0.5, abs=1e-3)
    assert found.distance == pytest.approx(distance, rel=1e-3)
    # As in tests/path/test_crossing.py: axis 4 turns by sideways over along, the distance away from being in line.
    between = np.pi / 2 + np.deg2rad(30) - DROP
    across = 0.08 + 0.5 * np.sin(np.deg2rad(20)) + FOREARM * np.sin(np.deg2rad(20) + between)
    ratio = np.cos(np.deg2rad(50)) / across * FOREARM * np.sin(between)
    assert found.angle == pytest.approx(distance / (FOREARM * np.sin(between)), rel=2e-3)
    assert found.speed == pytest.approx(plan.arm.joints[3].velocity * distance / ratio, rel=5e-3)
    # The same line through the singularity is held by nothing there: all it is shorter is what the pass loses.
    assert found.lost == pytest.approx(plan.motion_time - through.motion_time, abs=0.01)
    (text,) = (finding.text for finding in plan.audit.findings if "singularity" in finding.text)
    away = {1e-3: "1 mm (0.12 deg)", 1e-4: "0.1 mm (0.012 deg)"}[distance]
    assert text.startswith(f"step 1: passes {away} from a wrist singularity at xyz 685.")
    assert "mm: joint roll holds the tool to " in text and text.endswith(" s lost")
    (data,) = plan.audit.to_dict()["passes"]
    assert data["joint"] == "roll" and data["distance_mm"] == pytest.approx(1e3 * distance, rel=1e-3)


def test_wrist_run_through(through: pathplan.Plan) -> None:
    (found,) = through.audit.passes
    assert found.through and found.lost == 0.0 and found.joint is None
    texts = [finding.text for finding in through.audit.findings]
    assert "step 1: runs through a wrist singularity at xyz 685.9 0.0 495.0 mm, no time lost" in texts


def test_elsewhere_nothing_is_said() -> None:
    arm = robot("glazer6")
    a, b = pose(550, -100, 350), pose(560, 100, 300)
    plan = pathplan.plan(task(arm, arm.inverse(a)[0], [step("line", b)]))
    assert plan.audit.passes == ()
    # A motion of joints runs through the singularity too, and nothing holds it.
    home = np.deg2rad([0, 20, 30, 0, 20, 0])
    plan = pathplan.plan(task(arm, home, [step("joint", home * [1, 1, 1, 1, -1, 1])]))
    assert plan.audit.singularity.value < 0.02 and plan.audit.passes == ()


def test_nearness_of_every_kind() -> None:
    """Distances by construction: two links of 500 and 523 mm, axis 1 to the wrist centre."""
    arm = robot("glazer6")
    bent = np.deg2rad(3.0)
    near = nearness(arm, np.array([0.3, 0.2, -np.pi / 2 + DROP + bent, 0.5, 0.8, 0.0]))
    assert near.kind == "elbow" and near.angle == pytest.approx(bent, abs=1e-9)
    reach = np.sqrt(0.5**2 + FOREARM**2 + 2 * 0.5 * FOREARM * np.cos(bent))
    assert near.distance == pytest.approx(0.5 + FOREARM - reach, abs=1e-9)
    over = shoulder_singular(arm, 0.3)
    flange = arm.forward(over)
    flange[:3, 3] += 4e-3 * np.array([np.cos(0.3), np.sin(0.3), 0.0])
    beside = min(arm.inverse(flange), key=lambda q: np.abs(q - over).max())
    near = nearness(arm, beside)
    assert near.kind == "shoulder" and near.distance == pytest.approx(4e-3, abs=1e-9)
    scara = robot("sorter4")
    near = nearness(scara, np.array([0.4, 0.05, -0.05, 0.3]))
    assert near.kind == "elbow" and near.angle == pytest.approx(0.05, abs=1e-9)
    assert nearness(robot("loader4"), np.zeros(4)).kind == "singular"


def test_dip_in_closed_form() -> None:
    """A speed of v that falls to v / 5 and rises again, both evenly over T: 4/5 v T is not travelled, so 4/5 T lost."""
    v, fall = 0.5, 0.3
    time = np.linspace(0.0, 2.0, 20001)
    speed = v * (1 - 0.8 * np.clip(1 - np.abs(time - 1) / fall, 0, 1))
    dip = speed_dip(time, speed, 9900, 10100)
    assert time[dip.slowest] == pytest.approx(1.0)
    assert dip.lost == pytest.approx(0.8 * fall, rel=1e-3)
    assert speed_dip(time, v + 0 * time, 9900, 10100).lost == 0.0
    # Slower on one side, where something else holds: evenly from one speed to the other.
    slower = np.where(time > 1, np.minimum(speed, 0.3), speed)
    dip = speed_dip(time, slower, 9900, 10100)
    way = np.trapezoid(slower[dip.before : dip.behind + 1], time[dip.before : dip.behind + 1])
    assert dip.lost == pytest.approx(time[dip.behind] - time[dip.before] - way / 0.4, rel=1e-9)


def test_pure_turn_is_held_in_degrees() -> None:
    """The tool turns about the wrist centre, so that axis 6 passes axis 4 at 0.3 deg: the speed told is angular."""
    arm = robot("glazer6")
    behind = np.eye(4)
    behind[2, 3] = -HAND
    arm = arm.equipped(tool=replace(arm.tool, name="centre", flange_from_tool=behind))
    q = np.deg2rad([0.0, 20.0, 30.0, 90.0, 0.3, 0.0])
    middle, axes = arm.forward(q), arm.jacobian(q)[3:].T
    about = axes[5] - axes[3]
    ends = [middle.copy(), middle.copy()]
    for end, angle in zip(ends, (-0.4, 0.4), strict=True):
        turn = Rotation.from_rotvec(angle * about / np.linalg.norm(about)).as_matrix()
        end[:3, :3] = turn @ middle[:3, :3]
    for start in arm.inverse(ends[0]):
        try:
            plan = pathplan.plan(task(arm, start, [step("line", ends[1])]))
        except pathplan.UnreachableError:
            continue
        for found in plan.audit.passes:
            assert found.kind == "wrist" and found.turning and found.joint in ("roll", "flange")
            assert found.angle == pytest.approx(np.deg2rad(0.3), rel=1e-3)
            assert found.speed == pytest.approx(arm.joints[3].velocity * np.sin(np.deg2rad(0.3)), rel=0.02)
            assert any("deg/s here" in finding.text for finding in plan.audit.findings)
            return
    pytest.fail("no branch passes the wrist singularity")
