"""Caps on the tool, coupled rows, and many stretches at once."""

from __future__ import annotations

import numpy as np
import pytest

from pathplan.timing.bound import bound_durations
from pathplan.timing.motion import Cap, Motion, two_sided
from pathplan.timing.solve import time_motions
from tests.timing.cases import CAST, Case, motion_of, seven_phases, straight, wavy


def identity_tool(q, q1, q2):
    """A gantry: the tool is where the first three joints are."""
    return q1[:, :3], q2[:, :3]


def capped(case: Case, *caps: Cap) -> Motion:
    return motion_of(case, caps=caps, tool=identity_tool)


def tool_rates(stretch, samples=20001):
    q = stretch.derivatives(np.linspace(0, stretch.duration, samples))
    return (np.linalg.norm(q[k][:, :3], axis=1) for k in (1, 2))


def test_tool_speed_cap_is_reached_and_kept():
    case = straight([0.6, 0.8, 0.0], 5.0, 20.0, 300.0)
    stretch = time_motions([capped(case, Cap(0.0, 1.0, speed=0.5))])[0]
    speed, _ = tool_rates(stretch)
    assert 0.4999 <= speed.max() <= 0.5000001
    # along the line: the slowest joint (0.8 of the way) caps acceleration and jerk, the tool cap the speed
    assert stretch.duration == pytest.approx(seven_phases(1.0, 0.5, 25.0, 375.0), rel=2e-3)


def test_tool_acceleration_cap_is_a_norm():
    case = straight([0.6, 0.8, 0.0], 5.0, 20.0, 300.0)
    stretch = time_motions([capped(case, Cap(0.0, 1.0, acceleration=3.0))])[0]
    _, acceleration = tool_rates(stretch)
    assert 2.999 <= acceleration.max() <= 3.000001
    assert stretch.duration == pytest.approx(seven_phases(1.0, 6.25, 3.0, 375.0), rel=2e-3)


def test_caps_hold_on_curves_and_only_where_they_apply():
    case = wavy(7, 8)
    half = case.path.length / 2
    free = time_motions([motion_of(case)])[0].duration
    both = time_motions([capped(case, Cap(0.0, half, speed=0.4, acceleration=2.0))])[0]
    t = np.linspace(0, both.duration, 20001)
    speed, acceleration = tool_rates(both)
    inside = both.parameter(t) <= half
    assert speed[inside].max() <= 0.4000001 and acceleration[inside].max() <= 2.000001
    assert speed[~inside].max() > 0.8
    assert both.duration > free
    assert bound_durations([both.motion])[0] <= both.duration


def test_coupled_rows_limit_the_motor():
    """Two joints driven by motors at q1 and q1 + q2: the second motor must not exceed its limits either."""
    case = straight([1.0, 1.0], 2.0, 10.0, 100.0)
    matrix = np.array([[1.0, 0.0], [0.0, 1.0], [1.0, 1.0]])
    limits = (two_sided([v, v, v], 3, "limit") for v in (2.0, 10.0, 100.0))
    stretch = time_motions([Motion(case.path, matrix, *limits)])[0]
    assert stretch.duration == pytest.approx(seven_phases(2.0, 2.0, 10.0, 100.0), rel=2e-3)
    t = np.linspace(0, stretch.duration, 20001)
    for k, limit in ((1, 2.0), (2, 10.0), (3, 100.0)):
        assert np.abs(stretch.derivatives(t)[k] @ matrix.T).max() <= limit * (1 + 1e-6)


def test_stretches_together_are_timed_as_alone():
    cases = list(CAST.values())
    together = [stretch.duration for stretch in time_motions([motion_of(case) for case in cases])]
    alone = [time_motions([motion_of(case)])[0].duration for case in cases]
    np.testing.assert_allclose(together, alone, rtol=2e-3)


def test_no_stretches():
    assert time_motions([]) == []
