"""The clock: increasing, at rest with finite jerk at both ends, and the spline it claims to be."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.interpolate import BSpline

from pathplan.timing.clock import _taylor, make_clock
from pathplan.timing.coarse import coarse_timing
from tests.timing.cases import CAST, motion_of


@pytest.fixture(params=CAST)
def clock_and_coarse(request):
    coarse = coarse_timing([motion_of(CAST[request.param])])[0]
    return make_clock(coarse, 0.1 * coarse.time[-1]), coarse


def test_increasing_and_at_rest_with_finite_jerk_at_both_ends(clock_and_coarse):
    clock, coarse = clock_and_coarse
    tau = np.linspace(0.0, clock.duration, 5001)
    s, speed, acceleration, jerk = clock.derivatives(tau)
    assert np.all(np.diff(s) > 0)
    np.testing.assert_allclose(s[[0, -1]], [0.0, coarse.s[-1]], atol=1e-12 * coarse.s[-1])
    scale = coarse.s[-1] / clock.duration ** np.arange(4)
    assert np.abs(speed[[0, -1]]).max() < 1e-9 * scale[1]
    assert np.abs(acceleration[[0, -1]]).max() < 1e-7 * scale[2]
    assert np.all(jerk[[0, -1]] > 0.1 * scale[3])


def test_inverse(clock_and_coarse):
    clock, coarse = clock_and_coarse
    s = np.linspace(0.02, 0.98, 97) * coarse.s[-1]
    np.testing.assert_allclose(clock.derivatives(clock.inverse(s), 0)[0], s, rtol=1e-13)


def test_local_powers_are_those_of_scipys_spline():
    knots = np.linspace(0.0, 3.0, 13)
    t = np.concatenate([np.zeros(5), knots, np.full(5, 3.0)])
    control = np.cumsum(np.random.default_rng(0).uniform(0, 1, len(t) - 6))
    spline = BSpline(t, control, 5)
    for power, row in zip(range(5, -1, -1), _taylor(t, control), strict=True):
        factorial = (1, 1, 2, 6, 24, 120)[power]
        np.testing.assert_allclose(row, spline(knots[:-1], nu=power) / factorial, rtol=1e-12, atol=1e-12)
