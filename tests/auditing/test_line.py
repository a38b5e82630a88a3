"""A single line: its ends from texts, its branches, its parts against the trajectory."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from pathplan.arm.kinematics import smallest_singular_value
from pathplan.auditing.line import line_parts, place_from, plan_line
from pathplan.errors import InputError, UnreachableError

ROOT = Path(pathplan.__file__).parents[1]


@pytest.fixture(scope="module")
def arm():
    return pathplan.load_arm(ROOT / "robots" / "glazer6.toml").equipped(tool="cup")


START, GOAL = "500 -300 400 180 0 0", "580 300 300 180 0 30"


def test_a_pose_in_words(arm):
    pose = place_from("500, -0.3m, 400 10 20 30deg", arm, "--from").frame_from_tool
    assert pose[:3, 3] == pytest.approx([0.5, -0.3, 0.4])
    expected = Rotation.from_euler("xyz", [10, 20, 30], degrees=True).as_matrix()  # fixed axes
    np.testing.assert_allclose(pose[:3, :3], expected, atol=1e-15)


def test_joints_and_names(arm):
    target = place_from("joints: 0 10 20 0 0.5rad 0", arm, "--from")
    assert target.joints == pytest.approx([0, *np.radians([10, 20]), 0, 0.5, 0])
    assert np.array_equal(place_from("home", arm, "--to").joints, arm.positions["home"])


FORMS = 'expected a pose "x y z rx ry rz", joint values "joints 0 90 ..." or the name of a position'


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("hoem", f'{FORMS}, got "hoem", did you mean "home"?'),
        ("", f'{FORMS}, got "", positions are "home" or "parked"'),
        ("1 2 3", f"{FORMS}, got 3 numbers"),
        ("joints 1 2 3", "expected 6 joint values after joints, got 3"),
        ("joints 0 0 0 0 0 kg", 'expected an angle such as "10 deg", got "kg"'),
        ("joints 500 0 0 0 0 0", "joint base at 500 deg, expected from -170 deg to 170 deg"),
        ("1 2 3 4 5 nan", 'expected an angle such as "10 deg", got nan'),
        ("1 2 x 4 5 6", 'expected a length such as "20 mm", got "x"'),
        ("2000000 0 0 0 0 0", 'expected coordinates within 1000 m, got "2000000 0 0 0 0 0"'),
    ],
)
def test_what_is_no_place(arm, text, message):
    with pytest.raises(InputError) as error:
        place_from(text, arm, "--from")
    assert str(error.value) == f"--from: {message}"


@pytest.fixture(scope="module")
def line(arm):
    return plan_line(arm, place_from(START, arm, "--from"), place_from(GOAL, arm, "--to"))


def test_the_fastest_branch_is_taken(arm, line):
    plan, starts, able = line
    answers = arm.inverse(place_from(START, arm, "").frame_from_tool)
    assert starts == len(answers) and 1 <= able <= starts
    assert any(np.allclose(plan.task.start, answer) for answer in answers)
    for answer in answers:
        target = place_from("joints " + " ".join(repr(float(np.degrees(q))) for q in answer), arm, "")
        try:
            alone = plan_line(arm, target, place_from(GOAL, arm, "--to"))[0]
        except UnreachableError:
            continue
        assert plan.motion_time <= alone.motion_time + 1e-6
    assert plan.audit.passed


def test_the_tool_goes_straight(line):
    points = line[0].table.pose[:, :3, 3]
    ends = points[[0, -1]]
    assert ends == pytest.approx(np.array([[0.5, -0.3, 0.4], [0.58, 0.3, 0.3]]), abs=1e-9)
    along = (ends[1] - ends[0]) / np.linalg.norm(ends[1] - ends[0])
    off = points - ends[0] - np.outer((points - ends[0]) @ along, along)
    assert np.linalg.norm(off, axis=1).max() < 1e-6


def test_parts_hold_the_most_of_the_dense_trajectory(arm, line):
    """Against the plan at a sixteenth of its cycle, cut by the distance the tool has gone."""
    plan = line[0]
    parts = line_parts(plan)
    fine = pathplan.plan(dataclasses.replace(plan.task, cycle=0.00025)).table
    points = fine.pose[:, :3, 3]
    share = np.linalg.norm(points - points[0], axis=1) / np.linalg.norm(points[-1] - points[0])
    limits = {q: np.array([getattr(joint, q) for joint in arm.joints]) for q in ("velocity", "acceleration", "jerk")}
    assert [part.share_from for part in parts] == pytest.approx(np.arange(10) / 10)
    assert [part.share_to for part in parts] == pytest.approx(np.arange(1, 11) / 10)
    for part in parts:
        mine = (share >= part.share_from) & (share <= part.share_to)
        for quantity, limit in limits.items():
            used = np.abs(getattr(fine, quantity)[mine] / limit).max()
            worst = getattr(part, quantity)
            assert used <= worst.share + 2e-3 and worst.share <= 1 + 1e-6
            assert worst.share <= used + 0.05
        low, high = np.array([joint.position for joint in arm.joints]).T
        margins = np.minimum(high - fine.position[mine], fine.position[mine] - low).min(axis=0)
        k = arm.joint_names.index(part.position.name)
        assert part.position.margin == pytest.approx(margins[k], abs=2e-3)
        assert part.singular_value == pytest.approx(smallest_singular_value(arm, fine.position[mine]).min(), abs=1e-3)
        assert part.tool_speed == pytest.approx(fine.tool_speed[mine].max(), rel=2e-3)
        times = fine.time[mine]
        assert part.time_from == pytest.approx(times[0], abs=3e-3) or part.share_from == 0
        assert part.time_to == pytest.approx(times[-1], abs=3e-3)


def test_speed_and_refusals(arm):
    start, goal = place_from("home", arm, "--from"), place_from("580 -300 200 180 0 0", arm, "--to")
    slow, starts, able = plan_line(arm, start, goal, speed=0.1)
    assert (starts, able) == (1, 1) and 0.0999 < slow.table.tool_speed.max() <= 0.1 * (1 + 1e-6)
    with pytest.raises(UnreachableError, match="out of reach"):
        plan_line(arm, start, place_from("2000 0 500 180 0 0", arm, "--to"))
