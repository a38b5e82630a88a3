"""Quaternions of rotation matrices: against scipy, at half turns, and without jumps of sign."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from pathplan.quaternions import rotations, steady_quaternions


def random_rotations(count):
    return Rotation.random(count, rng=np.random.default_rng(1)).as_matrix()


def test_agrees_with_scipy_up_to_sign():
    matrices = random_rotations(500)
    ours = steady_quaternions(matrices)
    theirs = Rotation.from_matrix(matrices).as_quat(scalar_first=True)
    assert np.abs(np.abs(np.sum(ours * theirs, axis=1)) - 1).max() < 1e-15
    back = Rotation.from_quat(theirs, scalar_first=True).as_matrix()
    assert np.abs(rotations(ours) - back).max() < 2e-15


@settings(deadline=None)
@given(st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda v: np.linalg.norm(v) > 0.1), st.floats(-1e-7, 1e-7))
def test_near_half_turns_lose_nothing(axis, more):
    axis = np.array(axis) / np.linalg.norm(axis)
    rotation = Rotation.from_rotvec(axis * (np.pi + more)).as_matrix()[None]
    assert np.abs(rotations(steady_quaternions(rotation)) - rotation).max() < 2e-15


def test_sign_never_jumps_over_two_whole_turns():
    angle = np.linspace(0, 4 * np.pi, 200)
    matrices = Rotation.from_rotvec(angle[:, None] * [0, 0, 1]).as_matrix()
    q = steady_quaternions(matrices)
    assert q[:, 0] == pytest.approx(np.cos(angle / 2), abs=1e-12)
    pieces = [steady_quaternions(matrices[:77])]
    pieces.append(steady_quaternions(matrices[77:], pieces[0][-1]))
    assert np.array_equal(np.vstack(pieces), q)


def test_the_first_w_is_not_negative():
    assert all(steady_quaternions(rotation[None])[0, 0] >= 0 for rotation in random_rotations(50))
