"""What can't be followed says so in one line: step, share, pose, joint and limit or singularity, best branch."""

from __future__ import annotations

import re

import numpy as np
import pytest

from pathplan.errors import InputError, PathplanError, UnreachableError
from pathplan.path import follow_task

NUMBER = r"[0-9.e-]+"


def refusal(task, message: str, kind: type[PathplanError] = UnreachableError) -> PathplanError:
    """The error of a task whose whole message is `message`, where <n> stands for a number that rounding decides."""
    pattern = re.escape(message).replace("<n>", NUMBER)
    with pytest.raises(kind, match=f"^{pattern}$") as caught:
        follow_task(task)
    return caught.value


def singular_start() -> np.ndarray:
    """Joints of glazer6 with axes 4 and 6 in line."""
    return np.deg2rad([20, 10, 40, 0, 0, 0])


def test_unreachable_pose(cast) -> None:
    arm = cast.robot("glazer6")
    error = refusal(
        cast.task(arm, arm.positions["home"], [cast.step("joint", cast.pose(1400, 0, 300))]),
        "t.toml: step[1]: glazer6: the pose is out of reach: the nearest answer is off by <n> mm",
    )
    assert error.data["step"] == 0 and error.data["position_error"] > 0.1
    np.testing.assert_array_equal(error.data["pose"], cast.pose(1400, 0, 300))


def test_second_step_is_named_when_the_first_is_fine(cast) -> None:
    arm = cast.robot("glazer6")
    steps = [cast.step("joint", cast.pose(550, -100, 350)), cast.step("line", cast.pose(1400, 0, 300))]
    refusal(
        cast.task(arm, arm.positions["home"], steps),
        "t.toml: step[2]: glazer6: the pose is out of reach: the nearest answer is off by <n> mm",
    )


def test_pose_tilted_for_four_axes(cast) -> None:
    arm = cast.robot("sorter4")
    pose = arm.forward(arm.positions["home"])
    tilt = np.eye(4)
    tilt[:3, :3] = cast.pose(0, 0, 0, 5)[:3, :3]
    refusal(
        cast.task(arm, arm.positions["home"], [cast.step("line", pose @ tilt)]),
        "t.toml: step[1]: sorter4: the pose is tilted 5 deg about y; "
        "sorter4 serves x, y, z and rotation about z; tolerance 0.001 deg",
    )


def test_tilt_within_the_tolerance_is_taken_out_of_the_line(cast) -> None:
    """0.0005 deg off level: the arm takes the level pose, and follows the line to it exactly."""
    arm = cast.robot("sorter4")
    pose = arm.forward(arm.positions["home"])
    pose[:3, 3] -= [0.05, 0.02, 0.0]
    tilted = pose @ cast.pose(0, 0, 0, 5e-4)
    path = follow_task(cast.task(arm, arm.positions["home"], [cast.step("line", tilted)]))
    cast.check_path(path)
    np.testing.assert_allclose(arm.forward(path.targets[-1])[:3, 3], pose[:3, 3], atol=1e-9)


def test_target_outside_the_limits(cast) -> None:
    arm = cast.robot("loader4")
    pose = arm.forward(arm.positions["home"])
    pose[0, 3] = 9.0
    refusal(
        cast.task(arm, arm.positions["home"], [cast.step("joint", pose)]),
        "t.toml: step[1]: loader4: the pose needs x at 8880 mm, limit 2000 mm",
    )


def test_start_outside_the_limits(cast) -> None:
    arm = cast.robot("loader4")
    start = arm.positions["home"] + np.array([5, 0, 0, 0])
    task = cast.task(arm, start, [cast.step("joint", arm.positions["home"])])
    refusal(task, "test: start: joint x at 6000 mm, expected from 0 mm to 2000 mm", InputError)


def test_joint_target_outside_the_limits(cast) -> None:
    arm = cast.robot("loader4")
    task = cast.task(arm, arm.positions["home"], [cast.step("joint", np.array([-0.1, 0, 0, 0]))])
    refusal(task, "t.toml: step[1]: joint x at -100 mm, expected from 0 mm to 2000 mm", InputError)


def test_line_that_starts_singular(cast) -> None:
    arm = cast.robot("glazer6")
    start = singular_start()
    b = arm.forward(start)
    b[:3, 3] += 0.1 * b[:3, 1]
    error = refusal(
        cast.task(arm, start, [cast.step("line", b)]),
        "t.toml: step[1]: no branch can follow this line: "
        "the only branch gets to 0.0 % of it, xyz 565.4 205.8 517.5 mm, rpy <n> -40.0 20.0 deg, "
        "where it starts in a wrist singularity (smallest singular value <n>) "
        "and goes on only with roll at <n> deg and flange at <n> deg",
    )
    assert error.data["share"] == 0.0


