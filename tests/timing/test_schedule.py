"""`schedule`: limits kept everywhere, at rest at both ends, near the least time there is."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import pathplan
from pathplan.path.joint import JointPath
from tests.timing.cases import CAST, Case, seven_phases, straight, wavy


def timed(case: Case) -> pathplan.Timing:
    return pathplan.schedule(case.path, velocity=case.velocity, acceleration=case.acceleration, jerk=case.jerk)


def largest_share(case: Case, timing: pathplan.Timing, samples: int = 20001) -> float:
    t = np.linspace(0.0, timing.duration, samples)
    return max(np.abs(timing(t, k) / limit).max() for k, limit in enumerate(case[1:], start=1))


@pytest.mark.parametrize("name", CAST)
def test_limits_hold_and_ends_rest(name):
    case = CAST[name]
    timing = timed(case)
    assert largest_share(case, timing) <= 1 + 1e-6
    ends = np.array([0.0, timing.duration])
    np.testing.assert_allclose(timing(ends), case.path([0.0, case.path.length]), atol=1e-12)
    scale = case.velocity.max() * timing.duration
    for derivative in (1, 2):
        assert np.abs(timing(ends, derivative)).max() <= 1e-6 * max(scale, 1.0)


def test_a_peak_at_the_very_end_of_a_cell_is_seen():
    """Of a few hundred random paths this was the one whose jerk peaked between the last two points looked at."""
    rng = np.random.default_rng(23)
    joints, points = int(rng.integers(1, 4)), int(rng.integers(3, 7))
    path = JointPath.through(rng.uniform(-1, 1, (points, joints)))
    limits = (rng.uniform(low, high, joints) for low, high in ((1, 3), (5, 30), (50, 1500)))
    case = Case(path, *limits)
    assert largest_share(case, timed(case), samples=100001) <= 1 + 1e-6


@pytest.mark.parametrize("name", CAST)
def test_derivatives_are_those_of_the_positions(name):
    """Positions integrated back from each derivative by Simpson's rule."""
    case = CAST[name]
    timing = timed(case)
    t = np.linspace(0.0, timing.duration, 40001)
    for k in range(3):
        lower, upper = timing(t[::2], k), timing(t, k + 1)
        step = t[2] - t[0]
        integral = step / 6 * (upper[:-2:2] + 4 * upper[1:-1:2] + upper[2::2])
        # jerk jumps by at most twice its limit, and Simpson's rule loses an order at every jump
        tolerance = 2 * case.jerk * step ** (3 - k) + 1e-11
        assert np.all(np.abs(np.diff(lower, axis=0) - integral) <= tolerance)


@pytest.mark.parametrize("name", CAST)
@pytest.mark.parametrize("cycle", [0.004, 0.001])
def test_differences_of_rows_keep_the_limits(name, cycle):
    """The numeric contract: n-th difference over cycle^n, padded with rest, within the limit and rounding."""
    case = CAST[name]
    timing = timed(case)
    rows = timing(np.arange(int(np.ceil(timing.duration / cycle)) + 1) * cycle)
    padded = np.concatenate([np.repeat(rows[:1], 4, axis=0), rows, np.repeat(rows[-1:], 4, axis=0)])
    eps = np.finfo(float).eps * max(1.0, np.abs(rows).max())
    for n, limit in enumerate((case.velocity, case.acceleration, case.jerk), start=1):
        difference = np.abs(np.diff(padded, n, axis=0)).max(axis=0) / cycle**n
        assert np.all(difference <= limit * (1 + 1e-6) + 8 * eps / cycle**n)


@settings(max_examples=25, deadline=None)
@given(*(st.floats(low, high) for low, high in ((-4, 1.5), (-1, 1), (-0.5, 2), (0.5, 3.5))))
def test_straight_lines_take_the_time_of_the_seven_phases(distance, velocity, acceleration, jerk):
    """Closed form: Biagiotti & Melchiorri 2008, sec. 3.4. Contract: within 0.2 %."""
    numbers = [10.0**x for x in (distance, velocity, acceleration, jerk)]
    duration = timed(straight([numbers[0]], *numbers[1:])).duration
    assert 1 - 1e-9 <= duration / seven_phases(*numbers) <= 1.002


