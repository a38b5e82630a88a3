"""Arms without a closed form: elimination, numeric search, the nearest answer."""

import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm.chain import rot_z, translation


def planar_pose(x, y, angle):
    return translation(x, y, 0) @ rot_z(np.deg2rad(angle))


@pytest.mark.parametrize(
    ("pose", "expected"),
    [
        ((7.5373, 3.9266, 60), [(10, 20, 30), (27.11, -20, 52.89)]),
        ((-3, 2, -90), [(90, 90, -270 + 360), (163.74, -90, -163.74)]),
    ],
)
def test_planar_three_against_the_book(pose, expected, cast):
    """Craig, "Introduction to Robotics", ch. 4 exercise, links 4, 3, 2; printed to 4 decimals and 0.01
    deg.
    """
    answers = np.rad2deg(cast("planar three").inverse(planar_pose(*pose)))
    assert len(answers) == 2
    for row in expected:
        assert np.abs(answers - row).max(axis=1).min() < 0.01


def test_planar_three_out_of_reach(cast):
    """Craig, ch. 4 exercise: (-3.1245, 9.1674, -30 deg) is out of reach."""
    message = "planar three: the pose is out of reach (an arm with 3 axes can't serve every pose; it serves "
    message += "x, y and rotation about z): the nearest answer"
    with pytest.raises(errors.UnreachableError, match=re.escape(message)):
        cast("planar three").inverse(planar_pose(-3.1245, 9.1674, -30))


def test_answers_stand_at_the_pose_and_include_where_it_came_from(cast, spread):
    arm = cast("oblique six")
    q = spread(arm, 4, seed=3)
    branches = arm.inverse_batch(arm.forward(q))
    assert branches.q.shape == (4, 16, 6)
    assert np.isinf(branches.position_error[~branches.valid]).all()
    for pose, row, answers, valid in zip(arm.forward(q), q, branches.q, branches.valid, strict=True):
        answers = answers[valid]
        assert np.abs(arm.forward(answers) - pose).max() < 1e-11
        assert np.abs(answers - row).max(axis=1).min() < 1e-8
        for i, answer in enumerate(answers):
            assert (np.abs(answers[:i] - answer).max(axis=1) > 1e-5).all()


def test_an_offset_wrist_has_eight_branches(cast):
    arm = cast("offset wrist")
    assert arm.inverse_batch(arm.forward([0.3, -0.8, 1.1, 0.4, 0.9, -0.3])[None]).valid.sum() == 8


def test_the_same_pose_gets_the_same_answers(cast):
    arm = cast("oblique six")
    pose = arm.forward([0.3, -0.8, 1.1, 0.4, 0.9, -0.3])
    np.testing.assert_array_equal(arm.inverse(pose), arm.inverse(pose))


def test_the_branch_index_follows_a_path(cast):
    arm = cast("offset wrist")
    q = np.array([0.3, -0.8, 1.1, 0.4, 0.9, -0.3]) + np.linspace(0, 0.2, 8)[:, None]
    branches = arm.inverse_batch(arm.forward(q))
    kept = branches.valid.all(axis=0)
    assert kept.sum() == 8
    steps = np.abs((np.diff(branches.q, axis=0) + np.pi) % (2 * np.pi) - np.pi)
    assert steps[:, kept].max() < 0.2


def test_out_of_reach_the_nearest_answer_is_told(cast):
    arm = cast("oblique six")
    far = translation(30.0, 0, 0)
    with pytest.raises(
        errors.UnreachableError, match="oblique six: the pose is out of reach: the nearest answer is"
    ) as caught:
        arm.inverse(far)
    reached = arm.forward(caught.value.data["best"])
    assert caught.value.data["position_error"] == pytest.approx(np.linalg.norm(reached[:3, 3] - far[:3, 3]))


def test_seven_axes_give_answers_that_stand_at_the_pose(cast, spread):
    arm = cast("seven")
    pose = arm.forward(spread(arm, 1)[0])
    answers = arm.inverse(pose)
    assert len(answers) > 4
    assert np.abs(arm.forward(answers) - pose).max() < 1e-11
