"""Canonical subproblems against a dense scan of the angle."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.arm.subproblems import (
    angle_about,
    planar,
    rotate,
    rotation_about,
    trigonometric_roots,
    two_angles,
    two_circles,
    two_link,
    two_turns,
    wrapped,
)

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


@settings(deadline=None)
@given(st.lists(st.floats(-3, 3), min_size=5, max_size=5))
def test_trigonometric_roots_are_where_the_polynomial_changes_sign(coefficients):
    c0, c1, s1, c2, s2 = (np.array([value]) for value in coefficients)

    def value(angle):
        return c0 + c1 * np.cos(angle) + s1 * np.sin(angle) + c2 * np.cos(2 * angle) + s2 * np.sin(2 * angle)

    roots = trigonometric_roots(c0, c1, s1, c2, s2)[:, 0]
    assert np.isfinite(roots).all()
    scan = value(SCAN)
    size = max(np.abs(scan).max(), 1e-300)
    for k in np.flatnonzero(scan[:-1] * scan[1:] < 0):
        assert np.abs(wrapped(roots - SCAN[k])).min() < 2 * STEP or np.abs(scan[k : k + 2]).max() < 1e-6 * size


@settings(deadline=None)
@given(st.lists(st.floats(-2, 2), min_size=8, max_size=8), st.floats(-3, 3), st.floats(-3, 3))
def test_two_circles_find_the_angles_they_were_made_from(entries, angle_1, angle_2):
    first, second = np.array(entries[:4]).reshape(2, 2), np.array(entries[4:]).reshape(2, 2)
    if min(abs(np.linalg.det(first)), abs(np.linalg.det(second))) < 1e-2:
        return
    circle = [np.array([np.cos(angle), np.sin(angle)]) for angle in (angle_1, angle_2)]
    right = (first @ circle[0] + second @ circle[1])[:, None]
    found_1, found_2 = two_circles(first, second, right)
    left = first @ np.stack([np.cos(found_1[:, 0]), np.sin(found_1[:, 0])])
    left = left + second @ np.stack([np.cos(found_2[:, 0]), np.sin(found_2[:, 0])])
    apart = np.hypot(wrapped(found_1[:, 0] - angle_1), wrapped(found_2[:, 0] - angle_2))
    assert apart.min() < 1e-4  # where two answers fall together they are sqrt(eps) wide
    assert np.abs(left[:, apart.argmin()] - right[:, 0]).max() < 1e-6


@settings(deadline=None)
@given(axes, axes, vectors, st.floats(-3, 3), st.floats(-3, 3))
def test_two_turns_find_the_angles_they_were_made_from(first, second, start, angle_1, angle_2):
    if np.linalg.norm(np.cross(first, second)) < 0.1 or np.linalg.norm(np.cross(second, start)) < 0.1:
        return
    end = rotate(first, np.array([angle_1]), rotate(second, np.array([angle_2]), start[:, None]))
    one, two = two_turns(first, second, start[:, None], end)
    for k in range(2):
        again = rotate(first, one[k], rotate(second, two[k], start[:, None]))
        np.testing.assert_allclose(again, end, atol=1e-7)
    assert np.abs(wrapped(two[:, 0] - angle_2)).min() < 1e-6


def test_two_links_of_any_length_reach_a_point():
    r = np.random.default_rng(1)
    axis = np.array([0, 0, 1.0])
    first, second = np.array([0.3, 0.1, 0]), np.concatenate([r.uniform(-0.4, 0.4, (2, 50)), np.zeros((1, 50))])
    q1, q2 = r.uniform(-3, 3, (2, 50))
    tip = np.broadcast_to(first[:, None], (3, 50)) + rotate(axis, q2, second)
    target = rotate(axis, q1, tip)
    one, two = planar(axis, first, second[:, None], target[:, None], np.array([1.0, -1.0])[:, None])
    gap = np.abs(wrapped(one - q1)) + np.abs(wrapped(two - q2))
    assert gap.min(axis=0).max() < 1e-7
