"""Steps that tolerate another orientation: bent through singularities, within the tolerance, the position exact."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from pathplan.errors import UnreachableError
from pathplan.path.bending import least_turn
from pathplan.path.bends import Bend, Bump
from pathplan.path.geometry import arc_about
from tests.arm.conftest import pinocchio_model
from tests.path.test_crossing import DROP, FOREARM, line_about, passing, shoulder_singular


def fastest(cast, arm, a, b, **rest) -> pathplan.Plan:
    """The fastest plan of a line over the joint vectors it may start from."""
    plans = []
    for start in arm.inverse(a):
        if abs(start[5]) > np.pi:  # the same but for a turn of the last joint
            continue
        try:
            plans.append(pathplan.plan(cast.task(arm, start, [cast.step("line", b, **rest)])))
        except UnreachableError as refusal:
            assert "limit" in str(refusal) or "singular" in str(refusal)
    return min(plans, key=lambda plan: plan.motion_time)


def check_line(arm, plan, a, b) -> np.ndarray:
    """By pinocchio: every row within 1 um of the line. Its turn (N, 3) in the tool frame off its orientation."""
    import pinocchio as pin

    model, data, frame = pinocchio_model(arm)
    direction = (b[:3, 3] - a[:3, 3]) / np.linalg.norm(b[:3, 3] - a[:3, 3])
    turned = []
    for q in plan.table.position:
        pin.framesForwardKinematics(model, data, q)
        off = data.oMf[frame].translation - a[:3, 3]
        assert np.linalg.norm(off - direction * (direction @ off)) < 1e-6
        turned.append(Rotation.from_matrix(a[:3, :3].T @ data.oMf[frame].rotation).as_rotvec())
    return np.array(turned)


@pytest.mark.parametrize("key", ["orientation_tolerance", "tilt"])
def test_wrist_line_is_bent(cast, key: str) -> None:
    """1 mm past the singularity: the tool turns by the angle between axes 4 and 6, and saves half the time."""
    arm = cast.robot("glazer6")
    a, b = passing(arm, 1e-3)
    stiff, bent = fastest(cast, arm, a, b), fastest(cast, arm, a, b, **{key: np.deg2rad(2)})
    assert bent.motion_time < 0.6 * stiff.motion_time
    assert bent.audit.passed
    turned = check_line(arm, bent, a, b)
    assert np.abs(turned[[0, -1]]).max() < 1e-9  # at its targets the tool stands as programmed
    # With the wrist centre held the angle would be this; with the tool centre point held, the hand's length helps.
    between = np.pi / 2 + np.deg2rad(30) - DROP
    angle = 1e-3 / (FOREARM * np.sin(between))
    used = np.linalg.norm(turned, axis=1).max()
    assert 0.7 * angle < used < angle
    if key == "tilt":
        assert np.abs(turned[:, 2]).max() < 1e-7
    (turn,) = bent.audit.turns
    assert turn.angle == pytest.approx(used, rel=1e-3) and turn.allowed == pytest.approx(np.deg2rad(2))
    assert "step 1: the tool leaves its orientation by up to 0.103 deg, 2 deg are allowed" in [
        finding.text for finding in bent.audit.findings
    ]
    assert bent.audit.deviation_midway.angle < 1e-6  # from the path that is followed


def test_too_small_a_tolerance_changes_nothing(cast) -> None:
    arm = cast.robot("glazer6")
    a, b = passing(arm, 1e-3)
    stiff, kept = fastest(cast, arm, a, b), fastest(cast, arm, a, b, orientation_tolerance=np.deg2rad(0.1))
    np.testing.assert_array_equal(stiff.table.position, kept.table.position)
    text = "step 1: the tool keeps its orientation, nothing of 0.1 deg would save time"
    assert text in [finding.text for finding in kept.audit.findings]


def test_what_is_refused_without_is_planned_with_it(cast) -> None:
    arm = cast.robot("glazer6")
    a, b = passing(arm, 1e-6)
    with pytest.raises(ValueError, match="empty"):
        fastest(cast, arm, a, b)
    plan = fastest(cast, arm, a, b, orientation_tolerance=np.deg2rad(0.01))
    assert plan.audit.passed
    assert np.linalg.norm(check_line(arm, plan, a, b), axis=1).max() < 3e-6


def test_shoulder_line_is_bent(cast) -> None:
    """1.5 mm beside axis 1: instead of turning about by half a turn, axis 1 hardly moves."""
    arm = cast.robot("glazer6")
    q = shoulder_singular(arm, 0.3)
    middle = arm.forward(q)
    middle[:3, 3] += 1.5e-3 * np.array([-np.sin(0.3), np.cos(0.3), 0.0])
    a, b = line_about(middle, 0.06 * np.array([np.cos(0.3), np.sin(0.3), 0.2]))
    start = min(arm.inverse(a), key=lambda answer: np.abs(answer - q).max())
    plan = pathplan.plan(cast.task(arm, start, [cast.step("line", b, orientation_tolerance=np.deg2rad(5))]))
    assert plan.audit.passed
    used = np.linalg.norm(check_line(arm, plan, a, b), axis=1).max()
    assert 1.5e-3 / 0.085 * 0.98 < used < np.deg2rad(5)  # the wrist centre moves by the hand's length times the angle
    assert np.ptp(plan.table.position[:, 0]) < 0.3


def test_least_turn_is_least(cast) -> None:
    """Against scipy: minimise the rotation over all joint vectors that keep the point and put axes 4 and 6 in line."""
    from scipy.optimize import minimize

    arm = cast.robot("glazer6", "nozzle") if "nozzle" in cast.robot("glazer6").tools else cast.robot("glazer6")
    pose = arm.forward(np.deg2rad([10, 20, 30, 70, 1.5, 20]))
    q = min(arm.inverse(pose), key=lambda answer: np.abs(answer - np.deg2rad([10, 20, 30, 70, 1.5, 20])).max())
    turn = least_turn(arm, pose, q, upright=False)
    assert turn is not None

    def rotation(joints: np.ndarray) -> np.ndarray:
        reached = arm.forward(np.array([*joints[:3], q[3], 0.0, joints[3]]))
        return Rotation.from_matrix(pose[:3, :3].T @ reached[:3, :3]).as_rotvec()

    def missing(joints: np.ndarray) -> np.ndarray:
        return 10 * (arm.forward(np.array([*joints[:3], q[3], 0.0, joints[3]]))[:3, 3] - pose[:3, 3])

    found = minimize(
        lambda joints: 1e3 * rotation(joints) @ rotation(joints),
        [*q[:3], q[5]],
        constraints={"type": "eq", "fun": missing},
        options={"ftol": 1e-14, "maxiter": 500},
    )
    assert np.linalg.norm(turn) == pytest.approx(np.linalg.norm(rotation(found.x)), rel=1e-3)
    upright = least_turn(arm, pose, q, upright=True)
    assert upright is not None and abs(upright[2]) < 1e-10
    assert np.linalg.norm(upright) >= np.linalg.norm(turn) * (1 - 1e-6)


def test_bent_arc_has_exact_derivatives() -> None:
    """Central differences of the poses, over an arc on which the tool turns too."""
    start = np.eye(4)
    start[:3, 3] = [0.5, 0.1, 0.3]
    arc = arc_about(start, np.array([0.4, 0.0, 0.3]), np.array([0.0, 0.0, 1.0]), 1.5, 0.6, along=True)
    middle = float(arc.length[0]) / 2
    bent = arc.bent(np.array([0]), [Bend((Bump(middle, 0.4, np.array([0.1, -0.2, 0.05])),))])
    s, h = middle + np.array([-0.37, -0.2, 0.0, 0.1, 0.3]), 1e-4
    one = np.ones(5, dtype=np.intp)
    jets = bent.jets(one, s)
    before, after = (bent.jets(one, s + step) for step in (-h, h))
    turn = Rotation.from_matrix(after.rotation @ before.rotation.transpose(0, 2, 1)).as_rotvec()
    np.testing.assert_allclose(jets.turning[0], turn / (2 * h), atol=1e-6)
    for order in (1, 2):
        difference = (after.turning[order - 1] - before.turning[order - 1]) / (2 * h)
        np.testing.assert_allclose(jets.turning[order], difference, atol=1e-4)
    np.testing.assert_array_equal(jets.position, arc.jets(0 * one, s).position)
    np.testing.assert_array_equal(bent.unbent().poses(one, s), arc.poses(0 * one, s))


def test_bends_keep_out_of_corners(cast) -> None:
    """Blended steps on both sides of the tolerant one are as exact as ever."""
    arm = cast.robot("glazer6")
    a, b = passing(arm, 1e-3)
    before, behind = a.copy(), b.copy()
    before[2, 3] += 0.06
    behind[2, 3] += 0.06
    steps = [
        cast.step("line", a, blend=cast.length(20)),
        cast.step("line", b, blend=cast.length(20), orientation_tolerance=np.deg2rad(2)),
        cast.step("line", behind),
    ]
    times = []
    for start in arm.inverse(before):
        try:
            plan = pathplan.plan(cast.task(arm, start, steps))
        except UnreachableError:
            continue
        cast.check_corners(plan.path)
        assert plan.audit.passed
        stretch = plan.path.stretches[0]
        s = np.linspace(0, stretch.path.length, 400)
        off = cast.rotation_angle(stretch.programmed(s)[0][:, :3, :3], arm.forward(stretch.path(s))[:, :3, :3])
        corners = np.zeros(400, dtype=bool)
        for corner in plan.path.corners:
            corners |= (s >= corner.s_from) & (s <= corner.s_to)
        assert off[corners].max() < 1e-6
        times.append((plan.motion_time, off.max()))
    assert min(times)[1] == pytest.approx(np.deg2rad(0.1035), rel=0.01)
