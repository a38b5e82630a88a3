"""Lines, arcs and their derivatives against scipy's Slerp, independent circle formulas and finite differences."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation, Slerp

from pathplan.path.geometry import (
    AMBIGUOUS,
    DegenerateArc,
    HalfTurn,
    Segments,
    arc_about,
    arc_through,
    line,
    spatial_twists,
    superpose,
)
from pathplan.path.rotations import exponential, rotation_vector

LENGTH = 0.8  # m, characteristic length of some arm
ZERO = np.zeros(1, dtype=int)


def random_pose(seed: int) -> np.ndarray:
    r = np.random.default_rng(seed)
    out = np.eye(4)
    out[:3, :3] = Rotation.random(rng=r).as_matrix()
    out[:3, 3] = r.uniform(-1, 1, 3)
    return out


def turned(start: np.ndarray, vector: np.ndarray, shift: np.ndarray) -> np.ndarray:
    out = start.copy()
    out[:3, :3] = Rotation.from_rotvec(vector).as_matrix() @ start[:3, :3]
    out[:3, 3] += shift
    return out


def poses_along(segment: Segments, shares: np.ndarray) -> np.ndarray:
    return segment.poses(np.zeros(len(shares), dtype=int), shares * segment.length[0])


@pytest.mark.parametrize("seed", range(8))
def test_line_is_straight_and_turns_like_slerp(seed: int) -> None:
    start, end = random_pose(seed), random_pose(seed + 100)
    shares = np.linspace(0, 1, 41)
    poses = poses_along(line(start, end, LENGTH), shares)
    expected = start[:3, 3] + shares[:, None] * (end[:3, 3] - start[:3, 3])
    np.testing.assert_allclose(poses[:, :3, 3], expected, atol=1e-14)
    slerp = Slerp([0, 1], Rotation.from_matrix([start[:3, :3], end[:3, :3]]))
    np.testing.assert_allclose(poses[:, :3, :3], slerp(shares).as_matrix(), atol=1e-13)


def test_length_of_a_step_counts_distance_and_angle() -> None:
    start = random_pose(1)
    segment = line(start, turned(start, np.array([0, 0, 0.6]), np.array([0.3, 0, 0])), LENGTH)
    assert segment.length[0] == pytest.approx(np.hypot(0.3 / LENGTH, 0.6), rel=1e-12)
    turn_only = line(start, turned(start, np.array([0.2, 0, 0.0]), np.zeros(3)), LENGTH)
    assert turn_only.length[0] == pytest.approx(0.2, rel=1e-12)
    assert turn_only.path_length[0] == 0.0


@pytest.mark.parametrize("seed", range(8))
def test_arc_runs_on_the_circle_of_its_three_points(seed: int) -> None:
    r = np.random.default_rng(seed)
    start, end, via = random_pose(seed), random_pose(seed + 50), r.uniform(-1, 1, 3)
    poses = poses_along(arc_through(start, via, end, LENGTH), np.linspace(0, 1, 2001))
    points = poses[:, :3, 3]
    # The centre is as far from all three points and lies in their plane: three linear equations.
    a, b, c = start[:3, 3], via, end[:3, 3]
    normal = np.cross(b - a, c - a)
    matrix = np.array([2 * (b - a), 2 * (c - a), normal])
    centre = np.linalg.solve(matrix, [b @ b - a @ a, c @ c - a @ a, normal @ a])
    radius = np.linalg.norm(a - centre)
    np.testing.assert_allclose(np.linalg.norm(points - centre, axis=1), radius, rtol=1e-11)
    assert np.abs((points - a) @ normal).max() < 1e-11 * np.linalg.norm(normal) * max(1, radius)
    np.testing.assert_allclose(points[[0, -1]], [a, c], atol=1e-11)
    assert np.linalg.norm(points - via, axis=1).min() < 2e-3 * radius * 2 * np.pi
    steps = np.linalg.norm(np.diff(points, axis=0), axis=1)
    np.testing.assert_allclose(steps, steps[0], rtol=1e-8)
    slerp = Slerp([0, 1], Rotation.from_matrix([start[:3, :3], end[:3, :3]]))
    np.testing.assert_allclose(poses[:, :3, :3], slerp(np.linspace(0, 1, 2001)).as_matrix(), atol=1e-12)


@pytest.mark.parametrize("along", [False, True])
@pytest.mark.parametrize("degrees", [-90.0, 40.0, 360.0, 800.0])
def test_arc_by_centre_and_angle(along: bool, degrees: float) -> None:
    start = random_pose(3)
    axis = np.array([1.0, -2.0, 0.5])
    unit = axis / np.linalg.norm(axis)
    centre = start[:3, 3] - 0.2 * np.cross(unit, [0.3, 1.0, 0.2]) / np.linalg.norm(np.cross(unit, [0.3, 1.0, 0.2]))
    shares = np.linspace(0, 1, 33)
    segment = arc_about(start, centre, axis, np.deg2rad(degrees), LENGTH, along=along)
    poses = poses_along(segment, shares)
    turns = Rotation.from_rotvec(np.deg2rad(degrees) * shares[:, None] * unit).as_matrix()
    np.testing.assert_allclose(poses[:, :3, 3], centre + turns @ (start[:3, 3] - centre), atol=1e-13)
    expected = turns @ start[:3, :3] if along else np.tile(start[:3, :3], (33, 1, 1))
    np.testing.assert_allclose(poses[:, :3, :3], expected, atol=1e-13)
    assert segment.path_length[0] == pytest.approx(0.2 * abs(np.deg2rad(degrees)))


def motions() -> list[Segments]:
    start = random_pose(5)
    end = turned(start, np.array([0.4, -0.8, 0.3]), np.array([0.2, 0.1, -0.3]))
    return [
        line(start, end, LENGTH),
        arc_through(start, start[:3, 3] + [0.2, -0.1, 0.1], end, LENGTH),
        arc_about(start, start[:3, 3] + [0.1, 0.0, 0.0], np.array([0.0, 0.6, 0.8]), 2.0, LENGTH, along=True),
    ]


def finite_difference_twists(position, rotation, s: float) -> np.ndarray:
    """(3, 6) spatial twist and two derivatives by central differences of eighth order."""
    weights = np.array([1 / 280, -4 / 105, 1 / 5, -4 / 5, 0, 4 / 5, -1 / 5, 4 / 105, -1 / 280])
    h = 4e-3

    def derivative(f, at: float) -> np.ndarray:
        return sum(w * f(at + k * h) for w, k in zip(weights, range(-4, 5), strict=True)) / h

    def twist(at: float) -> np.ndarray:
        rate = derivative(rotation, at) @ rotation(at).T
        w = np.array([rate[2, 1], rate[0, 2], rate[1, 0]])
        return np.concatenate([derivative(position, at) - np.cross(w, position(at)), w])

    return np.array([twist(s), derivative(twist, s), derivative(lambda at: derivative(twist, at), s)])


@pytest.mark.parametrize("which", [0, 1, 2])
def test_twists_agree_with_finite_differences(which: int) -> None:
    segment = motions()[which]
    s = 0.4 * segment.length

    def at(value: float) -> np.ndarray:
        return segment.poses(ZERO, np.array([value]))[0]

    expected = finite_difference_twists(lambda v: at(v)[:3, 3], lambda v: at(v)[:3, :3], float(s[0]))
    found = spatial_twists(segment.jets(ZERO, s))[0]
    for order, tolerance in enumerate((1e-10, 1e-8, 1e-6)):
        np.testing.assert_allclose(found[order], expected[order], atol=tolerance)


def test_superposed_motions_agree_with_finite_differences() -> None:
    first, second = motions()[1], motions()[2]
    corner = first.poses(ZERO, first.length)
    second = replace(second, rotation=corner[:, :3, :3])
    shift = corner[:, :3, 3] - second.poses(ZERO, np.zeros(1))[:, :3, 3]
    second = replace(second, base=second.base + shift)

    def rates(u: float) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Two ways to run along the parts, with their derivatives by u."""
        one = first.length + np.array([-0.3 + 0.5 * u + 0.2 * u**2])
        two = np.array([0.1 + 0.2 * u + 0.4 * u**3])
        return one, np.array([[0.5 + 0.4 * u], [0.4], [0.0]]), two, np.array([[0.2 + 1.2 * u**2], [2.4 * u], [2.4]])

    def jets(u: float):
        one, one_rates, two, two_rates = rates(u)
        return superpose(first.jets(ZERO, one, one_rates), second.jets(ZERO, two, two_rates), corner)

    expected = finite_difference_twists(lambda u: jets(u).position[0, 0], lambda u: jets(u).rotation[0], 0.35)
    found = spatial_twists(jets(0.35))[0]
    for order, tolerance in enumerate((1e-10, 1e-8, 1e-6)):
        np.testing.assert_allclose(found[order], expected[order], atol=tolerance)


