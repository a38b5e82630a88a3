"""Estimates of the least time. Referees: closed forms of trapezoidal profiles, the coarse timing of curved paths."""

from __future__ import annotations

import numpy as np
import pytest

from pathplan.path.fastest import least_time
from pathplan.timing.coarse import coarse_timing
from tests.timing.cases import motion_of, wavy


def crowded(length: float, count: int) -> np.ndarray:
    """Samples that crowd at both ends, where the speed is zero."""
    return length * (0.5 - 0.5 * np.cos(np.pi * np.linspace(0.0, 1.0, count)))


@pytest.mark.parametrize("length", [0.1, 0.5, 3.0])
def test_a_straight_path_takes_the_time_of_a_trapezoid(length: float) -> None:
    """v = 1, a = 2: d / v + v / a from d = v^2 / a on, 2 sqrt(d / a) below."""
    s = crowded(length, 400)
    time = least_time(s, np.column_stack([s, 0.3 * s]), np.array([1.0, 1.0]), np.array([2.0, 2.0]))
    assert time == pytest.approx(length + 0.5 if length >= 0.5 else 2 * np.sqrt(length / 2), rel=2e-3)


@pytest.mark.parametrize("seed", range(4))
def test_a_curved_path_takes_little_more_than_the_optimum(seed: int) -> None:
    motion = motion_of(wavy(seed, 7))
    s = np.linspace(0.0, motion.path.length, 600)
    time = least_time(s, motion.path(s) @ motion.matrix.T, motion.velocity[:, 1], motion.acceleration[:, 1])
    optimum = coarse_timing([motion])[0].time[-1]
    assert optimum < time < 1.25 * optimum
