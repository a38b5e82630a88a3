"""Canonical subproblems against a dense scan of the angle."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.arm.subproblems import angle_about, rotate, rotation_about, two_angles, two_link

SCAN = np.linspace(-np.pi, np.pi, 20_001)
STEP = SCAN[1] - SCAN[0]

vectors = st.lists(st.floats(-2, 2), min_size=3, max_size=3).map(np.array)
axes = vectors.filter(lambda v: np.linalg.norm(v) > 0.1).map(lambda v: v / np.linalg.norm(v))


def turned(axis, vector):
    return rotate(axis, SCAN, np.repeat(vector[:, None], len(SCAN), axis=1))


@settings(deadline=None)
@given(axes, vectors, st.floats(-3, 3))
def test_rotate_is_rodrigues_formula(axis, vector, angle):
    from scipy.spatial.transform import Rotation

    expected = Rotation.from_rotvec(axis * angle).apply(vector)
    np.testing.assert_allclose(rotate(axis, np.array([angle]), vector[:, None])[:, 0], expected, atol=1e-14)


@settings(deadline=None)
@given(axes, vectors, vectors)
def test_one_angle_comes_nearest(axis, start, end):
    angle = angle_about(axis, start[:, None], end[:, None])
    best = np.linalg.norm(rotate(axis, angle, start[:, None])[:, 0] - end)
    scan = np.linalg.norm(turned(axis, start) - end[:, None], axis=0).min()
    assert best <= scan + 1e-9


@settings(deadline=None)
@given(axes, axes, vectors, st.floats(-3, 3))
def test_two_angles_meet_a_plane_or_come_nearest(axis, direction, vector, distance):
    if np.linalg.norm(np.cross(axis, direction)) < 0.05:
        return
    middle, half = two_angles(axis, direction, vector[:, None], np.array([distance]))
    off = [abs(direction @ rotate(axis, middle + s * half, vector[:, None])[:, 0] - distance) for s in (1, -1)]
    scan = np.abs(direction @ turned(axis, vector) - distance)
    assert 0 <= half[0] <= np.pi
    assert max(off) <= scan.min() + 1e-7  # both answers, or the nearest one twice
    reach = np.linalg.norm(np.cross(axis, vector)) * np.linalg.norm(np.cross(axis, direction))
    away = abs(distance - (axis @ direction) * (axis @ vector))
    if reach > 0.01 and away < 0.99 * reach:
        assert max(off) < 1e-12
        # and there are no others: every scanned angle that all but meets the plane is one of the two
        slope = reach * np.sqrt(1 - (away / reach) ** 2)
        for angle in SCAN[scan < slope * STEP / 2]:
            distances = [abs((angle - (middle + s * half)[0] + np.pi) % (2 * np.pi) - np.pi) for s in (1, -1)]
            assert min(distances) < 0.1


@settings(deadline=None)
@given(axes, vectors)
def test_nearest_turn_of_a_rotation(axis, rotation_vector):
    from scipy.spatial.transform import Rotation

    matrix = Rotation.from_rotvec(rotation_vector).as_matrix()
    angle = rotation_about(axis, matrix[:, :, None])[0]

    def agreement(angles):
        scanned = Rotation.from_rotvec(axis * np.atleast_1d(angles)[:, None]).as_matrix()
        return np.einsum("nij,ij->n", scanned, matrix)

    assert agreement(angle)[0] >= agreement(SCAN[::50]).max() - 1e-12


@settings(deadline=None)
@given(st.floats(0.01, 2), st.floats(0.01, 2), st.floats(0, 5))
def test_two_links_close_the_triangle_or_come_nearest(first, second, reach):
    angle = two_link(first, second, np.array([reach]))[0]
    assert 0 <= angle <= np.pi
    span = abs(first + second * np.exp(1j * angle))
    nearest = np.clip(reach, abs(first - second), first + second)
    assert abs(span - nearest) < 1e-7