START = np.eye(4)
DEGENERATE = {
    "via and start of the arc coincide": ([0, 0, 0], [0.2, 0, 0]),
    "via and target of the arc coincide": ([0.2, 0, 0], [0.2, 0, 0]),
    "start and target of the arc coincide; a full circle is given by centre, axis and angle": ([0.1, 0, 0], [0, 0, 0]),
    "start, via and target of the arc lie on one line, expected three points of a circle": ([0.1, 0, 0], [0.2, 0, 0]),
}


@pytest.mark.parametrize("message", DEGENERATE)
def test_points_that_make_no_circle(message: str) -> None:
    via, end = DEGENERATE[message]
    with pytest.raises(DegenerateArc, match=f"^{re.escape(message)}$"):
        arc_through(START, np.array(via, dtype=float), turned(START, np.zeros(3), np.array(end, dtype=float)), LENGTH)


CENTRES = {
    "axis of the arc is zero, expected a direction": ([0.1, 0, 0], [0, 0, 0]),
    "centre of the arc is where it starts, expected a radius": ([0, 0, 0], [0, 0, 1]),
    "start lies 30 mm off the plane of the circle (through centre, square to axis)": ([0.1, 0, 0.03], [0, 0, 1]),
}


@pytest.mark.parametrize("message", CENTRES)
def test_centres_that_make_no_circle(message: str) -> None:
    centre, axis = (np.array(v, dtype=float) for v in CENTRES[message])
    with pytest.raises(DegenerateArc, match=f"^{re.escape(message)}$"):
        arc_about(START, centre, axis, 1.0, LENGTH, along=False)