def test_six_joints_together_take_the_time_of_the_slowest():
    """Data: Liu, Lai & Wu 2013 (after Lin, Chang & Luh 1983); times by the closed form: checks in degrees."""
    start, end = [-10, 20, 15, 150, 30, 120], [55, 35, 30, 10, 70, 25]
    v, a, j = [100, 95, 100, 150, 130, 110], [45, 40, 75, 70, 90, 80], [60, 60, 55, 70, 75, 70]
    alone = [seven_phases(abs(e - s), *limits) for s, e, *limits in zip(start, end, v, a, j, strict=True)]
    np.testing.assert_allclose(alone, [3.268, 2.000, 2.059, 4.000, 2.575, 3.515], atol=6e-4)
    timing = timed(straight(np.deg2rad(np.subtract(end, start)), *np.deg2rad([v, a, j])))
    assert timing.duration == pytest.approx(4.0, rel=2e-3)
    assert timing.duration >= 4.0 - 1e-9


def test_limits_of_both_sides_are_told_apart():
    """A joint that may brake only half as hard as it may push."""
    case = straight([1.0], 1.5, 8.0, 100.0)
    timing = pathplan.schedule(case.path, velocity=1.5, acceleration=[[-4.0, 8.0]], jerk=100.0)
    t = np.linspace(0, timing.duration, 20001)
    acceleration = timing(t, 2)
    assert 7.99 <= acceleration.max() <= 8.000001 and -4.000001 <= acceleration.min() <= -3.99
    back = pathplan.schedule(
        JointPath.from_pieces([0.0, 1.0], [[[-1.0]], [[1.0]]]), velocity=1.5, acceleration=[[-8.0, 4.0]], jerk=100.0
    )
    assert back.duration == pytest.approx(timing.duration, rel=1e-4)


def test_scaling_limits_scales_time():
    """Pace k: speeds by k, accelerations by k^2, jerks by k^3 (Biagiotti & Melchiorri 2008, sec. 5.2)."""
    case, k = wavy(3, 7), 0.6
    slow = Case(case.path, case.velocity * k, case.acceleration * k**2, case.jerk * k**3)
    assert timed(slow).duration == pytest.approx(timed(case).duration / k, rel=1e-3)


def test_looser_limits_are_never_slower():
    case = wavy(4, 6)
    base = timed(case).duration
    for k in range(1, 4):
        limits = [x * (1.3 if i == k else 1.0) for i, x in enumerate(case[1:], start=1)]
        assert timed(Case(case.path, *limits)).duration <= base * 1.001


def test_before_and_after_the_arm_rests():
    case = CAST["wavy"]
    timing = timed(case)
    outside = [-1.0, timing.duration + 1.0]
    np.testing.assert_allclose(timing(outside), case.path([0.0, case.path.length]), atol=1e-12)
    for derivative in (1, 2, 3):
        assert not timing(outside, derivative).any()


@pytest.mark.parametrize(
    ("limits", "message"),
    [
        ({"velocity": 0.0}, "velocity: joint 1: expected finite limits on both sides of zero, got [-0.0, 0.0]"),
        ({"jerk": np.inf}, "jerk: joint 1: expected finite limits on both sides of zero, got [-inf, inf]"),
        (
            {"acceleration": [1.0, 2.0]},
            "acceleration: expected one number, 3 numbers or 3 pairs low, high, got shape (2,)",
        ),
        (
            {"acceleration": [1.0, -2.0, 3.0]},
            "acceleration: joint 2: expected finite limits on both sides of zero, got [2.0, -2.0]",
        ),
        ({"velocity": np.nan}, "velocity: joint 1: expected finite limits on both sides of zero, got [nan, nan]"),
    ],
)
def test_bad_limits(limits, message):
    path = straight([1.0, 2.0, 3.0], 1, 1, 1).path
    with pytest.raises(pathplan.InputError) as caught:
        pathplan.schedule(path, **{"velocity": 1.0, "acceleration": 1.0, "jerk": 1.0, **limits})
    assert str(caught.value) == message


def test_only_joint_paths_are_timed():
    with pytest.raises(pathplan.InputError, match="schedule: expected a JointPath, got list"):
        pathplan.schedule([[0.0], [1.0]], velocity=1, acceleration=1, jerk=1)
    timing = timed(CAST["one joint"])
    with pytest.raises(pathplan.InputError, match="expected a derivative of 0, 1, 2 or 3, got 4"):
        timing(0.0, 4)
