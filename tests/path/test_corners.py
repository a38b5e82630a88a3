"""The ramp, the room on the steps and the shape of a corner."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pathplan.path.corners import LEAST_REST, fit_into_steps, incoming, outgoing, ramp
from pathplan.path.geometry import line, superpose

unit = st.floats(-1, 1)
point = st.tuples(*[st.floats(-1, 1)] * 3).map(np.array)


@given(unit)
def test_ramps_add_up(u: float) -> None:
    at = np.array([u, -u])
    f, f1, f2, f3 = ramp(at)
    assert f[0] - f[1] == pytest.approx(u, abs=1e-15)
    assert f[0] + f[1] <= 1 + 1e-15
    assert f1[0] + f1[1] == pytest.approx(1, abs=1e-15)
    assert f2[0] >= 0 and f3[0] == -1.5 * u


def test_ramp_meets_rest_and_uniform_motion() -> None:
    f, f1, f2, _ = ramp(np.array([-1.0, 1.0]))
    np.testing.assert_array_equal(f, [0, 1])
    np.testing.assert_array_equal(f1, [0, 1])
    np.testing.assert_array_equal(f2, [0, 0])


def test_ramp_derivatives_agree_with_finite_differences() -> None:
    u, h = np.linspace(-0.9, 0.9, 7), 1e-5
    values = ramp(u)
    for order in range(3):
        difference = (ramp(u + h)[order] - ramp(u - h)[order]) / (2 * h)
        np.testing.assert_allclose(values[order + 1], difference, atol=1e-9)


@given(st.lists(st.tuples(st.floats(0.01, 5), st.floats(0, 8)), min_size=2, max_size=12))
def test_corners_fit_into_their_steps(pairs: list[tuple[float, float]]) -> None:
    length = np.array([pair[0] for pair in pairs])
    asked = np.array([pair[1] for pair in pairs[:-1]])
    used = fit_into_steps(asked, length)
    both = np.concatenate([[0.0], used]) + np.concatenate([used, [0.0]])
    assert (both <= length * (1 + 1e-12)).all()
    assert (used <= asked).all() and (used >= 0).all()
    fair = np.minimum(asked, np.minimum(length[:-1], length[1:]) / 2)
    assert (used >= fair - 1.01 * LEAST_REST * np.maximum(length[:-1], length[1:])).all()
    # What is not granted is truly not there: one of the two steps is full.
    full = both >= length * (1 - 1.01 * LEAST_REST)
    assert ((used == asked) | full[:-1] | full[1:]).all()


def test_what_one_corner_does_not_need_the_other_keeps() -> None:
    np.testing.assert_allclose(fit_into_steps(np.array([0.2, 0.9]), np.array([3.0, 1.0, 3.0])), [0.2, 0.8])
    np.testing.assert_allclose(fit_into_steps(np.array([0.8, 0.9]), np.array([3.0, 1.0, 3.0])), [0.5, 0.5])
    # The first corner is held to 0.1 by its other step, which leaves 0.9 of the middle one.
    np.testing.assert_allclose(fit_into_steps(np.array([0.8, 1.2]), np.array([0.1, 1.0, 3.0])), [0.1, 0.9])


def corner_points(a: np.ndarray, b: np.ndarray, c: np.ndarray, delta: float, u: np.ndarray) -> np.ndarray:
    """Positions of the corner between lines a-b and b-c, and the exact corner tangents."""
    poses = [np.eye(4) for _ in range(3)]
    for pose, p in zip(poses, (a, b, c), strict=True):
        pose[:3, 3] = p
    one, two = line(poses[0], poses[1], 1.0), line(poses[1], poses[2], 1.0)
    k = np.zeros(len(u), dtype=int)
    back, back_rates = incoming(u, np.full(len(u), delta))
    on, on_rates = outgoing(u, np.full(len(u), delta))
    corner = np.tile(poses[1], (len(u), 1, 1))
    jets = superpose(one.jets(k, one.length + back, back_rates), two.jets(k, on, on_rates), corner)
    return jets.position


def test_straight_through_corner_reproduces_the_line() -> None:
    u = np.linspace(-1, 1, 41)
    a, b, c = np.array([0.1, 0.2, 0.3]), np.array([0.3, 0.2, 0.3]), np.array([0.8, 0.2, 0.3])
    position = corner_points(a, b, c, 0.15, u)
    np.testing.assert_allclose(position[0], b + np.outer(0.15 * u, [1, 0, 0]), atol=1e-16)
    np.testing.assert_allclose(position[1], np.tile([1.0, 0, 0], (41, 1)), atol=1e-15)
    np.testing.assert_allclose(position[2:], 0, atol=1e-13)


@given(point, point, point, st.floats(0.05, 1.0))
def test_corner_between_lines_stays_in_its_triangle(a: np.ndarray, b: np.ndarray, c: np.ndarray, part: float) -> None:
    one, two = a - b, c - b
    sizes = np.linalg.norm(one), np.linalg.norm(two)
    if min(sizes) < 0.05 or np.linalg.norm(np.cross(one, two)) < 1e-3:
        return
    delta = part * min(sizes)
    position = corner_points(a, b, c, delta, np.linspace(-1, 1, 101))[0] - b
    # Coordinates along the two legs of the triangle entry, corner, exit.
    legs = np.stack([one / sizes[0], two / sizes[1]], axis=1) * delta
    share, _, _, _ = np.linalg.lstsq(legs, position.T, rcond=None)
    np.testing.assert_allclose(legs @ share, position.T, atol=1e-12)
    assert share.min() > -1e-9 and share.sum(axis=0).max() < 1 + 1e-9
