"""Through singularities and past them: what the joints can follow is followed exactly, by referee pinocchio."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.arm.kinematics import smallest_singular_value
from pathplan.errors import UnreachableError
from pathplan.path import follow_task
from tests.arm.conftest import pinocchio_model

FOREARM = np.hypot(60.0, 520.0) / 1e3  # m, from axis 3 to the wrist centre of glazer6
DROP = np.arctan2(60.0, 520.0)  # rad, of the line from axis 3 to the wrist centre below axis 4, seen from it
HAND = 0.085  # m, wrist centre to mechanical interface


def line_about(pose: np.ndarray, half: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Start and end of a line through a pose, `half` (3,) m to each side."""
    a, b = pose.copy(), pose.copy()
    a[:3, 3] -= half
    b[:3, 3] += half
    return a, b


def follow(cast, arm, start, target):
    return follow_task(cast.task(arm, start, [cast.step("line", target)]))


def check_against_pinocchio(arm, joint_path, a, b) -> None:
    """Every pose on the line from a to b within 1 um and 1 urad."""
    import pinocchio as pin

    model, data, frame = pinocchio_model(arm)
    chord = b[:3, 3] - a[:3, 3]
    for q in joint_path(np.linspace(0.0, joint_path.length, 101)):
        pin.framesForwardKinematics(model, data, q)
        placed = data.oMf[frame]
        rotation, point = placed.rotation, placed.translation
        along = (point - a[:3, 3]) @ chord / (chord @ chord)
        assert np.linalg.norm(point - a[:3, 3] - along * chord) < 1e-6
        assert Rotation.from_matrix(a[:3, :3].T @ rotation).magnitude() < 1e-6


def test_wrist_crossed_in_the_plane_of_the_arm(cast) -> None:
    """Axes 1, 4 and 6 rest; the closed form is that of two links, and q5 passes zero smoothly."""
    arm = cast.robot("glazer6")
    q = np.deg2rad([0.0, 20.0, 30.0, 0.0, 0.0, 0.0])
    a, b = line_about(arm.forward(q), np.array([0.08, 0.0, 0.1]))
    start = next(answer for answer in arm.inverse(a) if np.abs(answer[[0, 3, 5]]).max() < 1e-9)
    path = follow(cast, arm, start, b)
    cast.check_path(path)
    s = np.linspace(0.0, 1.0, 101)
    found = path.stretches[0].path(s * path.stretches[0].path.length)
    # From the shoulder axis, at x = 80, z = 450 mm, to the wrist centre, behind the interface along its axis z.
    ends = [pose[:3, 3] - HAND * pose[:3, 2] - [0.08, 0.0, 0.45] for pose in (a, b)]
    point = ends[0] + s[:, None] * (ends[1] - ends[0])
    reach, up = np.hypot(point[:, 0], point[:, 2]), np.arctan2(point[:, 0], point[:, 2])
    inner = np.arccos((0.5**2 + FOREARM**2 - reach**2) / (2 * 0.5 * FOREARM))  # law of cosines, at axis 3
    outer = np.arcsin(FOREARM * np.sin(inner) / reach)  # and of sines, at axis 2
    shoulder = up - outer
    elbow = np.pi / 2 - inner + DROP
    pitch = q[1] + q[2]  # of the tool, which stays
    expected = np.zeros((101, 6))
    expected[:, 1], expected[:, 2], expected[:, 4] = shoulder, elbow, pitch - shoulder - elbow
    assert expected[0, 4] * expected[-1, 4] < 0
    np.testing.assert_allclose(found, expected, atol=1e-8)


def test_wrist_crossed_sideways(cast) -> None:
    """The middle of the line is singular to rounding; axis 5 changes sign: wrist positive becomes negative."""
    arm = cast.robot("glazer6")
    a, b = line_about(arm.forward(np.deg2rad([20, 10, 40, 90, 0, 0.0])), np.array([-0.05, 0.14, 0.02]))
    for start in arm.inverse(a):
        if abs(start[4]) > 0.5:  # elbow down, shoulder right: nothing is singular there
            continue
        try:
            path = follow(cast, arm, start, b)
        except UnreachableError as refusal:  # a joint starts within its limits and ends beyond
            assert "limit" in str(refusal)
            continue
        cast.check_path(path)
        joint_path = path.stretches[0].path
        check_against_pinocchio(arm, joint_path, a, b)
        ends = joint_path([0.0, joint_path.length])
        assert ends[0, 4] * ends[1, 4] < 0
        assert np.abs(ends[1] - ends[0]).max() < 1.0
        break
    else:
        pytest.fail("no branch crosses")