@pytest.mark.parametrize(
    ("joints", "kind"),
    [([20, 10, 40, 0, 0, 0], "wrist"), ([20, 10, None, 30, 50, 20], "elbow")],
)
def test_singularities_have_names(cast, joints: list, kind: str) -> None:
    from pathplan.arm.kinematics import smallest_singular_value
    from pathplan.path.singular import singular_kind

    arm = cast.robot("glazer6")
    q = np.deg2rad([0.0 if value is None else value for value in joints])
    if None in joints:  # search the joint that stretches the arm
        trial = np.tile(q, (200001, 1))
        trial[:, 2] = np.linspace(*arm.joints[2].position, len(trial))
        q = trial[np.argmin(smallest_singular_value(arm, trial[::100])) * 100]
    assert smallest_singular_value(arm, q[None])[0] < 1e-2
    assert singular_kind(arm, q) == kind


def test_shoulder_singularity_is_named(cast) -> None:
    """The wrist centre on axis 1: glazer6 reaches over itself."""
    from scipy.optimize import brentq

    from pathplan.arm.kinematics import smallest_singular_value
    from pathplan.path.singular import singular_kind

    arm = cast.robot("glazer6")

    def joints(q2: float) -> np.ndarray:
        return np.array([0.3, q2, np.deg2rad(-60), 0.4, 0.9, 0.2])

    def radius(q2: float) -> float:
        """Distance of the wrist centre from axis 1 along the arm's plane: axes 4 and 6 meet 85 mm behind the flange."""
        flange = arm.equipped(tool=None).forward(joints(q2))
        centre = flange[:3, 3] - 0.085 * flange[:3, 2]
        return float(centre[0] * np.cos(0.3) + centre[1] * np.sin(0.3))

    q = joints(brentq(radius, *arm.joints[1].position))
    assert smallest_singular_value(arm, q[None])[0] < 1e-6
    assert singular_kind(arm, q) == "shoulder"


def test_line_out_of_reach_in_the_middle(cast) -> None:
    arm = cast.robot("sorter4")
    a = arm.forward(arm.positions["home"])
    a[:3, 3] = [0.3, -0.03, a[2, 3]]
    b = a.copy()
    b[0, 3] = -0.3
    error = refusal(
        cast.task(arm, arm.inverse(a)[0], [cast.step("line", b)]),
        "t.toml: step[1]: no branch can follow this line: the only branch (elbow left) gets to <n> % of it, "
        "xyz <n> -30.0 <n> mm, rpy <n> 0.0 <n> deg, where joint elbow meets its limit -145 deg",
    )
    assert error.data["joint"] == "elbow" and error.data["limit"] == pytest.approx(np.deg2rad(-145))


def test_line_beyond_the_reach(cast) -> None:
    """Both ends are in reach of the outstretched arm, the middle of the arc between is not."""
    arm = cast.robot("sorter4")
    a = arm.forward(arm.positions["home"])
    a[:3, 3] = [0.5, -0.35, a[2, 3]]
    b = a.copy()
    b[1, 3] = 0.35
    via = [680.0, 0.0, 1e3 * a[2, 3]]
    error = refusal(
        cast.task(arm, arm.inverse(a)[0], [cast.step("arc", b, via=via)]),
        "t.toml: step[1]: no branch can follow this arc: the only branch (elbow left) gets to <n> % of it, "
        "xyz <n> <n> <n> mm, rpy <n> 0.0 <n> deg, where the arc leaves the reach of the arm",
    )
    # The reach is the sum of both links; the pose named lies on that circle.
    assert np.linalg.norm(error.data["pose"][:2, 3]) == pytest.approx(0.65, abs=1e-6)


def test_line_through_a_limit(cast) -> None:
    arm = cast.robot("loader4")
    turn = arm.positions["home"].copy()
    turn[3] = np.deg2rad(170)
    a = arm.forward(turn)
    b = a @ cast.pose(0, 0, 0, 0, 0, -60)
    error = refusal(
        cast.task(arm, turn, [cast.step("line", b)]),
        "t.toml: step[1]: no branch can follow this line: the only branch gets to 33.3 % of it, "
        "xyz <n> <n> <n> mm, rpy <n> 0.0 <n> deg, where joint wrist meets its limit 190 deg",
    )
    assert error.data["share"] == pytest.approx(1 / 3)
    assert error.data["joint"] == "wrist" and error.data["limit"] == pytest.approx(np.deg2rad(190))
    np.testing.assert_allclose(error.data["best"][3], np.deg2rad(190), atol=1e-9)