def test_half_turn_is_refused_and_just_less_is_not() -> None:
    start = random_pose(9)
    axis = np.array([0.6, 0.0, 0.8])
    with pytest.raises(
        HalfTurn, match=r"^the tool would turn by 180 deg, which has no shortest way: give a pose between$"
    ):
        line(start, turned(start, axis * (np.pi - 0.5 * AMBIGUOUS), np.zeros(3)), LENGTH)
    segment = line(start, turned(start, axis * (np.pi - 2 * AMBIGUOUS), np.zeros(3)), LENGTH)
    np.testing.assert_allclose(segment.turn[0] / np.linalg.norm(segment.turn[0]), axis, atol=1e-9)


@given(
    st.lists(st.floats(-1, 1), min_size=3, max_size=3),
    st.sampled_from([0, 1e-12, 1e-9, 1e-7, 1e-3, 1, 3, np.pi - 1e-7, np.pi]),
)
def test_rotation_vectors_agree_with_scipy(direction: list[float], angle: float) -> None:
    vector = np.array(direction)
    size = np.linalg.norm(vector)
    vector = vector / size * angle if size > 1e-3 else np.array([0, 0, angle])
    matrix = Rotation.from_rotvec(vector).as_matrix()
    np.testing.assert_allclose(exponential(vector[None])[0], matrix, atol=4e-16)
    found = rotation_vector(matrix[None])[0]
    expected = Rotation.from_matrix(matrix).as_rotvec()
    same = min(np.abs(found - expected).max(), np.abs(found + expected).max() if angle > 3.14 else np.inf)
    assert same < 1e-15 + 4e-15 * angle if angle < 3 else same < 1e-14