def test_shoulder_crossed(cast) -> None:
    """The wrist centre passes over axis 1, and the arm reaches over itself instead of turning about."""
    arm = cast.robot("glazer6")
    q = shoulder_singular(arm, 0.3)
    a, b = line_about(arm.forward(q), 0.06 * np.array([np.cos(0.3), np.sin(0.3), 0.2]))
    start = min(arm.inverse(a), key=lambda answer: np.abs(answer - q).max())
    path = follow(cast, arm, start, b)
    cast.check_path(path)
    joint_path = path.stretches[0].path
    check_against_pinocchio(arm, joint_path, a, b)
    assert np.ptp(joint_path(np.linspace(0, joint_path.length, 50))[:, 0]) < 1e-6  # radially: axis 1 rests
    assert smallest_singular_value(arm, joint_path(np.array([joint_path.length / 2])))[0] < 1e-6


def shoulder_singular(arm, q1: float) -> np.ndarray:
    """glazer6 with its wrist centre on axis 1."""
    from scipy.optimize import brentq

    def joints(q2: float) -> np.ndarray:
        return np.array([q1, q2, np.deg2rad(-60), 0.4, 0.9, 0.2])

    def radius(q2: float) -> float:
        flange = arm.forward(joints(q2))
        centre = flange[:3, 3] - HAND * flange[:3, 2]
        return float(centre[0] * np.cos(q1) + centre[1] * np.sin(q1))

    return joints(brentq(radius, *arm.joints[1].position, xtol=1e-15))


def passing(arm, distance: float) -> tuple[np.ndarray, np.ndarray]:
    """A line of 400 mm that passes a wrist singularity at a distance in m, square to the plane of the arm."""
    middle = arm.forward(np.deg2rad([0.0, 20.0, 30.0, 90.0, 0.0, 0.0]))
    middle[:3, 3] -= distance * np.array([np.sin(np.deg2rad(20)), 0.0, np.cos(np.deg2rad(20))])
    return line_about(middle, np.array([0.0, 0.2, 0.0]))


@pytest.mark.parametrize("distance", [1e-3, 1e-4, 1e-5])
def test_near_a_wrist_singularity_axes_4_and_6_turn_over(cast, distance: float) -> None:
    """They take over the half turn that the tool would make about the forearm, within a stretch of some distances."""
    arm = cast.robot("glazer6")
    a, b = passing(arm, distance)
    path = None
    for start in arm.inverse(a):
        try:
            path = follow(cast, arm, start, b)
        except UnreachableError as refusal:
            assert "limit" in str(refusal)
    assert path is not None
    cast.check_path(path)
    joint_path = path.stretches[0].path
    check_against_pinocchio(arm, joint_path, a, b)
    middle = joint_path.length / 2 + 10 * distance / arm.length * np.array([-1.0, 1.0])
    turned = np.diff(joint_path(middle), axis=0)[0]
    # Going sideways by y turns the forearm, 50 deg below level, about axis 1; the distance, along the upper arm, has
    # lowered it about axis 3. Axis 4 points from where it is to where axes 4 and 6 would be in line.
    between = np.pi / 2 + np.deg2rad(30) - DROP  # upper arm to wrist centre
    across = 0.08 + 0.5 * np.sin(np.deg2rad(20)) + FOREARM * np.sin(np.deg2rad(20) + between)
    sideways, along = 10 * np.cos(np.deg2rad(50)) / across, 1 / (FOREARM * np.sin(between))
    assert abs(turned[3]) == pytest.approx(2 * np.arctan(sideways / along), abs=30 * distance)
    assert turned[3] + turned[5] == pytest.approx(0, abs=30 * distance)  # the tool stays


def test_too_near_a_singularity(cast) -> None:
    """A micrometre off the singularity the wrist would turn over within a micrometre: refused with the numbers."""
    arm = cast.robot("glazer6")
    a, b = passing(arm, 1e-6)
    for start in arm.inverse(a):
        with pytest.raises(UnreachableError, match=r"a wrist singularity|its limit") as caught:
            follow(cast, arm, start, b)
        if "singular" in caught.value.data:
            assert caught.value.data["singular"]["kind"] == "wrist"
            assert caught.value.data["singular"]["value"] < 1e-5
            assert caught.value.data["share"] == pytest.approx(0.5, abs=1e-3)
            return
    pytest.fail("no branch meets the singularity")


@pytest.mark.parametrize("seed", [0, 8])
def test_random_lines_through_wrist_singularities(cast, seed: int) -> None:
    """Whatever the line, one that runs through the singularity is followed, unless a joint meets its limit."""
    arm = cast.robot("glazer6")
    rng = np.random.default_rng(seed)
    q = np.concatenate([rng.uniform(-1, 1, 1), rng.uniform(-0.3, 0.6, 2), rng.uniform(-1, 1, 3) * [1, 0, 1]])
    half = rng.normal(size=3)
    a, b = line_about(arm.forward(q), 0.08 * half / np.linalg.norm(half))
    for start in arm.inverse(a):
        try:
            path = follow(cast, arm, start, b)
        except UnreachableError as refusal:
            assert "limit" in str(refusal), str(refusal)
            continue
        cast.check_path(path, dense=5)
        check_against_pinocchio(arm, path.stretches[0].path, a, b)