def test_the_best_of_several_branches_is_described(cast) -> None:
    """Whatever branch is taken at the start of a line, some limit comes; the one that gets furthest is told."""
    arm = cast.robot("glazer6")
    a = arm.forward(np.deg2rad([0, 20, 30, 90, 0, 0]))
    a[:3, 3] -= 1e-6 * np.array([np.sin(np.deg2rad(20)), 0.2e6, np.cos(np.deg2rad(20))])
    b = a.copy()
    b[1, 3] += 0.4
    task = cast.task(arm, arm.positions["home"], [cast.step("joint", a), cast.step("line", b)])
    error = refusal(
        task,
        "t.toml: step[2]: no branch can follow this line: "
        "the best of 4 branches (shoulder left, elbow up, wrist positive) gets to 50.0 % of it, "
        "xyz 685.9 0.0 495.0 mm, rpy -140.0 0.0 -90.0 deg, "
        "where it meets a wrist singularity (smallest singular value <n>): "
        "joint roll at its 320 deg/s would hold the tool to <n> mm/s",
    )
    singular = error.data["singular"]
    assert singular["kind"] == "wrist" and singular["joint"] == "roll"
    assert singular["speed"] < 1e-3  # m/s
    # The place is right: there the tool points along the forearm, so that axes 4 and 6 are in line.
    assert np.sin(error.data["best"][4]) == pytest.approx(0, abs=1e-3)


def test_configuration_not_to_be_had(cast) -> None:
    arm = cast.robot("glazer6")
    asked = {"shoulder": "right", "elbow": "down"}
    refusal(
        cast.task(arm, arm.positions["home"], [cast.step("joint", cast.pose(550, -100, 350), configuration=asked)]),
        "t.toml: step[1]: configuration: the target can't be reached with shoulder right, elbow down, "
        "only with shoulder left, elbow up, wrist positive or shoulder left, elbow up, wrist negative",
    )


def test_configuration_not_kept_along_a_line(cast) -> None:
    arm = cast.robot("glazer6")
    steps = [
        cast.step("joint", cast.pose(500, 150, 300), configuration={"wrist": "positive"}),
        cast.step("line", cast.pose(500, 50, 250), configuration={"wrist": "negative"}),
    ]
    refusal(
        cast.task(arm, arm.positions["home"], steps),
        "t.toml: step[2]: no branch can follow this line: the best of 2 branches "
        "(shoulder left, elbow up, wrist positive) gets to 100.0 % of it, xyz 500.0 50.0 250.0 mm, "
        "rpy 180.0 0.0 0.0 deg, where it arrives, but not with wrist negative",
    )


@pytest.mark.parametrize("kind", ["line", "arc"])
def test_blend_longer_than_its_step(cast, kind: str) -> None:
    arm = cast.robot("glazer6")
    a, b, c = cast.pose(500, -150, 350), cast.pose(600, -150, 350), cast.pose(600, 150, 350)
    rest = {"via": [550, -150, 400]} if kind == "arc" else {}
    steps = [cast.step(kind, b, blend=cast.length(200), **rest), cast.step("line", c)]
    size = "100 mm" if kind == "line" else "157.1 mm"
    refusal(
        cast.task(arm, arm.inverse(a)[0], steps),
        f"t.toml: step[1]: blend 200 mm is longer than its {kind} of {size}",
        InputError,
    )


def test_blend_as_long_as_its_line_is_kept(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = cast.pose(500, -150, 350), cast.pose(600, -150, 350), cast.pose(600, 150, 350)
    steps = [cast.step("line", b, blend=cast.length(100)), cast.step("line", c)]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    cast.check_path(path)
    assert path.corners[0].used == pytest.approx(0.1)


def test_blend_that_means_nothing(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = cast.pose(500, -150, 350), cast.pose(600, -150, 350), cast.pose(600, 150, 350)
    steps = [cast.step("line", b, blend=cast.angle(10)), cast.step("line", c)]
    refusal(
        cast.task(arm, arm.inverse(a)[0], steps),
        "t.toml: step[1]: blend 10 deg: neither step here turns anything, expected a length",
        InputError,
    )
    turn = a @ cast.pose(0, 0, 0, 20)
    steps = [cast.step("line", turn, blend=cast.length(10)), cast.step("line", turn @ cast.pose(0, 0, 0, 0, 20))]
    refusal(
        cast.task(arm, arm.inverse(a)[0], steps),
        "t.toml: step[1]: blend 10 mm: neither step here moves the tool centre point, expected an angle",
        InputError,
    )
